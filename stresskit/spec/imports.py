"""An import mapping as frozen models: which cells of a published table are which variable of which scenario."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Finite, FrequencyName, Identifier, Name, PeriodText, Strict, meant
from stresskit.spec.scenario import (
    APPROVED_WORDS,
    AUTHOR_WORDS,
    MISSING_WORDS,
    SEVERITY_WORDS,
    WEIGHTED_WORDS,
    Afterwards,
    DateText,
    Missing,
    refuse_both,
)

UnitName = Literal["percent", "fraction", "index", "level"]
#: Units that are shares of something, and can be converted into each other.
SHARES = ("percent", "fraction")


class ImportedVariable(Strict):
    """One column of the table: what it states, in which unit, and how it joins history.

    Without ``growth`` and ``deviation_from`` the column states levels.
    """

    column: Name = Field(description="column of the table")
    unit: UnitName = Field(description="unit of the variable in the scenario, as the study declares it")
    table_unit: Literal["percent", "fraction"] | None = Field(
        None, description="unit of the column's levels where it is not the scenario's; values are converted"
    )
    growth: Literal["per_period", "annualised", "year_on_year"] | None = Field(
        None,
        description="the column states growth of the variable: over one row, over one row at an annual rate "
        "(compounded), or over the same period of the year before",
    )
    deviation_from: Identifier | None = Field(
        None, description="the column states deviations from the path of this scenario of the mapping"
    )
    amounts: Literal["points", "percent", "fraction"] | None = Field(
        None,
        description="unit of growth (percent or fraction) or of deviations (points: amounts in the variable's unit; "
        "percent or fraction: of the other path's value)",
    )
    splice: Literal["growth", "none"] | None = Field(
        None,
        description="how an index or level joins history: growth continues history's last value by the table's own growth "
        "(another index base); none takes values as published, whatever history says; default: as published, and "
        "refused where the two do not join",
    )
    at_as_of: Finite | None = Field(
        None,
        description="the table's own value in as_of where it has no row for it; with growth, the level to start from",
    )
    within_year: Literal["step", "linear", "growth"] | None = Field(
        None,
        description="annual tables: step gives every period the year's value; linear and growth take the year's value as "
        "that of its last period, and go there in equal steps or at constant growth",
    )
    sure: bool = Field(
        False, description="the unit is right although the values look as if they were in another"
    )

    @model_validator(mode="after")
    def _agree(self) -> ImportedVariable:
        if self.growth is not None and self.deviation_from is not None:
            raise ErrorAt("a column states growth or deviations, not both", "deviation_from")
        if self.growth is not None and self.unit in SHARES:
            raise ErrorAt(
                f"growth of a variable in {self.unit} is not read; declare the growth as a variable of its own "
                "(without this key), or the unit as index or level",
                "growth",
            )
        changes = self.growth is not None or self.deviation_from is not None
        if changes and self.amounts is None:
            raise ErrorAt(
                "amounts says in which unit growth or deviations are: points, percent or fraction",
                "growth" if self.growth is not None else "deviation_from",
            )
        if self.growth is not None and self.amounts == "points":
            raise ErrorAt("growth is in percent or fraction", "amounts")
        if not changes and self.amounts is not None:
            raise ErrorAt("amounts belongs to growth or deviation_from; levels have table_unit", "amounts")
        self._agree_on_levels(changes)
        return self

    def _agree_on_levels(self, changes: bool) -> None:
        if self.table_unit is not None and (changes or self.unit not in SHARES):
            raise ErrorAt(
                "table_unit converts levels between percent and fraction, nothing else", "table_unit"
            )
        if self.splice is not None and (changes or self.unit in SHARES):
            raise ErrorAt("splice is for levels of an index or level", "splice")
        if self.at_as_of is not None and self.growth is None and self.splice != "growth":
            raise ErrorAt("at_as_of is used with growth or splice: growth only", "at_as_of")


class ImportedScenario(Strict):
    """One scenario to write: where its rows are, and what the file says besides numbers."""

    name: Name | None = Field(None, description="its name in the scenario column")
    table: Name | None = Field(None, description="file, where it is not the mapping's")
    sheet: Name | None = Field(None, description="worksheet, where it is not the mapping's")
    variables: dict[Identifier, ImportedVariable] = Field(
        default_factory=dict, description="variables that this scenario has in other columns or another form"
    )
    title: Name | None = Field(None, description="longer name for the report")
    severity: Name | None = Field(None, description=SEVERITY_WORDS)
    author_role: Name | None = Field(None, description=AUTHOR_WORDS)
    approved_on: DateText | None = Field(None, description=APPROVED_WORDS)
    weight: Annotated[float, Field(ge=0, le=1)] | None = Field(None, description="probability weight")
    weighted: bool = Field(True, description=WEIGHTED_WORDS)
    missing: Missing = Field("error", description=MISSING_WORDS)
    based_on: Identifier | None = Field(
        None, description="scenario of the study that supplies variables which the table does not have"
    )
    afterwards: Afterwards | dict[Identifier, Afterwards] | None = Field(
        None, description="one rule for all variables, or one per variable; default hold"
    )
    notes: dict[str, str] = Field(default_factory=dict, description="free fields carried into the report")

    @model_validator(mode="after")
    def _unweighted(self) -> ImportedScenario:
        refuse_both(self.weighted, self.weight)
        return self


class ImportedHistory(Strict):
    """Where the table's own history stands, when it stands apart from the scenarios' rows."""

    name: Name | None = Field(None, description="its name in the scenario column")
    table: Name | None = Field(None, description="file, where it is not the mapping's")
    sheet: Name | None = Field(None, description="worksheet, where it is not the mapping's")


class JoinedHistory(Strict):
    """The history that scenarios join, as the study reads it (levels, in the variables' units)."""

    file: Name = Field(description="CSV file, a row per period, relative to this file")
    period: Name = Field("period", description="name of the period column")
    only: dict[Name, tuple[str, ...]] = Field(
        default_factory=dict, description="keep rows whose column holds one of these values"
    )
    columns: dict[Identifier, Name] = Field(
        default_factory=dict, description="variable -> column, where the column has another name"
    )


class ImportMapping(Strict):
    """A published table as scenario files: one mapping, one or several scenarios."""

    import_: Identifier = Field(
        alias="import", description="name of the mapping, told in every file it makes"
    )
    table: Name = Field(description="CSV or Excel file (.csv, .xlsx), relative to this file")
    sheet: Name | None = Field(None, description="worksheet; needed when the workbook has several")
    header_row: Annotated[int, Field(ge=1, le=1000)] = Field(
        1, description="row that names the columns; rows above it are not read"
    )
    last_row: Annotated[int, Field(ge=2)] | None = Field(
        None, description="last row to read, when notes follow the table"
    )
    separator: Literal["comma", "semicolon", "tab"] = Field(
        "comma", description="CSV: what stands between cells"
    )
    decimal: Literal["point", "comma"] = Field(
        "point", description="CSV: how decimals are written, 5.1 or 5,1; the other sign is then refused"
    )
    period: Name = Field(description="column with years, quarters, months or dates")
    frequency: Literal["month", "quarter", "year"] | None = Field(
        None, description="length of a row's period; default: told from the labels and checked"
    )
    as_of: PeriodText = Field(
        description="last period of history; the table's projection must begin in the next one"
    )
    calendar: FrequencyName = Field("quarter", description="annual tables: calendar of the scenario")
    scenario_column: Name | None = Field(None, description="column that names each row's scenario")
    only: dict[Name, tuple[str, ...]] = Field(
        default_factory=dict, description="keep rows whose column holds one of these values"
    )
    marker: Name | None = Field(
        None, description="text of the row that stands between history and projection"
    )
    history: Literal["rows_up_to_as_of"] | ImportedHistory | None = Field(
        None,
        description="the table's own history: the scenario's rows up to as_of, or rows that stand apart; default none, and rows "
        "up to as_of are refused, since they may be projections of an older vintage",
    )
    join: JoinedHistory | None = Field(
        None, description="history that the scenarios join; default: the table's own, or the study's"
    )
    variables: dict[Identifier, ImportedVariable] = Field(
        min_length=1, description="variable -> column and what it states, for all scenarios"
    )
    scenarios: dict[Identifier, ImportedScenario] = Field(
        min_length=1, description="scenario to write -> where its rows are"
    )

    @model_validator(mode="after")
    def _agree(self) -> ImportMapping:
        places: list[tuple[str | None, tuple[str, ...]]] = [
            (s.name, ("scenarios", k)) for k, s in self.scenarios.items()
        ]
        if isinstance(self.history, ImportedHistory):
            places.append((self.history.name, ("history",)))
        for name, keys in places:
            if self.scenario_column is None and name is not None:
                raise ErrorAt("name is looked for in scenario_column, which is not given", *keys, "name")
            if self.scenario_column is not None and name is None:
                raise ErrorAt(f"name is needed: which rows of column {self.scenario_column!r}", *keys)
        if self.marker is not None and self.history is not None:
            raise ErrorAt("rows above the marker are the history; take history or marker out", "history")
        for key in self.scenarios:
            self._deviations(key)
        return self

    def _deviations(self, key: str) -> None:
        for variable, stated in self.of(key).items():
            other = stated.deviation_from
            if other is None:
                continue
            own = variable in self.scenarios[key].variables
            at = (("scenarios", key) if own else ()) + ("variables", variable, "deviation_from")
            if other not in self.scenarios:
                listed = ", ".join(self.scenarios)
                raise ErrorAt(
                    f"there is no scenario {other!r} in this mapping; there are {listed}{meant(other, self.scenarios)}",
                    *at,
                )
            base = self.of(other).get(variable)
            if base is None:
                raise ErrorAt(f"scenario {other!r} has no column for {variable}", *at)
            if base.deviation_from is not None:
                raise ErrorAt(
                    f"{variable} of {other!r} is a deviation itself; give that scenario's own form under "
                    f"scenarios.{other}.variables",
                    *at,
                )

    def of(self, scenario: str) -> dict[str, ImportedVariable]:
        """Variables of a scenario: the mapping's, replaced and extended by its own."""
        return self.variables | self.scenarios[scenario].variables
