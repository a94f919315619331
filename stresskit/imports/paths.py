"""Every scenario of a mapping as complete levels: forms undone, joined to history, put on the scenario's calendar."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.imports.forms import converted, deviated, grown, spliced, spread
from stresskit.imports.join import Meeting, Past, judge
from stresskit.imports.rows import PER_YEAR, period_label
from stresskit.imports.sheets import Sheet
from stresskit.imports.stated import Stated, Tables
from stresskit.macro.table import problem_of
from stresskit.spec.imports import ImportedVariable, ImportMapping

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class ImportedPath:
    """One scenario's levels on its calendar.

    told    variable -> how it was made of its column; nothing for those taken as published
    sheets  tables that the numbers come from, its own first
    joined  name and digest of the file of history that numbers also come from, None when they do not
    """

    name: str
    calendar: str
    start: int
    values: Mapping[str, Floats]
    told: Mapping[str, str]
    cautions: tuple[str, ...]
    sheets: tuple[Sheet, ...]
    joined: tuple[str, str] | None


@dataclass(slots=True)
class Importer:
    """The scenarios of one mapping, computed when asked for.

    given  variable -> history to join, instead of the table's own
    """

    tables: Tables
    given: Mapping[str, Past] = field(default_factory=dict)

    @property
    def mapping(self) -> ImportMapping:
        return self.tables.mapping

    def past(self, name: str, variable: str) -> Past:
        """History to join: the one given, or the table's own where it states levels."""
        if variable in self.given:
            return self.given[variable]
        stated, spec = self.tables.stated(name), self.mapping.of(name)[variable]
        levels = spec.growth is None and spec.deviation_from is None
        own = self.tables.own_levels(name, variable) if levels else np.empty(0)
        return Past(stated.ahead.calendar, own[np.isfinite(own)], "the table's own history", True)

    def levels(self, name: str, variable: str) -> Floats:
        """Levels on the calendar of the table, (n,)."""
        spec, stated = self.mapping.of(name)[variable], self.tables.stated(name)
        raw = stated.values[variable]
        if spec.growth is not None:
            return self._grown(name, variable, spec, raw)
        if spec.deviation_from is not None:
            return self._deviated(name, variable, spec, raw)
        levels = converted(raw, spec.table_unit or spec.unit, spec.unit)
        if spec.splice != "growth":
            return levels
        own, past = self._own_at_as_of(name, variable), self.past(name, variable)
        if own is None:
            raise self._error(
                name, variable, "splice",
                f"the table has no value of {variable} in {self.mapping.as_of} to measure growth from; give it as at_as_of",
            )  # fmt: skip
        if past.last is None or past.own:
            raise self._error(
                name, variable, "splice",
                f"there is no other history of {variable} to splice onto; name it under join, or import with --study",
            )  # fmt: skip
        if own <= 0 or past.last <= 0:
            raise self._error(
                name, variable, "splice", f"growth from {own:g} or {past.last:g} is not defined"
            )
        return spliced(levels, own, past.last)

    def _own_at_as_of(self, name: str, variable: str) -> float | None:
        spec = self.mapping.of(name)[variable]
        if spec.at_as_of is not None:
            return spec.at_as_of
        own = self.tables.own_levels(name, variable)
        return float(own[-1]) if own.size and np.isfinite(own[-1]) else None

    def _grown(self, name: str, variable: str, spec: ImportedVariable, raw: Floats) -> Floats:
        calendar, past = self.tables.stated(name).ahead.calendar, self.past(name, variable)
        needed = PER_YEAR[calendar] if spec.growth == "year_on_year" else 1
        known = past.values
        if spec.at_as_of is not None:
            known = np.append(known[:-1], spec.at_as_of)
        if known.size < needed or (needed > 1 and past.calendar != calendar):
            raise self._error(
                name, variable, "growth",
                f"growth of {variable} needs {needed} value{'s' if needed > 1 else ''} of its level up to {self.mapping.as_of} to "
                f"start from, and there {'is' if known.size == 1 else 'are'} {known.size}; name the history under join, import "
                f"with --study{', or give at_as_of' if needed == 1 else ''}",
            )  # fmt: skip
        growth = raw / 100.0 if spec.amounts == "percent" else raw
        if (growth <= -1).any() or (known[-needed:] <= 0).any():
            raise self._error(name, variable, "growth", f"{variable} would fall to zero or below")
        return grown(growth, spec.growth or "", known, PER_YEAR[calendar])

    def _deviated(self, name: str, variable: str, spec: ImportedVariable, raw: Floats) -> Floats:
        other = spec.deviation_from or ""
        mine, theirs = self.tables.stated(name).ahead, self.tables.stated(other).ahead
        base = self.levels(other, variable)
        if mine.calendar != theirs.calendar or base.size < raw.size:
            raise self._error(
                name, variable, "deviation_from",
                f"{other!r} is stated for {base.size} {theirs.calendar}s and {name!r} for {raw.size} {mine.calendar}s; deviations "
                "need the other path in the same periods",
            )  # fmt: skip
        return deviated(base[: raw.size], raw, spec.amounts or "")

    def _error(self, name: str, variable: str, key: str, message: str) -> Exception:
        return self.tables.loaded.error((*self.tables.keys(name, variable), key), message)

    def path(self, name: str) -> ImportedPath:
        """A scenario's levels with everything to be told about them. Raises TextError and DataError."""
        stated = self.tables.stated(name)
        calendar = self.mapping.calendar if stated.ahead.calendar == "year" else stated.ahead.calendar
        start = stated.ahead.start
        if stated.ahead.calendar == "year":
            start *= PER_YEAR[calendar]
        values: dict[str, Floats] = {}
        told: dict[str, str] = {}
        cautions: list[str] = []
        problems: list[Problem] = []
        for variable, spec in self.mapping.of(name).items():
            levels = self._on_calendar(name, variable, calendar)
            values[variable] = levels
            if words := _told(spec, stated.ahead.calendar):
                told[variable] = words
            said, problem = judge(
                Meeting(
                    variable, spec.unit, float(levels[0]), period_label(start, calendar), self.mapping.as_of,
                    own=self._own_at_as_of(name, variable), declared=spec.splice,
                    direct=spec.growth is None and spec.deviation_from is None,
                ),
                self._comparable(name, variable, calendar),
            )  # fmt: skip
            cautions += said
            problems += [problem] if problem is not None else []
            problems += _impossible(variable, spec.unit, levels, start, calendar)
        if problems:
            raise DataError(
                f"{stated.ahead.sheet.source}, scenario {name!r}: paths that cannot be used", problems
            )
        return ImportedPath(
            name, calendar, start, values, told, tuple(cautions), self._used(name, stated), self._joined(name)
        )

    def _joined(self, name: str) -> tuple[str, str] | None:
        """The history that levels continue: by growth, by a splice, or from year to year."""
        for variable, spec in self.mapping.of(name).items():
            past = self.past(name, variable)
            continues = spec.growth is not None or "growth" in (spec.splice, spec.within_year)
            if not past.own and (continues or spec.within_year == "linear"):
                return past.source, past.digest
            if spec.deviation_from is not None and (found := self._joined(spec.deviation_from)) is not None:
                return found
        return None

    def _comparable(self, name: str, variable: str, calendar: str) -> Past:
        """The history, or nothing of it where it is on another calendar: a year's move is no quarter's move."""
        past = self.past(name, variable)
        return past if past.calendar == calendar else Past(calendar, np.empty(0), past.source, past.own)

    def _on_calendar(self, name: str, variable: str, calendar: str) -> Floats:
        spec, table = self.mapping.of(name)[variable], self.tables.stated(name).ahead.calendar
        levels = self.levels(name, variable)
        if table != "year":
            if spec.within_year is not None:
                raise self._error(
                    name, variable, "within_year", f"the table is not annual: its rows are a {table} apart"
                )
            return levels
        if spec.within_year is None:
            raise self.tables.loaded.error(
                self.tables.keys(name, variable),
                f"the table is annual: say how {variable} runs within a year, within_year: step, linear or growth",
            )
        past = self.past(name, variable).last
        if spec.within_year != "step" and past is None:
            past = spec.at_as_of
        if spec.within_year != "step" and past is None:
            raise self._error(
                name, variable, "within_year",
                f"{spec.within_year} starts from the value of {variable} in {self.mapping.as_of}, which is not known; name the "
                "history under join, import with --study, or use step",
            )  # fmt: skip
        if spec.within_year == "growth" and ((past or 0.0) <= 0 or (levels <= 0).any()):
            raise self._error(name, variable, "within_year", f"growth of {variable} needs values above zero")
        return spread(levels, spec.within_year, past or 0.0, PER_YEAR[calendar])

    def _used(self, name: str, stated: Stated) -> tuple[Sheet, ...]:
        """Sheets that a scenario's numbers come from, its own first."""
        used = [stated.ahead.sheet]
        if stated.before is not None:
            used.append(stated.before.sheet)
        others = {s.deviation_from for s in self.mapping.of(name).values() if s.deviation_from is not None}
        used += [self.tables.stated(o).ahead.sheet for o in sorted(others)]
        return tuple({s.source: s for s in used}.values())


