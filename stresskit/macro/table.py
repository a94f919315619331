"""Published wide tables: a row per period, a column per variable, read strictly.

Both macro history and scenario tables come through here, so that the same defects are found in
both. Everything that is wrong is collected before DataError is raised.
"""

from __future__ import annotations

import csv
import io
import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency, convert, format_period, frequency_of_label, parse_period
from stresskit.macro.calendar import infer_frequency
from stresskit.spec.base import closest

_NUMBER = re.compile(r"^[+-]?(\d+\.?\d*|\.\d+)([eE][+-]?\d+)?$")
_FIRST = 5


@dataclass(frozen=True, slots=True)
class WideTable:
    """Variables on an unbroken macro calendar.

    frequency  of the rows
    start      ordinal of row 0
    values     variable -> (n,) float64; NaN only before a variable's first value
    """

    frequency: Frequency
    start: int
    values: Mapping[str, NDArray[np.float64]]

    @property
    def n_periods(self) -> int:
        return int(next(iter(self.values.values())).shape[0])


@dataclass(frozen=True, slots=True)
class Layout:
    """What to take from a table.

    period  name of the period column
    only    column -> values: rows that hold another value are left out
    columns variable -> column
    """

    period: str
    only: Mapping[str, Sequence[str]]
    columns: Mapping[str, str]


def problem_of(code: str, message: str, cases: Sequence[str], remedy: str) -> Problem:
    """A problem that counts its cases and shows the first of them."""
    return Problem(code, message, len(cases), tuple(cases[:_FIRST]), remedy)


def read_csv(file: Path) -> pd.DataFrame:
    """A CSV file as text cells (comma separated, UTF-8, first line names the columns).

    Rows with more or fewer cells than the header and columns named twice are refused: a shifted row
    would otherwise put one variable's value under another's name. Raises DataError.
    """
    try:
        text = file.read_text(encoding="utf-8-sig")
    except FileNotFoundError:
        near = sorted(p.name for p in file.parent.glob("*.csv"))[:_FIRST]
        there = f" That folder has: {', '.join(near)}." if near else ""
        raise DataError(f"{file}: the file does not exist.{there}") from None
    except UnicodeDecodeError as error:
        raise DataError(
            f"{file}: not UTF-8 text (byte {error.start}); save the table as CSV in UTF-8"
        ) from None
    except OSError as error:
        raise DataError(f"{file}: cannot be read: {error.strerror}") from None
    return _cells(text, str(file))


def _cells(text: str, source: str) -> pd.DataFrame:
    reader = csv.reader(io.StringIO(text, newline=""), strict=True)
    header: list[str] = []
    rows: list[list[str]] = []
    uneven: list[str] = []
    try:
        for cells in reader:
            if not any(c.strip() for c in cells):
                continue
            if not header:
                header = [c.strip() for c in cells]
            elif len(cells) != len(header):
                uneven.append(f"line {reader.line_num}: {len(cells)} cells")
            else:
                rows.append(cells)
    except csv.Error as error:
        raise DataError(f"{source}: line {reader.line_num} is not CSV: {error}") from None
    if not header:
        raise DataError(f"{source}: the file is empty; expected a line of column names and a row per period")
    problems = []
    if uneven:
        problems.append(
            problem_of(
                "row_width",
                f"rows that do not have the header's {len(header)} cells",
                uneven,
                "Fill or remove cells so that every row matches the header.",
            )
        )
    doubled = sorted({c for c in header if header.count(c) > 1})
    if doubled:
        problems.append(
            problem_of(
                "column_doubled",
                "columns that are named more than once",
                [repr(c) for c in doubled],
                "Give every column its own name.",
            )
        )
    if problems:
        raise DataError(f"{source}: the table cannot be read", problems)
    return pd.DataFrame(rows, columns=header, dtype=object)


def column_problem(wanted: Mapping[str, str], available: Sequence[str]) -> Problem | None:
    """The problem that named columns do not exist, or None. ``wanted``: what for -> column."""
    missing = {use: column for use, column in wanted.items() if column not in available}
    if not missing:
        return None
    cases = []
    for use, column in missing.items():
        near = closest(column, available)
        cases.append(f"{column!r} for {use}" + (f" (nearest: {near!r})" if near is not None else ""))
    remedy = f"The table has: {', '.join(available)}."
    return problem_of("column_missing", "columns that the table does not have", cases, remedy)


def wide_table(frame: pd.DataFrame, layout: Layout, *, source: str, blanks_before: bool = True) -> WideTable:
    """The named variables of a table, sorted by period, complete, as numbers.

    frame          cells as text or numbers
    source         what messages call the table
    blanks_before  whether a variable may be blank before its first value

    Raises DataError with every problem found: missing columns, no rows, periods that cannot be read,
    are doubled or missing, cells that are no numbers, blanks inside or at the end.
    """
    if layout.period not in frame.columns and layout.period in frame.index.names:
        frame = frame.reset_index()
    frame = frame.rename(columns=str)
    wanted = {f"only.{c}": c for c in layout.only} | {f"variable {v}": c for v, c in layout.columns.items()}
    problem = column_problem({"period": layout.period} | wanted, list(frame.columns))
    if problem is not None:
        raise DataError(f"{source}: the table lacks columns", [problem])
    frame = _rows_of(frame, layout.only, source)
    frequency, ordinals = _periods([_text(cell) for cell in frame[layout.period]], layout.period, source)
    order = np.argsort(ordinals, kind="stable")
    labels = [format_period(p, frequency) for p in ordinals[order]]
    values: dict[str, NDArray[np.float64]] = {}
    problems: list[Problem] = []
    for variable, column in layout.columns.items():
        cells = list(frame[column])
        values[variable], found = _numbers([cells[i] for i in order], labels, variable, blanks_before)
        problems.extend(found)
    if problems:
        raise DataError(f"{source}: values that cannot be used", problems)
    return WideTable(frequency, int(ordinals.min()), values)


