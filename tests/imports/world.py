"""Small tables and mappings on disk, and what importing them says."""

from __future__ import annotations

import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest
from openpyxl import Workbook

from stresskit.core.errors import DataError, StresskitError, TextError
from stresskit.imports.api import ImportResult, import_table

#: History 2024Q4 to 2025Q4, then four projected quarters.
TABLE = """Quarter,Unemployment,Houses
2024 Q4,5.7,140
2025 Q1,5.3,143
2025 Q2,5.2,146
2025 Q3,5.1,148
2025 Q4,5.0,150
2026 Q1,5.2,149
2026 Q2,5.4,147.5
2026 Q3,5.6,146
2026 Q4,5.5,145
"""
MAPPING = """
import: supervisor
table: table.csv
period: Quarter
as_of: 2025Q4
variables:
  u: {column: Unemployment, unit: percent}
  hpi: {column: Houses, unit: index}
scenarios:
  stress: {}
history: rows_up_to_as_of
"""


def put(folder: Path, mapping: str = MAPPING, table: str = TABLE, **files: str) -> Path:
    """Writes mapping.yaml, table.csv and further files (NAME=text for NAME.csv); returns the mapping."""
    (folder / "table.csv").write_text(table, encoding="utf-8")
    for name, text in files.items():
        (folder / f"{name}.csv").write_text(text, encoding="utf-8")
    file = folder / "mapping.yaml"
    file.write_text(textwrap.dedent(mapping).strip() + "\n", encoding="utf-8")
    return file


def imported(folder: Path, mapping: str = MAPPING, table: str = TABLE, **files: str) -> ImportResult:
    return import_table(put(folder, mapping, table, **files))


def levels(result: ImportResult, variable: str, scenario: str = "stress") -> list[float]:
    return [float(x) for x in result.paths[scenario].values[variable]]


def refused(
    folder: Path, mapping: str = MAPPING, table: str = TABLE, *, error: type[StresskitError], **files: str
) -> str:
    """The message, its folder taken out."""
    file = put(folder, mapping, table, **files)
    with pytest.raises(error) as caught:
        import_table(file)
    assert type(caught.value) is error
    return str(caught.value).replace(f"{folder}/", "")


def book(folder: Path, sheets: dict[str, Sequence[Sequence[Any]]], name: str = "table.xlsx") -> Path:
    """An Excel file written by openpyxl: sheet -> rows."""
    workbook = Workbook()
    workbook.remove(workbook.active)
    for title, rows in sheets.items():
        sheet = workbook.create_sheet(title)
        for row in rows:
            sheet.append(list(row))
    workbook.save(folder / name)
    workbook.close()
    return folder / name


__all__ = ["MAPPING", "TABLE", "DataError", "TextError", "book", "imported", "levels", "put", "refused"]