def _impossible(variable: str, unit: str, levels: Floats, start: int, calendar: str) -> list[Problem]:
    out = []
    for code, message, rows, remedy in (
        ("value_not_finite", f"values of {variable} too large to compute", np.flatnonzero(~np.isfinite(levels)),
         "Check growth and its form."),
        ("value_not_positive", f"values of {variable} ({unit}) at or below zero", np.flatnonzero(levels <= 0),
         "Check the column and the unit."),
    ):  # fmt: skip
        if rows.size and (code == "value_not_finite" or unit == "index"):
            cases = [f"{period_label(start + int(i), calendar)}: {levels[i]:g}" for i in rows]
            out.append(problem_of(code, message, cases, remedy))
    return out


def _told(spec: ImportedVariable, table: str) -> str:
    """How a variable was made of its column, "" when it was taken as published."""
    parts = []
    if spec.growth is not None:
        words = {
            "per_period": f"per {table}",
            "annualised": "at an annual rate",
            "year_on_year": "year on year",
        }
        parts.append(f"from growth {words[spec.growth]} in {spec.amounts}")
    if spec.deviation_from is not None:
        parts.append(f"{spec.deviation_from} plus deviations in {spec.amounts}")
    if spec.table_unit is not None and spec.table_unit != spec.unit:
        parts.append(f"converted from {spec.table_unit} to {spec.unit}")
    if spec.splice == "growth":
        parts.append("spliced onto history by growth")
    elif spec.splice == "none":
        parts.append("as published, declared not to be spliced")
    if spec.within_year is not None:
        parts.append({"step": "a year's value in all its periods", "linear": "year-end values, linear between",
                      "growth": "year-end values, constant growth between"}[spec.within_year])  # fmt: skip
    return "; ".join(parts)