def _rows_of(frame: pd.DataFrame, only: Mapping[str, Sequence[str]], source: str) -> pd.DataFrame:
    for column, wanted in only.items():
        cells = [_text(cell) for cell in frame[column]]
        kept = frame[[cell in wanted for cell in cells]]
        if kept.empty and len(frame):
            there = sorted(set(cells))
            more = " and more" if len(there) > _FIRST else ""
            raise DataError(
                f"{source}: no row has {' or '.join(map(repr, wanted))} in column {column!r}; "
                f"it holds {', '.join(map(repr, there[:_FIRST]))}{more}"
            )
        frame = kept
    if frame.empty:
        raise DataError(f"{source}: the table has no rows; expected a row per period")
    return frame


def _periods(labels: Sequence[str], column: str, source: str) -> tuple[Frequency, NDArray[np.int64]]:
    """Frequency and ordinals of the rows, in the order of the rows; unbroken and each once."""
    quarters = [frequency_of_label(t) is Frequency.QUARTER for t in labels]
    shape = Frequency.QUARTER if any(quarters) else Frequency.MONTH
    unread: list[str] = []
    ordinals: list[int] = []
    for label, is_quarter in zip(labels, quarters, strict=True):
        try:
            ordinals.append(parse_period(label, shape))
        except ValueError:
            unread.append(repr(label))
            continue
        if any(quarters) and not is_quarter:
            unread.append(f"{label!r} among quarters")
    if unread:
        remedy = "Expected one shape throughout: '2025 Q4', '2025-12' or '2025-12-31'."
        problem = problem_of("period_unreadable", f"rows whose {column!r} names no period", unread, remedy)
        raise DataError(f"{source}: periods cannot be read", [problem])
    frequency, where = shape, np.asarray(ordinals, dtype=np.int64)
    if shape is Frequency.MONTH:
        months = sorted(set(ordinals))
        inferred = infer_frequency(months)
        if inferred is None:
            steps = sorted({later - earlier for earlier, later in pairwise(months)})
            raise DataError(
                f"{source}: column {column!r} steps by {', '.join(map(str, steps[:_FIRST])) or 'no'} months; "
                "expected rows one month or three months apart (quarter labels like '2025 Q4' say the "
                "frequency themselves)"
            )
        frequency, where = inferred, np.asarray(convert(where, Frequency.MONTH, inferred), dtype=np.int64)
    _unbroken(where, frequency, source)
    return frequency, where


def _unbroken(ordinals: NDArray[np.int64], frequency: Frequency, source: str) -> None:
    seen, counts = np.unique(ordinals, return_counts=True)
    problems = []
    doubled = seen[counts > 1]
    if doubled.size:
        problems.append(
            problem_of(
                "period_doubled",
                "periods with more than one row",
                [format_period(p, frequency) for p in doubled],
                "Keep one row per period; if the table holds several scenarios or vintages, choose one with only.",
            )
        )
    absent = np.setdiff1d(np.arange(seen[0], seen[-1] + 1), seen)
    if absent.size:
        problems.append(
            problem_of(
                "period_missing",
                "periods without a row",
                [format_period(p, frequency) for p in absent],
                "Add the rows: lags and changes need every period.",
            )
        )
    if problems:
        raise DataError(f"{source}: the calendar of the table is broken", problems)


def _text(cell: object) -> str:
    if cell is None or cell is pd.NaT or cell is pd.NA or (isinstance(cell, float) and math.isnan(cell)):
        return ""
    return str(cell).strip()


def _number(cell: object) -> float | None:
    """The cell's number, NaN for a blank, None for anything else."""
    text = _text(cell)
    if not text:
        return math.nan
    if isinstance(cell, bool | np.bool_) or not _NUMBER.match(text):
        return None
    value = float(text)
    return value if math.isfinite(value) else None


def _numbers(
    cells: Sequence[object], labels: Sequence[str], variable: str, blanks_before: bool
) -> tuple[NDArray[np.float64], list[Problem]]:
    """One variable's values in calendar order, and what is wrong with them."""
    problems = []
    numbers = [_number(cell) for cell in cells]
    wrong = [f"{labels[i]}: {_text(cells[i])!r}" for i, number in enumerate(numbers) if number is None]
    if wrong:
        problems.append(
            problem_of(
                "value_not_number",
                f"cells of {variable} that are not numbers",
                wrong,
                "Write plain decimals (5.1 or 1e-3, no separators or percent signs); leave unknown values blank.",
            )
        )
    values = np.array([math.nan if number is None else number for number in numbers])
    blank = np.array([number is not None and math.isnan(number) for number in numbers])
    if blank.all():
        remedy = "Remove the variable or name the right column."
        return values, [
            problem_of("variable_empty", f"rows, in none of which {variable} has a value", labels, remedy)
        ]
    holes = np.flatnonzero(blank)
    if blanks_before:
        holes = holes[holes > int(np.argmin(blank))]
    if holes.size:
        message, remedy = f"blank cells of {variable}", "A scenario states every value of its variables."
        if blanks_before:
            message += " after its first value"
            remedy = "Fill them, or cut the table at its last complete period."
        problems.append(problem_of("value_blank", message, [labels[int(i)] for i in holes], remedy))
    return values, problems
