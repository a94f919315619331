"""Tables as people see them: cells of finished text in named columns. Escaping happens in the template."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from stresskit.report import numbers as num

#: Rows of a table behind a figure; longer ones are cut and say where the rest is.
MOST_ROWS = 480

Format = Callable[[Any], str]


@dataclass(frozen=True, slots=True)
class Cell:
    """Text, a smaller second line, and a mark that the style sheet knows: "", "warn", "good", "after"."""

    text: str
    sub: str = ""
    mark: str = ""


@dataclass(frozen=True, slots=True)
class Column:
    """Heading, and whether the cells are numbers (set to the right, in tabular figures)."""

    label: str
    number: bool = True


@dataclass(frozen=True, slots=True)
class Table:
    """Columns and rows of equal length; ``note`` stands below; ``title`` names it for screen readers."""

    title: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    note: str = ""

    def __post_init__(self) -> None:
        for row in self.rows:
            if len(row) != len(self.columns):
                raise ValueError(
                    f"table {self.title!r}: a row of {len(row)} cells in {len(self.columns)} columns"
                )


def columns(*labels: str, words: int = 1) -> tuple[Column, ...]:
    """Columns by heading: the first ``words`` hold text, the others numbers."""
    return tuple(Column(label, number=k >= words) for k, label in enumerate(labels))


def row(*values: str | Cell) -> tuple[Cell, ...]:
    """A row; plain strings become cells."""
    return tuple(v if isinstance(v, Cell) else Cell(v) for v in values)


def cut(
    rows: Sequence[tuple[Cell, ...]], *, rest: str, most: int = MOST_ROWS
) -> tuple[tuple[tuple[Cell, ...], ...], str]:
    """At most ``most`` rows and, when some were cut, a note that names where all of them are."""
    if len(rows) <= most:
        return tuple(rows), ""
    return tuple(rows[:most]), f"The first {most:,} of {len(rows):,} rows; all of them are in {rest}."


def from_frame(
    frame: pd.DataFrame,
    title: str,
    *,
    formats: Mapping[str, Format] | None = None,
    names: Mapping[str, str] | None = None,
    rest: str = "results.xlsx",
    most: int = MOST_ROWS,
) -> Table:
    """Any frame as a table: numbers to the right, underscores of column names as spaces."""
    formats, names = formats or {}, names or {}
    kinds = [
        pd.api.types.is_numeric_dtype(frame[c]) and not pd.api.types.is_bool_dtype(frame[c]) for c in frame
    ]
    heads = tuple(
        Column(names.get(str(c), str(c).replace("_", " ")), number=kind)
        for c, kind in zip(frame, kinds, strict=True)
    )
    shapes = [formats.get(str(c), num.plain if kind else text) for c, kind in zip(frame, kinds, strict=True)]
    rows = [
        tuple(Cell(shape(value)) for shape, value in zip(shapes, values, strict=True))
        for values in frame.head(most + 1).itertuples(index=False)
    ]
    kept = tuple(rows[:most])
    note = (
        "" if len(frame) <= most else f"The first {most:,} of {len(frame):,} rows; all of them are in {rest}."
    )
    return Table(title, heads, kept, note)


def without(table: Table, *labels: str) -> Table:
    """The same table without the columns of these headings."""
    keep = [k for k, c in enumerate(table.columns) if c.label not in labels]
    rows = tuple(tuple(r[k] for k in keep) for r in table.rows)
    return replace(table, columns=tuple(table.columns[k] for k in keep), rows=rows)


def titled(table: Table, title: str) -> Table:
    """The same table under another title."""
    return replace(table, title=title)


def text(value: Any) -> str:
    """A value that is not a number; missing ones as an en dash."""
    if value is None or value is pd.NA or (isinstance(value, float) and value != value):
        return num.MISSING
    if isinstance(value, bool):
        return "yes" if value else "no"
    return str(value)
