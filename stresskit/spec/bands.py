"""The section ``analyses.bands``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Name, Strict

Source = Literal["coefficients", "periods", "macro", "lgd"]
#: In the order in which they are told.
SOURCES: tuple[Source, ...] = ("coefficients", "periods", "macro", "lgd")


class Bands(Strict):
    """Draws of what is uncertain: coefficients, shocks of calendar periods, macro paths, LGD."""

    scenarios: tuple[Name, ...] | None = Field(
        None,
        description="scenarios to draw around; default: all. The reference scenario is always among them",
    )
    sources: tuple[Source, ...] = Field(
        SOURCES,
        min_length=1,
        description="what is drawn. coefficients: of all hazards jointly; periods: shocks that all loans of a calendar period "
        "share; macro: the path around each scenario, by macro.var; lgd: workouts resampled, or lgd_se",
    )
    level: Annotated[float, Field(gt=0.5, le=0.999)] = Field(0.9, description="probability inside the bands")
    draws: Annotated[int, Field(ge=100, le=200_000)] | None = Field(
        None, description="number of joint draws; default: as many as precision needs, in batches of 250"
    )
    precision: Annotated[float, Field(gt=0, le=0.5)] = Field(
        0.02,
        description="largest Monte Carlo error of a band's ends as a fraction of the point estimate, 0.02 for 2 %; for the lifetime "
        "and 12-month loss of the book in every scenario",
    )
    most_draws: Annotated[int, Field(ge=100, le=200_000)] = Field(
        10_000, description="drawing ends here even when the precision is not reached"
    )
    source_draws: Annotated[int, Field(ge=0, le=200_000)] = Field(
        250,
        description="draws, at most, behind the bands of each source alone and of all but one; 0: sources are not told apart",
    )
    seed: Annotated[int, Field(ge=0)] = Field(
        20251231, description="of all draws; the same for every scenario"
    )
    covariance: Literal["period", "period_hac", "model"] = Field(
        "period",
        description="of the coefficients. period: clustered by calendar period, jointly over the hazards; period_hac: the same robust "
        "to serial correlation; model: loan-periods taken as independent, each hazard by itself, only to compare with",
    )
    stated: Literal["fixed", "vary"] = Field(
        "fixed",
        description="macro values that a scenario states. fixed: they are the condition and do not vary, only filled ones and those "
        "after the last stated one do; vary: the whole path varies around them",
    )
    lgd_se: Annotated[float, Field(gt=0, le=0.5)] | None = Field(
        None,
        description="standard error of a constant LGD or of LGD by segment, as a fraction of EAD; all segments move together. "
        "Not for LGD from recoveries or collateral",
    )
    tolerance: Annotated[float, Field(gt=0, le=0.5)] | None = Field(
        0.002,
        description="largest error of compression (loans that stand for others) in a draw of the book's figures, measured by full "
        "projections; null: every loan is projected in every draw",
    )

    @model_validator(mode="after")
    def _sensible(self) -> Bands:
        for key in ("sources", "scenarios"):
            values = getattr(self, key) or ()
            doubled = [v for i, v in enumerate(values) if v in values[:i]]
            if doubled:
                raise ErrorAt(f"{doubled[0]!r} is listed twice", key)
        return self
