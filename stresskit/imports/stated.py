"""What a mapping's tables state about each scenario, as published: rows chosen, dated, checked; no arithmetic yet."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.imports.forms import converted
from stresskit.imports.join import unit_problem
from stresskit.imports.rows import (
    Rows,
    dated,
    first_projected,
    numbers,
    period_label,
    shown_as_percent,
    split_at_marker,
)
from stresskit.imports.sheets import Row, Sheet, read_sheet
from stresskit.macro.table import problem_of
from stresskit.spec.base import closest
from stresskit.spec.imports import ImportedHistory, ImportedVariable, ImportMapping
from stresskit.spec.load import Loaded

Floats = NDArray[np.float64]
_FIRST = 5


@dataclass(frozen=True, slots=True)
class Stated:
    """What the table says about one scenario, as published.

    ahead   its projected rows
    values  variable -> (n,) finite
    own     variable -> (m,) the table's history up to as_of, NaN before a first value; m may be 0
    before  start of own
    """

    ahead: Rows
    values: Mapping[str, Floats]
    own: Mapping[str, Floats]
    before: Rows | None


@dataclass(slots=True)
class Tables:
    """The tables of one mapping, each read once."""

    loaded: Loaded[ImportMapping]
    _sheets: dict[tuple[str, str | None], Sheet] = field(default_factory=dict)
    _stated: dict[str, Stated] = field(default_factory=dict)

    @property
    def mapping(self) -> ImportMapping:
        return self.loaded.model

    def sheet(self, table: str | None, sheet: str | None) -> Sheet:
        m = self.mapping
        key = (table or m.table, sheet if table is not None else sheet or m.sheet)
        if key not in self._sheets:
            self._sheets[key] = read_sheet(self.loaded.file.parent / key[0], sheet=key[1], mapping=m)
        return self._sheets[key]

    def stated(self, name: str) -> Stated:
        """The scenario's columns as published. Raises TextError (mapping) and DataError (table)."""
        if name not in self._stated:
            self._stated[name] = self._read(name)
        return self._stated[name]

    def _read(self, name: str) -> Stated:
        m, spec = self.mapping, self.mapping.scenarios[name]
        sheet = self.sheet(spec.table, spec.sheet)
        period = self._column(sheet, ("period",), m.period)
        above, below = split_at_marker(sheet, m.marker) if m.marker else ((), sheet.rows)
        chosen = self._chosen(sheet, below, spec.name, ("scenarios", name, "name"))
        ahead = dated(sheet, chosen, period, declared=m.frequency)
        first = first_projected(m.as_of, ahead.calendar)
        if first is None:
            raise self.loaded.error(("as_of",), f"the table is annual, and {m.as_of} does not end a year")
        before: Rows | None = None
        if isinstance(m.history, ImportedHistory):
            apart = self.sheet(m.history.table, m.history.sheet)
            rows = self._chosen(apart, apart.rows, m.history.name, ("history", "name"))
            before = dated(apart, rows, self._column(apart, ("period",), m.period), declared=m.frequency)
        elif m.marker:
            rows = self._chosen(sheet, above, spec.name, ("scenarios", name, "name")) if above else ()
            before = dated(sheet, rows, period, declared=m.frequency) if rows else None
        elif m.history is not None and ahead.start < first <= ahead.end:
            ahead, before = ahead.cut(first, ahead.end), ahead.cut(ahead.start, first - 1)
        self._check_vintage(ahead, before, first)
        return self._columns(name, ahead, before)

    def _chosen(
        self, sheet: Sheet, rows: Sequence[Row], name: str | None, keys: tuple[str, ...]
    ) -> tuple[Row, ...]:
        m = self.mapping
        for column, wanted in m.only.items():
            at = self._column(sheet, ("only", column), column)
            rows = self._matching(sheet, rows, at, wanted, ("only", column))
        if m.scenario_column is not None and name is not None:
            at = self._column(sheet, ("scenario_column",), m.scenario_column)
            rows = self._matching(sheet, rows, at, (name,), keys)
        return tuple(rows)

    def _matching(
        self, sheet: Sheet, rows: Sequence[Row], column: int, wanted: Sequence[str], keys: tuple[str, ...]
    ) -> Sequence[Row]:
        kept = [r for r in rows if r.text(column) in wanted]
        if not kept:
            there = list(dict.fromkeys(r.text(column) for r in rows))
            near = closest(wanted[0], there)
            hint = f"; did you mean {near!r}?" if near is not None else ""
            more = f" and {len(there) - _FIRST} more" if len(there) > _FIRST else ""
            raise self.loaded.error(
                keys,
                f"no row of {sheet.file} has {' or '.join(map(repr, wanted))} in column {sheet.header[column]!r}; it holds "
                f"{', '.join(map(repr, there[:_FIRST])) or 'nothing'}{more}{hint}",
            )
        return kept

    def _column(self, sheet: Sheet, keys: tuple[str, ...], name: str) -> int:
        at = sheet.column(name)
        if at is None:
            raise self.loaded.error(keys, sheet.no_column(name))
        return at

    def _check_vintage(self, ahead: Rows, before: Rows | None, first: int) -> None:
        m, wanted = self.mapping, period_label(first, ahead.calendar)
        if before is not None and before.calendar != ahead.calendar:
            raise DataError(
                f"{before.sheet.source}: history is on a {before.calendar} calendar, the projection on a {ahead.calendar} one"
            )
        remedy = f"supply the vintage whose projection starts in {wanted}, or set as_of to the period before the table's own start"
        if m.history is None and m.marker is None and ahead.start < first <= ahead.end:
            remedy += "; if the rows up to as_of are observed, say history: rows_up_to_as_of"
        if ahead.end < first:
            raise DataError(
                f"{ahead.sheet.source}: stale vintage: the table ends in {ahead.label(len(ahead.rows) - 1)}, and nothing in it "
                f"comes after as_of {m.as_of}; {remedy}"
            )
        if ahead.start != first:
            raise DataError(
                f"{ahead.sheet.source}: {'stale vintage' if ahead.start < first else 'a later vintage'}: the table's first "
                f"projected period is {ahead.label(0)}, but the one after as_of {m.as_of} is {wanted}; {remedy}"
            )
        if before is not None and before.end != first - 1:
            raise DataError(
                f"{before.sheet.source}: the table's history ends in {before.label(len(before.rows) - 1)}, but its projection "
                f"starts in {ahead.label(0)}: supply the rows between, or another vintage"
            )

    def _columns(self, name: str, ahead: Rows, before: Rows | None) -> Stated:
        values: dict[str, Floats] = {}
        own: dict[str, Floats] = {}
        problems: list[Problem] = []
        for variable, spec in self.mapping.of(name).items():
            at = self._column(ahead.sheet, (*self.keys(name, variable), "column"), spec.column)
            values[variable], found = numbers(ahead, at, variable=variable, blanks_before=False)
            problems += found
            own[variable] = np.empty(0)
            shares = shown_as_percent(ahead, at)
            past_at = None if before is None else before.sheet.column(spec.column)
            if before is not None and past_at is not None:
                own[variable], found = numbers(before, past_at, variable=variable, blanks_before=True)
                problems += found
                shares = [*shown_as_percent(before, past_at), *shares]
            problems += _unit_problems(
                variable, spec, np.concatenate([own[variable], values[variable]]), shares
            )
        if problems:
            raise DataError(f"{ahead.sheet.source}, scenario {name!r}: values that cannot be used", problems)
        return Stated(ahead, values, own, before)

    def keys(self, name: str, variable: str) -> tuple[str, ...]:
        """Where the mapping states a variable of a scenario."""
        if variable in self.mapping.scenarios[name].variables:
            return ("scenarios", name, "variables", variable)
        return ("variables", variable)

    def own_levels(self, name: str, variable: str) -> Floats:
        """The table's history of a variable in the scenario's unit."""
        spec = self.mapping.of(name)[variable]
        return converted(self.stated(name).own[variable], spec.table_unit or spec.unit, spec.unit)


def _unit_problems(
    variable: str, spec: ImportedVariable, values: Floats, shares: Sequence[str]
) -> list[Problem]:
    kind = "growth" if spec.growth else "deviation" if spec.deviation_from else "level"
    unit = (spec.table_unit or spec.unit) if kind == "level" else spec.amounts or ""
    if shares and unit == "percent":
        key = "table_unit" if kind == "level" else "amounts"
        remedy = f"Excel keeps 5.3 % as 0.053: declare {key}: fraction, which is converted."
        return [
            problem_of(
                "unit_shown", f"cells of {variable} formatted as percent, declared as percent", shares, remedy
            )
        ]
    problem = None if spec.sure else unit_problem(variable, values, kind=kind, unit=unit)
    return [] if problem is None else [problem]
