"""Scenario YAML as frozen models."""

from __future__ import annotations

import datetime
import re
from typing import Annotated, Literal

from pydantic import AfterValidator, Field, WithJsonSchema, model_validator

from stresskit.spec.base import ErrorAt, Identifier, Name, PeriodText, Strict, Words
from stresskit.spec.paths import (
    AddTo,
    Afterwards,
    BackTo,
    GivenValues,
    GrowOn,
    GrowthPath,
    HoldAt,
    MultiplyBy,
    PathSpec,
    PeakAndBack,
    Percent,
    ReachLevel,
    Revert,
    Values,
)

__all__ = [
    "AddTo",
    "Afterwards",
    "BackTo",
    "DateText",
    "GivenValues",
    "GrowOn",
    "GrowthPath",
    "HoldAt",
    "MultiplyBy",
    "PathSpec",
    "PeakAndBack",
    "Percent",
    "ReachLevel",
    "Revert",
    "ScenarioSpec",
    "TableMapping",
    "Values",
]


def _is_date(text: str) -> str:
    """The text, if it is a date that exists, written as 2025-11-28."""
    if not re.fullmatch(r"\d{4}-\d{2}-\d{2}", text, re.ASCII):
        raise ValueError(f"{text!r} is not a date: expected year, month and day such as 2025-11-28")
    try:
        datetime.date.fromisoformat(text)
    except ValueError:
        raise ValueError(f"{text!r} is no day of the calendar") from None
    return text


Missing = Literal["error", "conditional"]
MISSING_WORDS = (
    "a variable that has no path. error: refused where a feature needs it; conditional: filled by the VAR under macro.var "
    "given what is stated. What is not said here is taken from based_on"
)
DateText = Annotated[
    str,
    AfterValidator(_is_date),
    Words("a date such as 2025-11-28", quotes=False),
    WithJsonSchema({"type": "string", "pattern": r"^\d{4}-\d{2}-\d{2}$", "examples": ["2025-11-28"]}),
]
WEIGHTED_WORDS = "false: takes no part in the probability-weighted mean, and no weight is needed"
SEVERITY_WORDS = "how severe, in the words of the bank: a label, shown in the report"
AUTHOR_WORDS = "who stands for it, as a role and not a person: shown in the report"
APPROVED_WORDS = "day of approval: shown in the report"


def refuse_both(weighted: bool, weight: float | None) -> None:
    """A scenario outside the mean has no weight. Raises ErrorAt."""
    if not weighted and weight is not None:
        raise ErrorAt("a scenario that is not weighted has no weight; take one of the two out", "weighted")


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
    weighted: bool = Field(True, description=WEIGHTED_WORDS)
    starts: PeriodText = Field(description="first macro period of the scenario, the one after as_of")
    paths: dict[Identifier, PathSpec] = Field(default_factory=dict, description="macro variable -> path")
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None,
        description="one rule for all variables, or one per variable; default hold for values, and for shocks the other scenario's own rule",
    )
    missing: Missing = Field("error", description=MISSING_WORDS)
    title: Name | None = Field(None, description="longer name for the report")
    severity: Name | None = Field(None, description=SEVERITY_WORDS)
    author_role: Name | None = Field(None, description=AUTHOR_WORDS)
    approved_on: DateText | None = Field(None, description=APPROVED_WORDS)
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")

    @model_validator(mode="after")
    def _unweighted(self) -> ScenarioSpec:
        refuse_both(self.weighted, self.weight)
        return self


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
    weighted: bool = Field(True, description=WEIGHTED_WORDS)
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None, description="one rule for all variables, or one per variable; default hold"
    )
    missing: Missing = Field("error", description=MISSING_WORDS)
    title: Name | None = Field(None, description="longer name for the report")
    severity: Name | None = Field(None, description=SEVERITY_WORDS)
    author_role: Name | None = Field(None, description=AUTHOR_WORDS)
    approved_on: DateText | None = Field(None, description=APPROVED_WORDS)
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")

    @model_validator(mode="after")
    def _unweighted(self) -> TableMapping:
        refuse_both(self.weighted, self.weight)
        return self
