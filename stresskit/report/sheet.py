"""A table that becomes a sheet of the workbook, and what a sheet can hold."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType

import pandas as pd

#: Rows of a sheet (Excel's 1,048,576) less the headings.
MOST_ROWS = 1_048_575
#: Cells of a sheet that still opens at once; more is a matter for the Parquet or CSV file.
MOST_CELLS = 1_000_000
#: Characters that a sheet's name can hold.
MOST_NAME = 31


@dataclass(frozen=True, slots=True)
class Sheet:
    """One plain table of the workbook.

    name       of the sheet; :func:`sheet_name` makes one of any text
    table      headings and a record per row
    elsewhere  the file of the run folder that holds the same in full
    about      one line for the list of sheets
    formats    column -> number format, where it does not follow from the column's name
    """

    name: str
    table: pd.DataFrame
    elsewhere: str
    about: str = ""
    formats: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))

    @property
    def too_long(self) -> str:
        """Why the table does not go into a sheet; empty when it does."""
        rows, cells = len(self.table), self.table.size
        if rows > MOST_ROWS:
            why = f"{rows:,} rows are more than a sheet can hold ({MOST_ROWS:,})"
        elif cells > MOST_CELLS:
            why = (
                f"{rows:,} rows with {cells:,} cells are more than a sheet is good for ({MOST_CELLS:,} cells)"
            )
        else:
            return ""
        return f"{why}. They are in the file {self.elsewhere} of this run's folder."


def section(name: str, tables: Mapping[str, pd.DataFrame], folder: str, about: str = "") -> tuple[Sheet, ...]:
    """Sheets of a further section: one per table, called ``name`` (the first) and ``name: title``.

    ``folder`` is where the run folder holds the same tables as ``<key>.csv``.
    """
    out = []
    for k, (key, table) in enumerate(tables.items()):
        title = name if k == 0 else f"{name} - {key}"
        out.append(Sheet(sheet_name(title), table, f"{folder}/{key}.csv", about))
    return tuple(out)


def sheet_name(text: str, taken: Sequence[str] = ()) -> str:
    """A name that a workbook accepts: 31 characters, none of ``[]:*?/\\``, none like one that is taken."""
    clean = re.sub(r"[\[\]:*?/\\\x00-\x1f]", " ", text).strip("' ") or "sheet"
    lower = {t.lower() for t in taken} | {"history"}  # a name that Excel keeps for itself
    name, k = clean[:MOST_NAME].strip("' "), 1
    while name.lower() in lower:
        k += 1
        end = f" {k}"
        name = clean[: MOST_NAME - len(end)].rstrip("' ") + end
    return name
