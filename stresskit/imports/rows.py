"""A sheet's rows as columns of numbers on an unbroken calendar, history and projection apart."""

from __future__ import annotations

import datetime
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency, convert, format_period, frequency_of_label, parse_period
from stresskit.imports.sheets import Row, Sheet
from stresskit.macro.table import problem_of
from stresskit.spec.base import closest

Floats = NDArray[np.float64]
#: Length of a row's period -> periods in a year.
PER_YEAR: Mapping[str, int] = {"year": 1, "quarter": 4, "month": 12}
_YEAR = re.compile(r"^(\d{4})$")
_NUMBER = re.compile(r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$")
_FIRST = 5


@dataclass(frozen=True, slots=True)
class Rows:
    """Dated rows in calendar order.

    calendar  year, quarter or month
    start     ordinal of row 0 (a year's ordinal is the year)
    rows      (n,) rows of the sheet, one per period, none missing
    """

    sheet: Sheet
    calendar: str
    start: int
    rows: tuple[Row, ...]

    @property
    def end(self) -> int:
        return self.start + len(self.rows) - 1

    def label(self, row: int) -> str:
        return period_label(self.start + row, self.calendar)

    def cut(self, first: int, last: int) -> Rows:
        """Rows of the periods ``first`` to ``last``, both in this calendar and held here."""
        return Rows(self.sheet, self.calendar, first, self.rows[first - self.start : last - self.start + 1])


def period_label(ordinal: int, calendar: str) -> str:
    return str(ordinal) if calendar == "year" else format_period(ordinal, Frequency(calendar))


def first_projected(as_of: str, calendar: str) -> int | None:
    """First period of the calendar that ends after ``as_of``; None when as_of lies inside a year of an annual one."""
    following = parse_period(as_of, Frequency.MONTH) + 1
    if calendar == "year":
        return following // 12 if following % 12 == 0 else None
    return int(convert(following, Frequency.MONTH, Frequency(calendar)))


def split_at_marker(sheet: Sheet, marker: str) -> tuple[tuple[Row, ...], tuple[Row, ...]]:
    """Rows above and below the one row that holds the marker's text. Raises DataError."""
    at = [i for i, r in enumerate(sheet.rows) if marker in map(r.text, range(len(r.cells)))]
    if not at:
        texts = [t for r in sheet.rows for t in [r.text(0)] if t and not any(c.isdigit() for c in t)]
        near = closest(marker, texts)
        hint = f" (nearest: {near!r})" if near is not None else ""
        raise DataError(
            f"{sheet.source}: no row holds the marker {marker!r}{hint}; give its text as it stands in one cell, or take "
            "marker out: rows up to as_of are then the history"
        )
    if len(at) > 1:
        where = ", ".join(sheet.place(sheet.rows[i], 0) for i in at[:_FIRST])
        raise DataError(
            f"{sheet.source}: the marker {marker!r} stands in {len(at)} rows: {where}; expected one"
        )
    return sheet.rows[: at[0]], sheet.rows[at[0] + 1 :]


def dated(sheet: Sheet, rows: Sequence[Row], period: int, *, declared: str | None) -> Rows:
    """The rows by period. Raises DataError: labels that name no period, mixed calendars, doubled or missing periods.

    period    position of the period column
    declared  length of a period, when the mapping states it
    """
    labels = [_label(r.cells[period] if period < len(r.cells) else None) for r in rows]
    unread = [
        f"{sheet.place(r, period)}: {t!r}" for r, t in zip(rows, labels, strict=True) if _kind(t) is None
    ]
    if unread:
        remedy = (
            "Expected '2025', '2025 Q4', '2025-12' or '2025-12-31'; last_row leaves notes below the table out, and only "
            "or scenario_column rows of another kind."
        )
        name = sheet.header[period]
        problem = problem_of("period_unreadable", f"rows whose {name!r} names no period", unread, remedy)
        raise DataError(f"{sheet.source}: periods cannot be read", [problem])
    calendar, ordinals = _ordinals(sheet, rows, labels, period, declared)
    _unbroken(sheet, rows, ordinals, calendar)
    order = np.argsort(ordinals, kind="stable")
    return Rows(sheet, calendar, int(ordinals.min()), tuple(rows[int(i)] for i in order))


def _label(cell: Any) -> str:
    if isinstance(cell, datetime.datetime | datetime.date):
        return cell.isoformat()[:10]
    if isinstance(cell, float) and cell.is_integer():
        return str(int(cell))
    return "" if cell is None or isinstance(cell, bool) else " ".join(str(cell).split())


def _kind(label: str) -> str | None:
    if _YEAR.match(label):
        return "year"
    try:
        parse_period(label, Frequency.MONTH)
    except ValueError:
        return None
    return "quarter" if frequency_of_label(label) is Frequency.QUARTER else "month"


def _ordinals(
    sheet: Sheet, rows: Sequence[Row], labels: Sequence[str], period: int, declared: str | None
) -> tuple[str, NDArray[np.int64]]:
    kinds: dict[str, str] = {}
    for row, label in zip(rows, labels, strict=True):
        kinds.setdefault(str(_kind(label)), f"{label!r} in {sheet.place(row, period)}")
    if len(kinds) > 1:
        raise DataError(
            f"{sheet.source}: column {sheet.header[period]!r} mixes calendars: {', '.join(kinds.values())}; keep rows of one "
            "kind (only, scenario_column, last_row)"
        )
    kind = next(iter(kinds))
    if kind == "year":
        calendar, ordinals = "year", [int(t) for t in labels]
    elif kind == "quarter":
        calendar, ordinals = "quarter", [parse_period(t, Frequency.QUARTER) for t in labels]
    else:
        calendar, ordinals = _by_spacing(sheet, [parse_period(t, Frequency.MONTH) for t in labels], declared)
    if declared is not None and declared != calendar:
        raise DataError(
            f"{sheet.source}: rows are a {calendar} apart, but the mapping says frequency: {declared}"
        )
    return calendar, np.asarray(ordinals, dtype=np.int64)


def _by_spacing(sheet: Sheet, months: Sequence[int], declared: str | None) -> tuple[str, list[int]]:
    """Calendar of rows dated by month or day, told from the smallest step between them."""
    steps = sorted({later - earlier for earlier, later in pairwise(sorted(set(months)))})
    found = {1: "month", 3: "quarter", 12: "year"}.get(steps[0]) if steps else declared
    if found is None:
        said = f"dates step by {steps[0]} months" if steps else "one date shows no spacing; state frequency"
        raise DataError(f"{sheet.source}: {said}; expected rows a month, a quarter or a year apart")
    length = 12 // PER_YEAR[found]
    if any(step % length for step in steps):
        raise DataError(
            f"{sheet.source}: dates step by {', '.join(map(str, steps[:_FIRST]))} months; expected one spacing throughout"
        )
    return found, [month // length for month in months]


def _unbroken(sheet: Sheet, rows: Sequence[Row], ordinals: NDArray[np.int64], calendar: str) -> None:
    problems: list[Problem] = []
    seen, counts = np.unique(ordinals, return_counts=True)
    doubled = [
        f"{period_label(int(p), calendar)} (rows {', '.join(str(rows[int(i)].number) for i in np.flatnonzero(ordinals == p))})"
        for p in seen[counts > 1]
    ]
    if doubled:
        remedy = "Keep one row per period; where the table holds several scenarios or vintages, name scenario_column or only."
        problems.append(problem_of("period_doubled", "periods with more than one row", doubled, remedy))
    absent = np.setdiff1d(np.arange(seen[0], seen[-1] + 1), seen)
    if absent.size:
        cases = [period_label(int(p), calendar) for p in absent]
        problems.append(
            problem_of(
                "period_missing", "periods without a row", cases, "Add the rows: every period is needed."
            )
        )
    if problems:
        raise DataError(f"{sheet.source}: the calendar of the table is broken", problems)


def numbers(rows: Rows, column: int, *, variable: str, blanks_before: bool) -> tuple[Floats, list[Problem]]:
    """One column in calendar order (n,), and what is wrong with it.

    blanks_before  whether cells may be blank (NaN) before the first value; blanks elsewhere are a problem
    """
    values = np.empty(len(rows.rows))
    wrong: list[str] = []
    blank: list[str] = []
    for i, row in enumerate(rows.rows):
        cell = row.cells[column] if column < len(row.cells) else None
        number = _number(cell)
        where = f"{rows.label(i)} ({rows.sheet.place(row, column)})"
        values[i] = math.nan if number is None else number
        if number is None:
            wrong.append(f"{where}: {row.text(column)!r}")
        elif math.isnan(number) and not (blanks_before and np.isnan(values[:i]).all()):
            blank.append(where)
    problems = []
    if wrong:
        remedy = (
            "Write plain decimals (5.1 or 1e-3, no separators or percent signs); leave unknown values blank."
        )
        problems.append(
            problem_of("value_not_number", f"cells of {variable} that are not numbers", wrong, remedy)
        )
    if blank:
        remedy = "A scenario states every value, history every value after its first; last_row cuts a table."
        problems.append(problem_of("value_blank", f"blank cells of {variable}", blank, remedy))
    return values, problems


def _number(cell: Any) -> float | None:
    """The cell's number, NaN for a blank, None for anything else."""
    if isinstance(cell, bool | datetime.date | datetime.time | datetime.timedelta):
        return None
    if isinstance(cell, int | float):
        return float(cell) if math.isfinite(cell) else None
    text = "" if cell is None else str(cell).strip()
    if not text:
        return math.nan
    value = float(text) if _NUMBER.match(text) else math.nan
    return value if math.isfinite(value) else None


def shown_as_percent(rows: Rows, column: int) -> list[str]:
    """Cells of the column that Excel shows as percent, so that 5.3 % is 0.053 in the file."""
    return [
        f"{rows.sheet.place(row, column)}: {row.cells[column]:g}"
        for row in rows.rows
        if column in row.percent
    ]
