"""Cells of CSV files and Excel worksheets, read strictly: what stands there, and where.

Nothing is computed: of a formula only the value that the workbook keeps with it is read, and a formula
without one is an error. Every problem of a sheet is collected before DataError is raised.
"""

from __future__ import annotations

import csv
import hashlib
import io
import re
import warnings
import zipfile
import zlib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import openpyxl
from openpyxl.utils import get_column_letter
from openpyxl.utils.exceptions import InvalidFileException

from stresskit.core.errors import DataError
from stresskit.macro.table import problem_of
from stresskit.spec.base import closest
from stresskit.spec.imports import ImportMapping

#: Published tables have hundreds of rows; a file beyond these bounds is another file.
MAX_BYTES, MAX_UNPACKED, MAX_ROWS, MAX_COLUMNS = 50_000_000, 200_000_000, 20_000, 2_000
_EXCEL = (".xlsx", ".xlsm")
#: What the workbook reader raises for a damaged file; broken XML is a SyntaxError.
_UNREADABLE = (
    InvalidFileException,
    zipfile.BadZipFile,
    zlib.error,
    EOFError,
    KeyError,
    ValueError,
    SyntaxError,
)
_SEPARATORS = {"comma": ",", "semicolon": ";", "tab": "\t"}
_COMMA_NUMBER = re.compile(r"^[+-]?(\d+,\d*|,\d+)([eE][+-]?\d+)?$")
_POINT_NUMBER = re.compile(r"^[+-]?\d*\.\d+([eE][+-]?\d+)?$")
_SHOWN = 8


@dataclass(frozen=True, slots=True)
class Row:
    """One row: its number in the file (1-based) and its cells as read (text, number, date, bool or None).

    percent  positions of cells that Excel shows as percent: 5.3 % is stored as 0.053
    """

    number: int
    cells: tuple[Any, ...]
    percent: frozenset[int] = field(default=frozenset())

    def text(self, column: int) -> str:
        cell = self.cells[column] if column < len(self.cells) else None
        return "" if cell is None else " ".join(str(cell).split())


@dataclass(frozen=True, slots=True)
class Sheet:
    """A table: header and the rows below it that are not blank.

    source  what messages call it; file  its name; digest  SHA-256 of the file; letters  whether cells are A1, B2
    """

    source: str
    file: str
    digest: str
    header: tuple[str, ...]
    rows: tuple[Row, ...]
    letters: bool

    def place(self, row: Row, column: int) -> str:
        """Where a cell is: ``C5`` in Excel, ``line 5`` in a CSV file."""
        return f"{get_column_letter(column + 1)}{row.number}" if self.letters else f"line {row.number}"

    def column(self, name: str) -> int | None:
        """Position of the column, None when there is none or the name stands twice."""
        return self.header.index(name) if self.header.count(name) == 1 else None

    def no_column(self, name: str) -> str:
        """Sentence on a column that ``column`` does not find."""
        if self.header.count(name) > 1:
            return f"{self.file} names {self.header.count(name)} columns {name!r}; give every column its own name"
        near = closest(name, [h for h in self.header if h])
        hint = f" (nearest: {near!r})" if near is not None else ""
        names = [h for h in self.header if h]
        more = f" and {len(names) - 20} more" if len(names) > 20 else ""
        if len(names) == 1 and (";" in names[0] or "\t" in names[0]):
            more += "; cells are parted by another sign, see separator"
        return f"{self.file} has no column {name!r}{hint}. The table has: {', '.join(names[:20])}{more}."


def read_sheet(file: Path, *, sheet: str | None, mapping: ImportMapping) -> Sheet:
    """One table of a file, read as the mapping says. Raises DataError: no such file or worksheet, too large,
    cells that cannot be read.
    """
    header_row, last_row, marker = mapping.header_row, mapping.last_row, mapping.marker
    content = _bytes(file)
    if file.suffix.lower() in _EXCEL:
        source, rows = _excel_rows(file, content, sheet, last_row)
    elif file.suffix.lower() == ".xls" or content[:4] == b"PK\x03\x04":
        raise DataError(
            f"{file}: expected .csv or .xlsx; open it in a spreadsheet program and save it as one"
        )
    elif sheet is not None:
        raise DataError(f"{file}: a CSV file has no worksheets; take sheet out, or name the workbook")
    else:
        source, rows = str(file), list(_csv_rows(file, content, mapping))
    head = next((r for r in rows if r.number == header_row), None)
    if head is None or not any(head.text(i) for i in range(len(head.cells))):
        first = next((r.number for r in rows if any(r.text(i) for i in range(len(r.cells)))), None)
        there = f"the first row that holds anything is {first}" if first is not None else "the file is empty"
        raise DataError(f"{source}: header_row {header_row} is blank; {there}")
    header = tuple(head.text(i) for i in range(len(head.cells)))
    below = [r for r in rows if r.number > header_row and any(r.text(i) for i in range(len(r.cells)))]
    if not below:
        raise DataError(f"{source}: no row below the header in row {header_row}")
    if file.suffix.lower() not in _EXCEL:
        _check_width(below, len(header), source, marker)
    digest = hashlib.sha256(content).hexdigest()
    return Sheet(source, file.name, digest, header, tuple(below), file.suffix.lower() in _EXCEL)


def _bytes(file: Path) -> bytes:
    try:
        with file.open("rb") as stream:
            content = stream.read(MAX_BYTES + 1)
    except FileNotFoundError:
        folder = file.parent
        names = (
            sorted(p.name for p in folder.iterdir() if p.suffix in (".csv", *_EXCEL))
            if folder.is_dir()
            else []
        )
        there = f"; that folder has {', '.join(names[:_SHOWN])}" if names else ""
        raise DataError(f"{file}: the file does not exist{there}") from None
    except OSError as error:
        raise DataError(f"{file}: cannot be read: {error.strerror or error}") from None
    if len(content) > MAX_BYTES:
        raise DataError(f"{file}: larger than {MAX_BYTES:,} bytes, the largest table that is read")
    return content


