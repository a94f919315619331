"""The section ``analyses.model_choice``."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Name, Strict

Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class ModelChoice(Strict):
    """Other specifications of the same model: one change each from the study as it stands, everything refitted."""

    scenario: Name | None = Field(
        None, description="the stressed scenario; default: the one with the largest lifetime loss"
    )
    search: Name | None = Field(
        None,
        description="a search of macro specifications, whose best are tried: its YAML file (searched again) or the folder of a "
        "finished `stresskit search --out`, relative to the study",
    )
    top: Annotated[int, Field(ge=1, le=50)] = Field(
        5, description="how many of the search's ranked specifications"
    )
    links: bool = Field(
        True, description="whether the other link is tried: logit for cloglog and the reverse"
    )
    tails: bool = Field(
        True, description="whether the other rules for ages beyond the supported ones are tried"
    )
    lags: tuple[Annotated[int, Field(ge=-40, le=40)], ...] = Field(
        (-1, 1),
        description="macro periods added to the lag of each macro feature in turn; a lag below 0 is not tried",
    )
    halves: bool = Field(
        True, description="whether fits on the first and on the last half of the defaults are tried"
    )
    without_last_years: tuple[Annotated[int, Field(ge=1, le=50)], ...] = Field(
        (3,), description="fits that leave out this many last years"
    )
    payoff: bool = Field(
        True, description="whether the study without its payoff hazard is shown; not part of the range"
    )
    out_of_time: Annotated[int, Field(ge=0, le=240)] | None = Field(
        None,
        description="last model periods on which each specification is scored after a fit without them; default: a year; 0: none",
    )
    weights: dict[Name, Positive] = Field(
        default_factory=dict,
        description="name of a row -> weight: adds the weighted mean of these rows; weights are divided by their sum",
    )

    @model_validator(mode="after")
    def _useful(self) -> ModelChoice:
        if 0 in self.lags:
            raise ErrorAt("0 changes nothing: name steps such as -1 and 1", "lags")
        for key in ("lags", "without_last_years"):
            values = getattr(self, key)
            if len(set(values)) < len(values):
                raise ErrorAt("a value is listed twice", key)
        return self
