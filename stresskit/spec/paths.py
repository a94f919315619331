"""What a scenario says about one variable: its path, and what comes afterwards."""

from __future__ import annotations

import math
import re
from decimal import Decimal
from typing import Annotated, Literal

from pydantic import (
    BeforeValidator,
    Discriminator,
    Field,
    PlainSerializer,
    Tag,
    WithJsonSchema,
    model_validator,
)

from stresskit.spec.base import ErrorAt, Finite, Identifier, PeriodText, Strict, Words

Values = tuple[Finite, ...] | dict[PeriodText, Finite]
Unit = Literal["percent", "fraction", "index", "level"]
Rate = Literal["per_period", "annualised", "year_on_year"]

_PERCENT = re.compile(r"^[-+]?(\d+(\.\d*)?|\.\d+) ?%$", re.ASCII)


def _percent(value: object) -> object:
    """``-24%`` -> -0.24; a bare number is refused, since -24 and -0.24 look alike."""
    if isinstance(value, str) and _PERCENT.fullmatch(value.strip()):
        return float(value.strip()[:-1]) / 100.0
    if isinstance(value, int | float) and not isinstance(value, bool):
        raise ValueError("write a relative change with a percent sign, for example -24%")
    return value


def _with_sign(value: float) -> str:
    """0.07 -> ``7.00%``: what JSON holds is read back to the last bit."""
    text = f"{Decimal(repr(value)) * 100:f}"
    whole = float(text)
    # Dividing by 100 rounds: 0.076 / 100 is not the number nearest to 0.00076, but one bit beside it.
    for near in (whole, math.nextafter(whole, math.inf), math.nextafter(whole, -math.inf)):
        if near / 100.0 == value:
            return f"{text if near == whole else format(Decimal(repr(near)), 'f')}%"
    return f"{text}%"


Percent = Annotated[
    float,
    BeforeValidator(_percent),
    PlainSerializer(_with_sign, return_type=str, when_used="json"),
    Field(gt=-1, allow_inf_nan=False),
    Words("a relative change above -100% with its percent sign, for example -24%"),
    WithJsonSchema({"type": "string", "pattern": _PERCENT.pattern}),
]
Growths = tuple[Percent, ...] | dict[PeriodText, Percent]
Factor = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Span = Annotated[int, Field(ge=1, le=400)]
HalfLife = Annotated[float, Field(gt=0, le=400)]

_UNIT = "unit of these numbers when it is not the variable's own: percent and fraction are converted"


class GivenValues(Strict):
    """Levels, by position from ``starts`` or by period label (no holes)."""

    values: Values = Field(description="levels in the variable's unit")
    unit: Unit | None = Field(None, description=_UNIT + ", everything else is refused")
    rate: Rate | None = Field(
        None,
        description="for a variable that is a growth rate (rate under macro.variables): what these values are, "
        "converted where that is exact",
    )


class AddTo(Strict):
    """Another scenario's path plus these amounts (in the variable's unit); then hold the last, or zero."""

    add_to: Identifier = Field(description="name of the other scenario")
    values: Values = Field(description="amounts in the variable's unit, by position from starts or by period")
    then: Literal["hold", "zero"] = Field(
        "hold",
        description="what is added after the last amount, to the end of the projection: the last amount, or nothing",
    )
    unit: Unit | None = Field(None, description=_UNIT)


class MultiplyBy(Strict):
    """Another scenario's path times these factors; then hold the last factor, or one."""

    multiply: Identifier = Field(description="name of the other scenario")
    values: Values = Field(description="factors, by position from starts or by period")
    then: Literal["hold", "one"] = Field(
        "hold", description="factor after the last one, to the end of the projection: the last one, or 1"
    )


class PeakAndBack(Strict):
    """Another scenario's path changed by up to ``peak`` at period ``at``, straight up and back by ``back_by`` or by half-life.

    The size is relative (``peak: -24%``, or the same as a factor, ``peak_factor: 0.76``) or an amount in the
    variable's unit (``peak_points``).
    """

    change_from: Identifier = Field(description="name of the other scenario")
    peak: Percent | None = Field(None, description="largest relative change, for example -24%")
    peak_points: Finite | None = Field(
        None, description="largest change as an amount in the variable's unit, instead of peak"
    )
    peak_factor: Factor | None = Field(
        None, description="largest change as a factor, instead of peak: 0.76 is -24%"
    )
    at: PeriodText = Field(description="period of the largest change; straight up to it")
    back_by: PeriodText | None = Field(
        None, description="straight back: first period without a change. Default: the peak change stays"
    )
    half_life: HalfLife | None = Field(
        None,
        description="back by half-life instead: macro periods in which what is left of the change halves",
    )
    unit: Unit | None = Field(None, description=_UNIT + "; for peak_points")

    @model_validator(mode="after")
    def _one(self) -> PeakAndBack:
        sizes = [s for s in (self.peak, self.peak_points, self.peak_factor) if s is not None]
        if len(sizes) != 1:
            raise ValueError("give peak (for example -24%), peak_points or peak_factor, one of them")
        if self.back_by is not None and self.half_life is not None:
            raise ErrorAt("give back_by (straight back) or half_life, not both", "half_life")
        if self.unit is not None and self.peak_points is None:
            raise ErrorAt("unit belongs to peak_points; a relative change has none", "unit")
        return self


