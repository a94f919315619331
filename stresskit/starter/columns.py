"""What the columns of a loan table look like: dates, numbers, flags or words, and how many values they have."""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Literal

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, frequency_of_label, parse_period
from stresskit.panel.csvfile import csv_header

#: Rows that are looked at; guesses need no more.
MOST_ROWS = 200_000
#: Values of a column that are tried as dates.
_TRIED = 500
Kind = Literal["date", "number", "flag", "text", "empty"]


@dataclass(frozen=True, slots=True)
class Column:
    """One column of the table.

    kind      date (also period labels), number, flag (0 and 1 only), text, or empty
    filled    share of rows with a value, 0 to 1
    distinct  number of different values
    levels    the values with their counts, most frequent first; empty for more than 30 of them
    first, last  earliest and latest month (ordinal) of a date column, else None
    median    of the values of a number column, else 0
    quarterly whether a date column's labels are quarters
    """

    name: str
    kind: Kind
    filled: float
    distinct: int
    levels: Mapping[str, int]
    first: int | None = None
    last: int | None = None
    median: float = 0.0
    quarterly: bool = False


@dataclass(frozen=True, slots=True)
class Looked:
    """The table as far as it was read: rows, whether that is all of it, and its columns in their order."""

    file: Path
    rows: int
    whole: bool
    columns: tuple[Column, ...]


def look(file: Path) -> Looked:
    """Read the first rows of a CSV or Parquet file. Raises DataError when there are none to read."""
    if not file.is_file():
        raise DataError(f"{file}: no such file{_near(file)}")
    if file.suffix.lower() not in (".csv", ".parquet"):
        raise DataError(f"{file}: expected a .csv or .parquet file")
    try:
        frame, whole = _csv(file) if file.suffix.lower() == ".csv" else _parquet(file)
    except (OSError, ValueError, pa.ArrowException) as error:
        raise DataError(f"{file} cannot be read: {str(error).splitlines()[0]}") from error
    if not len(frame):
        raise DataError(f"{file} has no rows: expected a header and a row per loan, or per loan and period")
    return Looked(file, len(frame), whole, tuple(_column(str(c), frame[c]) for c in frame.columns))


def _near(file: Path) -> str:
    if not file.parent.is_dir():
        return f": the folder {str(file.parent)!r} does not exist"
    names = sorted(p.name for p in file.parent.iterdir() if p.suffix.lower() in (".csv", ".parquet"))
    near = difflib.get_close_matches(file.name, names, n=2, cutoff=0.5)
    return f"; did you mean {' or '.join(repr(n) for n in near)}?" if near else ""


def _csv(file: Path) -> tuple[pd.DataFrame, bool]:
    names = csv_header(file, str(file))
    frame = pd.read_csv(file, dtype=str, keep_default_na=False, nrows=MOST_ROWS + 1, encoding="utf-8-sig")
    frame.columns = pd.Index(names)
    return frame.head(MOST_ROWS), len(frame) <= MOST_ROWS


def _parquet(file: Path) -> tuple[pd.DataFrame, bool]:
    table = pq.ParquetFile(file)
    batches = list(_first(table))
    frame = (
        pa.Table.from_batches(batches, schema=table.schema_arrow).to_pandas() if batches else pd.DataFrame()
    )
    return frame.head(MOST_ROWS), table.metadata.num_rows <= MOST_ROWS


def _first(table: pq.ParquetFile) -> list[pa.RecordBatch]:
    """Batches until there are rows enough."""
    out, rows = [], 0
    for batch in table.iter_batches(batch_size=MOST_ROWS):
        out.append(batch)
        rows += batch.num_rows
        if rows >= MOST_ROWS:
            break
    return out


def _column(name: str, values: pd.Series) -> Column:
    known = values.dropna()
    text = known.astype(str).str.strip()
    text = text[text != ""]
    if not len(text):
        return Column(name, "empty", 0.0, 0, {})
    counts = text.value_counts()
    levels = {str(k): int(n) for k, n in counts.items()} if len(counts) <= 30 else {}
    plain = Column(name, "text", len(text) / max(1, len(values)), len(counts), levels)
    numbers = pd.to_numeric(text, errors="coerce")
    if numbers.notna().mean() >= 0.99 and not pd.api.types.is_datetime64_any_dtype(values):
        flag = bool(levels) and set(levels) <= {"0", "1", "0.0", "1.0", "True", "False"}
        return replace(plain, kind="flag" if flag else "number", median=float(numbers.median()))
    months = [m for m in map(_month, counts.index[:_TRIED]) if m is not None]
    if len(months) >= 0.95 * min(len(counts), _TRIED):
        every = [m for m in map(_month, counts.index) if m is not None]
        quarterly = frequency_of_label(str(counts.index[0])) is Frequency.QUARTER
        return replace(plain, kind="date", levels={}, first=min(every), last=max(every), quarterly=quarterly)
    return plain


def _month(label: object) -> int | None:
    """The month that a date or period label means; None for anything else."""
    text = str(label)
    text = text.split(" ")[0].split("T")[0] if len(text) > 10 else text
    try:
        return parse_period(text, Frequency.MONTH)
    except ValueError:
        return None
