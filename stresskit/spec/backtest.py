"""The section ``analyses.backtest``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Name, PeriodText, Strict


class Backtest(Strict):
    """Past dates at which the study is done again with what was known then."""

    cutoffs: tuple[PeriodText, ...] = Field(
        (),
        max_length=40,
        description="last periods that are known; default: up to five ends of years, evenly spread, from the first with three "
        "years of loans before it to the last with a year after it",
    )
    steps: Annotated[int, Field(ge=1, le=600)] | None = Field(
        None, description="model periods compared after each cut-off; default: as far as the data reach"
    )
    publication: Annotated[int, Field(ge=0, le=24)] = Field(
        0,
        description="macro periods that pass before a value is published: the last ones before a cut-off are not used by its fit",
    )
    vintages: dict[PeriodText, Name] = Field(
        default_factory=dict,
        description="cut-off -> macro file as it was published then, laid out like macro.file; the fit of that date reads it",
    )
    scenarios_then: dict[PeriodText, Annotated[tuple[Name, ...], Field(min_length=1)]] = Field(
        default_factory=dict,
        description="cut-off -> scenario files as they were written then; each is projected beside what came",
    )

    when_separated: Literal["pool", "as_stated"] = Field(
        "pool",
        description="a past date has fewer defaults than today. pool: levels without any by then are joined with the reference "
        "where the study itself would refuse the fit, and named; as_stated: such a date is not possible",
    )

    @model_validator(mode="after")
    def _dates(self) -> Backtest:
        for i, text in enumerate(self.cutoffs):
            if text in self.cutoffs[:i]:
                raise ErrorAt(f"cut-off {text} is stated twice", "cutoffs", i)
        for key in ("vintages", "scenarios_then"):
            for text in getattr(self, key):
                if text not in self.cutoffs:
                    listed = ", ".join(self.cutoffs) or "none is stated"
                    raise ErrorAt(f"{text} is no cut-off (cutoffs: {listed})", key, text)
        return self