class GrowthPath(Strict):
    """The variable grows by these rates, from history's last value on or on top of another scenario's path.

    On top of another scenario means: its path times what these rates alone would have made of 1. After the last
    rate the level (or the distance to the other scenario) stays.
    """

    growth: Growths = Field(
        description="growth rates with their percent sign, by position from starts or by period"
    )
    rate: Rate = Field(
        description="what the rates are. per_period: over one macro period; annualised: over one macro period, as if it "
        "went on for a year; year_on_year: over the same period of the year before"
    )
    on: Identifier = Field("history", description="history (its last values) or the name of another scenario")


class HoldAt(Strict):
    """The variable stays at history's last value."""

    hold: Literal["history"] = Field(description="history: its last value up to as_of")
    until: PeriodText = Field(description="last period that is stated; from there on the afterwards rule")


class ReachLevel(Strict):
    """Straight from history's last value to a level; there it stays, or the gap to another scenario closes straight."""

    reach: Finite = Field(description="the level, in the variable's unit")
    at: PeriodText = Field(description="period in which it is reached")
    back_to: Identifier | None = Field(None, description="name of the scenario whose path it goes back to")
    back_by: PeriodText | None = Field(None, description="first period on that path; goes with back_to")
    unit: Unit | None = Field(None, description=_UNIT)

    @model_validator(mode="after")
    def _both(self) -> ReachLevel:
        if (self.back_to is None) != (self.back_by is None):
            given, lacks = ("back_to", "back_by") if self.back_by is None else ("back_by", "back_to")
            raise ErrorAt(f"{given} needs {lacks}: say where to and by when, or neither", given)
        return self


_PATH_KINDS: dict[str, type[Strict]] = {
    "add_to": AddTo,
    "multiply": MultiplyBy,
    "change_from": PeakAndBack,
    "growth": GrowthPath,
    "hold": HoldAt,
    "reach": ReachLevel,
    "values": GivenValues,
}


#: Keys that ask for a range or an inequality as a condition; refused by name, since another method would be needed.
RANGES = frozenset({"at_least", "at_most", "between", "above", "below", "range", "min", "max"})
NO_RANGE = (
    "a range or an inequality as a condition is not available yet; state values, or leave the variable out with "
    "missing: conditional"
)


def _path_kind(value: object) -> str | None:
    if isinstance(value, dict):
        return next((key for key in _PATH_KINDS if key in value), None)
    return next((key for key, kind in _PATH_KINDS.items() if type(value) is kind), None)


PathSpec = Annotated[
    Annotated[AddTo, Tag("add_to")]
    | Annotated[MultiplyBy, Tag("multiply")]
    | Annotated[PeakAndBack, Tag("change_from")]
    | Annotated[GrowthPath, Tag("growth")]
    | Annotated[HoldAt, Tag("hold")]
    | Annotated[ReachLevel, Tag("reach")]
    | Annotated[GivenValues, Tag("values")],
    Discriminator(
        _path_kind,
        custom_error_type="path",
        custom_error_message="a path is one of: {values: ...}, {add_to: ...}, {multiply: ...}, {change_from: ...}, "
        "{growth: ...}, {hold: ...}, {reach: ...}",
    ),
]


class Revert(Strict):
    """After the last stated value: to the long-run mean of history, or to a number; straight, or by half-life."""

    revert_to: Literal["long_run_mean"] | Finite = Field(
        description="where to: the mean of history, or this value"
    )
    over: Span | None = Field(None, description="straight: macro periods until it is reached")
    half_life: HalfLife | None = Field(
        None, description="by half-life: macro periods in which the distance to it halves"
    )
    unit: Unit | None = Field(None, description=_UNIT + "; for a number under revert_to")

    @model_validator(mode="after")
    def _one(self) -> Revert:
        if (self.over is None) == (self.half_life is None):
            raise ValueError(
                "give over (periods until it is reached) or half_life (periods in which the distance halves), one of them"
            )
        if self.unit is not None and isinstance(self.revert_to, str):
            raise ErrorAt("unit belongs to a number under revert_to", "unit")
        return self


class GrowOn(Strict):
    """After the last stated value: growth at a constant rate, for an index or a level."""

    grow_by: Literal["long_run_mean"] | Percent = Field(
        description="per year: this rate, or the mean growth of history (geometric, from its first to its last value)"
    )


class BackTo(Strict):
    """After the last stated value: back to another scenario's path, at once or with the gap to it closing."""

    back_to: Identifier = Field(description="name of the other scenario")
    over: Span | None = Field(
        None, description="straight: macro periods until the gap is closed; neither: at once"
    )
    half_life: HalfLife | None = Field(
        None, description="by half-life: macro periods in which the gap halves"
    )

    @model_validator(mode="after")
    def _one(self) -> BackTo:
        if self.over is not None and self.half_life is not None:
            raise ErrorAt("give over (straight) or half_life, not both", "half_life")
        return self


Afterwards = Literal["hold", "baseline"] | Revert | GrowOn | BackTo
