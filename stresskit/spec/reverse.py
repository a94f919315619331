"""The section ``analyses.reverse``."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Identifier, Name, Strict
from stresskit.spec.paths import Afterwards, Percent

Above = Annotated[float, Field(gt=0, allow_inf_nan=False)]


class CapitalUse(Strict):
    """Losses and risk-weighted amounts over a stated capital figure."""

    amount: Above = Field(description="capital at as_of, currency of the loan file")
    ratio: Percent = Field(0.08, description="capital asked for per unit of risk-weighted amount")
    use: Percent = Field(
        1.0,
        description="threshold: losses up to a calendar-year end plus ratio times the risk-weighted amount then, over amount, "
        "at the worst year end",
    )


class Reverse(Strict):
    """Search for the most plausible path that reaches a threshold: one of loss_rise, el, pd_12m, capital."""

    loss_rise: Percent | None = Field(
        None,
        description="expected loss above that of the reference scenario, such as 50%; the threshold when none is given",
    )
    el: Above | None = Field(None, description="expected loss as an amount")
    pd_12m: Percent | None = Field(None, description="mean 12-month PD of the loans of ``segment``")
    capital: CapitalUse | None = Field(None, description="use of a capital figure; needs the section capital")
    loss: Literal["lifetime", "12m"] = Field(
        "lifetime",
        description="which expected loss loss_rise and el mean: lifetime, or of the next 12 months",
    )
    segment: dict[Name, Name] = Field(
        default_factory=dict,
        description="segment column -> value: loss or PD of these loans alone; default: the whole book",
    )
    reference: Identifier | None = Field(
        None,
        description="scenario that rises are counted from and that supplies variables outside macro.var and rules for "
        "afterwards; default: baseline, or the first one",
    )
    periods: Annotated[int, Field(ge=1, le=120)] | None = Field(
        None, description="macro periods in which the path is free; default: three years"
    )
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None, description="rule after the free periods, as in a scenario; default: that of the reference"
    )
    within: Above | None = Field(
        None,
        description="largest distance from the VAR's forecast, standard deviations (the root of d²); the largest loss within "
        "it is told as well",
    )
    starts: Annotated[int, Field(ge=1, le=12)] = Field(
        3, description="points that the search starts from; different paths found are all listed"
    )
    most_projections: Annotated[int, Field(ge=20, le=100_000)] = Field(
        200, description="projections after which no further start is made"
    )
    surface: tuple[Identifier, ...] | Literal["none"] | None = Field(
        None,
        description="two variables for the loss surface, or none; default: the two whose path moves furthest",
    )

    @model_validator(mode="after")
    def _one(self) -> Reverse:
        given = [n for n in ("loss_rise", "el", "pd_12m", "capital") if getattr(self, n) is not None]
        if len(given) > 1:
            raise ErrorAt(f"give one threshold, not {' and '.join(given)}", given[1])
        if self.loss_rise is not None and self.loss_rise <= 0:
            raise ErrorAt("a rise is above 0%", "loss_rise")
        if self.pd_12m is not None and not 0 < self.pd_12m < 1:
            raise ErrorAt("a PD lies between 0% and 100%", "pd_12m")
        if self.capital is not None and self.segment:
            raise ErrorAt("capital use is that of the whole book", "segment")
        if self.capital is not None and min(self.capital.ratio, self.capital.use) <= 0:
            raise ErrorAt("ratio and use are above 0%", "capital")
        if isinstance(self.surface, tuple) and (len(self.surface) != 2 or len(set(self.surface)) != 2):
            raise ErrorAt("a surface needs two different variables", "surface")
        return self
