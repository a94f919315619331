"""Scenario YAML as frozen models."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BeforeValidator, Discriminator, Field, Tag, model_validator

from stresskit.spec.base import Finite, Identifier, Name, PeriodText, Strict

Values = tuple[Finite, ...] | dict[PeriodText, Finite]


def _percent(value: object) -> object:
    """``-24%`` -> -0.24; a bare number is refused, since -24 and -0.24 look alike."""
    if isinstance(value, str) and value.strip().endswith("%"):
        try:
            return float(value.strip()[:-1]) / 100.0
        except ValueError:
            return value
    if isinstance(value, int | float):
        raise ValueError("write a relative change with a percent sign, for example -24%")
    return value


Percent = Annotated[float, BeforeValidator(_percent), Field(gt=-1, allow_inf_nan=False)]


class GivenValues(Strict):
    """Levels, by position from ``starts`` or by period label (no holes)."""

    values: Values


class AddTo(Strict):
    """Another scenario's path plus these amounts (in the variable's unit); then hold the last, or zero."""

    add_to: Identifier
    values: Values
    then: Literal["hold", "zero"] = "hold"


class MultiplyBy(Strict):
    """Another scenario's path times these factors; then hold the last factor, or one."""

    multiply: Identifier
    values: Values
    then: Literal["hold", "one"] = "hold"


class PeakAndBack(Strict):
    """Another scenario's path changed by up to ``peak`` at period ``at``, straight up and straight back by ``back_by``.

    ``peak`` is relative (-24%) or, as ``peak_points``, an amount in the variable's unit.
    """

    change_from: Identifier
    peak: Percent | None = None
    peak_points: Finite | None = None
    at: PeriodText
    back_by: PeriodText | None = Field(None, description="default: the peak change stays")

    @model_validator(mode="after")
    def _one(self) -> PeakAndBack:
        if (self.peak is None) == (self.peak_points is None):
            raise ValueError("give peak (for example -24%) or peak_points, one of them")
        return self


_PATH_KEYS = {"add_to": "add_to", "multiply": "multiply", "change_from": "change_from", "values": "values"}


def _path_kind(value: object) -> str | None:
    if isinstance(value, dict):
        for key in _PATH_KEYS:
            if key in value:
                return key
        return None
    return {AddTo: "add_to", MultiplyBy: "multiply", PeakAndBack: "change_from", GivenValues: "values"}.get(type(value))  # type: ignore[arg-type]


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
    """After the last given value: straight to the long-run mean of history, or to a number, over n macro periods."""

    revert_to: Literal["long_run_mean"] | Finite
    over: Annotated[int, Field(ge=1, le=400)]


Afterwards = Literal["hold", "baseline"] | Revert


class ScenarioSpec(Strict):
    """One scenario file."""

    scenario: Identifier
    based_on: Identifier | None = None
    weight: Annotated[float, Field(ge=0, le=1)] | None = None
    starts: PeriodText
    paths: dict[Identifier, PathSpec] = Field(default_factory=dict)
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None, description="one rule for all variables, or one per variable; default hold"
    )
    missing: Literal["error"] = "error"
    title: Name | None = None
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")


class TableMapping(Strict):
    """A published wide table as scenario: which column is the period, the scenario's name, which variable."""

    scenario: Identifier
    table: Name = Field(description="CSV file, relative to this file")
    period: Name = Field(description="column with period labels, e.g. '2025 Q1'")
    only: dict[Name, tuple[str, ...]] = Field(default_factory=dict, description="keep rows whose column holds one of these values")
    variables: dict[Identifier, Name] = Field(min_length=1, description="variable -> column")
    weight: Annotated[float, Field(ge=0, le=1)] | None = None
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = None
    title: Name | None = None
    notes: dict[str, str] = Field(default_factory=dict)