def _check_width(rows: Sequence[Row], width: int, source: str, marker: str | None) -> None:
    """A short or long CSV row would put one variable's value under another's name."""
    uneven = [
        f"line {r.number}: {len(r.cells)} cells"
        for r in rows
        if len(r.cells) != width and (marker is None or marker not in map(r.text, range(len(r.cells))))
    ]
    if uneven:
        remedy = "Fill or remove cells so that every row matches the header; last_row leaves notes below the table out."
        problem = problem_of("row_width", f"rows that do not have the header's {width} cells", uneven, remedy)
        raise DataError(f"{source}: the table cannot be read", [problem])


def _csv_rows(file: Path, content: bytes, mapping: ImportMapping) -> Iterator[Row]:
    last_row, separator = mapping.last_row, _SEPARATORS[mapping.separator]
    try:
        text = content.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise DataError(
            f"{file}: not UTF-8 text (byte {error.start}); save the table as CSV in UTF-8"
        ) from None
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    number = 0
    try:
        for number, cells in enumerate(reader, start=1):
            if last_row is not None and number > last_row:
                return
            if number > MAX_ROWS or len(cells) > MAX_COLUMNS:
                raise DataError(f"{file}: more than {MAX_ROWS:,} rows or {MAX_COLUMNS:,} columns")
            comma = mapping.decimal == "comma"
            yield Row(number, tuple(map(_pointed, cells)) if comma else tuple(cells))
    except csv.Error as error:
        raise DataError(f"{file}: row {number + 1} is not CSV: {error}") from None


def _pointed(cell: str) -> str:
    """A number written with a decimal comma, with a point; text, and numbers that have a point, as they are.

    A point is marked so that 1.234 (a thousand or so) is refused and not read as one and a bit.
    """
    text = cell.strip()
    if _COMMA_NUMBER.match(text):
        return text.replace(",", ".")
    return f"{text} (with decimal: comma)" if _POINT_NUMBER.match(text) else cell


def _excel_rows(file: Path, content: bytes, sheet: str | None, last_row: int | None) -> tuple[str, list[Row]]:
    _check_unpacked(file, content)
    with warnings.catch_warnings():
        # notes on styles and validations that are not kept: nothing of them is used
        warnings.simplefilter("ignore", UserWarning)
        try:
            values = openpyxl.load_workbook(io.BytesIO(content), read_only=True, data_only=True)
            formulas = openpyxl.load_workbook(io.BytesIO(content), read_only=True, data_only=False)
            name = _sheet_name(file, values, sheet)
            rows = _cells(f"{file}, sheet {name!r}", values[name], formulas[name], last_row)
        except _UNREADABLE as error:
            raise DataError(f"{file}: not an Excel workbook that can be read: {error}") from None
    return f"{file}, sheet {name!r}", rows


def _check_unpacked(file: Path, content: bytes) -> None:
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as packed:
            size = sum(item.file_size for item in packed.infolist())
    except zipfile.BadZipFile:
        raise DataError(f"{file}: not an Excel workbook; save it as .xlsx without a password") from None
    if size > MAX_UNPACKED:
        raise DataError(f"{file}: {size:,} bytes when unpacked, more than the {MAX_UNPACKED:,} that are read")


def _sheet_name(file: Path, book: Any, sheet: str | None) -> str:
    names = [w.title for w in book.worksheets]
    if sheet is None:
        if len(names) == 1:
            return str(names[0])
        raise DataError(
            f"{file}: the workbook has {len(names)} worksheets ({', '.join(names)}); name one: sheet"
        )
    if sheet not in names:
        near = closest(sheet, names)
        hint = f" (nearest: {near!r})" if near is not None else ""
        raise DataError(f"{file}: no worksheet {sheet!r}{hint}; the workbook has {', '.join(names)}")
    return sheet


def _cells(source: str, values: Any, formulas: Any, last_row: int | None) -> list[Row]:
    # what a workbook says about its own size may be wrong, and would cut rows off
    values.reset_dimensions()
    formulas.reset_dimensions()
    rows: list[Row] = []
    uncomputed: list[str] = []
    broken: list[str] = []
    pairs = zip(values.iter_rows(), formulas.iter_rows(), strict=True)
    for number, (kept, written) in enumerate(pairs, start=1):
        if last_row is not None and number > last_row:
            break
        if number > MAX_ROWS or len(kept) > MAX_COLUMNS:
            raise DataError(f"{source}: more than {MAX_ROWS:,} rows or {MAX_COLUMNS:,} columns")
        percent = set()
        for i, (value, cell) in enumerate(zip(kept, written, strict=True)):
            where = f"{get_column_letter(i + 1)}{number}"
            if cell.data_type == "f" and value.value is None:
                uncomputed.append(f"{where}: {cell.value}")
            elif value.data_type == "e":
                broken.append(f"{where}: {value.value}")
            elif isinstance(value.value, int | float) and "%" in str(value.number_format):
                percent.add(i)
        rows.append(Row(number, tuple(c.value for c in kept), frozenset(percent)))
    problems = []
    if uncomputed:
        remedy = "Open the workbook in a spreadsheet program and save it, or paste values: formulas are not computed here."
        problems.append(
            problem_of("formula_without_value", "formula cells that keep no value", uncomputed, remedy)
        )
    if broken:
        problems.append(problem_of("cell_error", "cells that hold an error", broken, "Mend or clear them."))
    if problems:
        raise DataError(f"{source}: the table cannot be read", problems)
    return rows
