"""Scenario YAML as frozen models."""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import BeforeValidator, Discriminator, Field, Tag, WithJsonSchema, model_validator

from stresskit.spec.base import Finite, Identifier, Name, PeriodText, Strict, Words

Values = tuple[Finite, ...] | dict[PeriodText, Finite]


_PERCENT = re.compile(r"^[-+]?(\d+(\.\d*)?|\.\d+) ?%$", re.ASCII)


def _percent(value: object) -> object:
    """``-24%`` -> -0.24; a bare number is refused, since -24 and -0.24 look alike."""
    if isinstance(value, str) and _PERCENT.fullmatch(value.strip()):
        return float(value.strip()[:-1]) / 100.0
    if isinstance(value, int | float) and not isinstance(value, bool):
        raise ValueError("write a relative change with a percent sign, for example -24%")
    return value


Percent = Annotated[
    float,
    BeforeValidator(_percent),
    Field(gt=-1, allow_inf_nan=False),
    Words("a relative change above -100% with its percent sign, for example -24%"),
    WithJsonSchema({"type": "string", "pattern": _PERCENT.pattern}),
]


class GivenValues(Strict):
    """Levels, by position from ``starts`` or by period label (no holes)."""

    values: Values = Field(description="levels in the variable's unit")


class AddTo(Strict):
    """Another scenario's path plus these amounts (in the variable's unit); then hold the last, or zero."""

    add_to: Identifier = Field(description="name of the other scenario")
    values: Values = Field(description="amounts in the variable's unit, by position from starts or by period")
    then: Literal["hold", "zero"] = Field(
        "hold",
        description="what is added after the last amount, to the end of the projection: the last amount, or nothing",
    )


class MultiplyBy(Strict):
    """Another scenario's path times these factors; then hold the last factor, or one."""

    multiply: Identifier = Field(description="name of the other scenario")
    values: Values = Field(description="factors, by position from starts or by period")
    then: Literal["hold", "one"] = Field(
        "hold", description="factor after the last one, to the end of the projection: the last one, or 1"
    )


class PeakAndBack(Strict):
    """Another scenario's path changed by up to ``peak`` at period ``at``, straight up and straight back by ``back_by``.

    ``peak`` is relative (-24%) or, as ``peak_points``, an amount in the variable's unit.
    """

    change_from: Identifier = Field(description="name of the other scenario")
    peak: Percent | None = Field(None, description="largest relative change, for example -24%")
    peak_points: Finite | None = Field(
        None, description="largest change as an amount in the variable's unit, instead of peak"
    )
    at: PeriodText = Field(description="period of the largest change")
    back_by: PeriodText | None = Field(None, description="default: the peak change stays")

    @model_validator(mode="after")
    def _one(self) -> PeakAndBack:
        if (self.peak is None) == (self.peak_points is None):
            raise ValueError("give peak (for example -24%) or peak_points, one of them")
        return self


_PATH_KEYS = {"add_to": "add_to", "multiply": "multiply", "change_from": "change_from", "values": "values"}
_PATH_KINDS: dict[type, str] = {
    AddTo: "add_to",
    MultiplyBy: "multiply",
    PeakAndBack: "change_from",
    GivenValues: "values",
}


#: Keys that ask for a range or an inequality as a condition; refused by name, since another method would be needed.
RANGES = frozenset({"at_least", "at_most", "between", "above", "below", "range", "min", "max"})
NO_RANGE = (
    "a range or an inequality as a condition is not available yet; state values, or leave the variable out with "
    "missing: conditional"
)


def _path_kind(value: object) -> str | None:
    if isinstance(value, dict):
        for key in _PATH_KEYS:
            if key in value:
                return key
        return None
    return _PATH_KINDS.get(type(value))


PathSpec = Annotated[
    Annotated[AddTo, Tag("add_to")]
    | Annotated[MultiplyBy, Tag("multiply")]
    | Annotated[PeakAndBack, Tag("change_from")]
    | Annotated[GivenValues, Tag("values")],
    Discriminator(
        _path_kind,
        custom_error_type="path",
        custom_error_message="a path is one of: {values: ...}, {add_to: ...}, {multiply: ...}, {change_from: ...}",
    ),
]


class Revert(Strict):
    """After the last stated value: straight to the long-run mean of history, or to a number, over n macro periods."""

    revert_to: Literal["long_run_mean"] | Finite = Field(
        description="where to: the mean of history, or this value"
    )
    over: Annotated[int, Field(ge=1, le=400)] = Field(description="macro periods until it is reached")


Afterwards = Literal["hold", "baseline"] | Revert
Missing = Literal["error", "conditional"]
_MISSING = (
    "a variable that has no path. error: refused where a feature needs it; conditional: filled by the VAR under macro.var "
    "given what is stated. What is not said here is taken from based_on"
)


class ScenarioSpec(Strict):
    """One scenario file."""

    scenario: Identifier = Field(description="name of the scenario")
    based_on: Identifier | None = Field(
        None, description="scenario of the same study that supplies the paths not stated here"
    )
    weight: Annotated[float, Field(ge=0, le=1)] | None = Field(
        None,
        description="probability weight; every scenario of the study has one and they sum to 1, or none has",
    )
    starts: PeriodText = Field(description="first macro period of the scenario, the one after as_of")
    paths: dict[Identifier, PathSpec] = Field(default_factory=dict, description="macro variable -> path")
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None,
        description="one rule for all variables, or one per variable; default hold for values, and for shocks the other scenario's own rule",
    )
    missing: Missing = Field("error", description=_MISSING)
    title: Name | None = Field(None, description="longer name for the report")
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")


class TableMapping(Strict):
    """A published wide table as scenario: which column is the period, the scenario's name, which variable."""

    scenario: Identifier = Field(description="name of the scenario")
    table: Name = Field(description="CSV file, relative to this file")
    period: Name = Field(description="column with period labels, e.g. '2025 Q1'")
    only: dict[Name, tuple[str, ...]] = Field(
        default_factory=dict, description="keep rows whose column holds one of these values"
    )
    variables: dict[Identifier, Name] = Field(min_length=1, description="variable -> column")
    weight: Annotated[float, Field(ge=0, le=1)] | None = Field(
        None,
        description="probability weight; every scenario of the study has one and they sum to 1, or none has",
    )
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None, description="one rule for all variables, or one per variable; default hold"
    )
    missing: Missing = Field("error", description=_MISSING)
    title: Name | None = Field(None, description="longer name for the report")
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")
