"""Excel workbooks, written by openpyxl here: values, dates, formulas, formats, sheets."""

from __future__ import annotations

import datetime
import zipfile
from pathlib import Path

import pytest
import xlsxwriter
from openpyxl import Workbook

from stresskit.core.errors import DataError
from stresskit.imports import sheets
from stresskit.imports.api import import_table
from tests.imports.test_forms_by_hand import changed
from tests.imports.world import book, levels, put

#: A title and a note above the header, a marker row, dates as Excel dates.
ROWS = [
    ["Macroeconomic scenarios", None, None],
    [None, None, None],
    ["Quarter", "Unemploy-\nment", "Houses"],
    [datetime.date(2025, 9, 30), 5.1, 148],
    [datetime.date(2025, 12, 31), 5.0, 150],
    ["Projection", None, None],
    [datetime.date(2026, 3, 31), 5.2, 149.25],
    [datetime.datetime(2026, 6, 30, 0, 0), 5.300000000000001, 148],
    ["Source: the authority", None, None],
]
EXCEL = changed(
    ("table: table.csv", "table: table.xlsx\nheader_row: 3\nlast_row: 8\nmarker: Projection"),
    ("column: Unemployment", 'column: "Unemploy- ment"'),
    ("history: rows_up_to_as_of\n", ""),
)


def said(folder: Path, mapping: str = EXCEL) -> str:
    with pytest.raises(DataError) as caught:
        import_table(put(folder, mapping))
    return str(caught.value).replace(f"{folder}/", "")


def test_a_workbook_gives_its_own_bits(tmp_path):
    book(tmp_path, {"Adverse": ROWS})
    result = import_table(put(tmp_path, EXCEL))
    assert levels(result, "u") == [5.2, 5.300000000000001]
    assert levels(result, "hpi") == [149.25, 148.0]
    assert "values: [5.2, 5.300000000000001]" in result.texts["stress"]
    assert result.history == "period,u,hpi\n2025Q3,5.1,148.0\n2025Q4,5.0,150.0\n"
    assert "source: table.xlsx" in result.texts["stress"] or 'source: "table.xlsx"' in result.texts["stress"]


def test_years_as_numbers(tmp_path):
    book(tmp_path, {"A": [["Quarter", "Unemployment", "Houses"], [2026, 6, 160], [2027.0, 7, 170]]})
    mapping = changed(
        ("table.csv", "table.xlsx"),
        ("unit: percent", "unit: percent, within_year: step"),
        ("unit: index", "unit: index, within_year: step"),
    )
    assert levels(import_table(put(tmp_path, mapping)), "u") == [6.0] * 4 + [7.0] * 4


def test_a_worksheet_has_to_be_named_where_there_are_several(tmp_path):
    book(tmp_path, {"Notes": [["x"]], "Adverse": ROWS})
    assert said(tmp_path) == "table.xlsx: the workbook has 2 worksheets (Notes, Adverse); name one: sheet"
    assert said(tmp_path, EXCEL + "sheet: Advers\n") == (
        "table.xlsx: no worksheet 'Advers' (nearest: 'Adverse'); the workbook has Notes, Adverse"
    )
    assert levels(import_table(put(tmp_path, EXCEL + "sheet: Adverse\n")), "hpi") == [149.25, 148.0]


def test_scenarios_on_sheets_of_their_own(tmp_path):
    worse = [*ROWS[:6], [datetime.date(2026, 3, 31), 7.0, 140], [datetime.date(2026, 6, 30), 8.0, 130]]
    book(tmp_path, {"Base": ROWS, "Adverse": worse})
    mapping = EXCEL.replace("  stress: {}", "  base: {sheet: Base}\n  stress: {sheet: Adverse}")
    result = import_table(put(tmp_path, mapping))
    assert levels(result, "u", "base") == [5.2, 5.300000000000001]
    assert levels(result, "u", "stress") == [7.0, 8.0]


def test_formulas_keep_their_value_or_are_refused_by_cell(tmp_path):
    rows = [list(r) for r in ROWS]
    rows[6][1], rows[7][2] = "=B5*1.04", "=C5-2"
    book(tmp_path, {"Adverse": rows})
    assert said(tmp_path) == (
        "table.xlsx, sheet 'Adverse': the table cannot be read\n  [formula_without_value] formula cells that keep no value "
        "(2 found). First: B7: =B5*1.04, C8: =C5-2. Open the workbook in a spreadsheet program and save it, or paste values: "
        "formulas are not computed here."
    )
    # the same cell as a spreadsheet program saves it: with its value beside the formula
    with xlsxwriter.Workbook(tmp_path / "table.xlsx") as kept:
        sheet = kept.add_worksheet("Adverse")
        dates = kept.add_format({"num_format": "yyyy-mm-dd"})
        for i, row in enumerate(ROWS):
            for j, cell in enumerate(row):
                if isinstance(cell, datetime.date):
                    sheet.write_datetime(i, j, cell, dates)
                elif cell is not None:
                    sheet.write(i, j, cell)
        sheet.write_formula(6, 1, "=B5*1.04", None, 5.2)
    assert levels(import_table(put(tmp_path, EXCEL)), "u") == [5.2, 5.300000000000001]


def test_cells_that_show_percent_hold_fractions(tmp_path):
    workbook = Workbook()
    sheet = workbook.active
    for row in [["Quarter", "Unemployment", "Houses"], ["2026 Q1", 0.052, 150], ["2026 Q2", 0.61, 151]]:
        sheet.append(row)
    for cell in ("B2", "B3"):
        sheet[cell].number_format = "0.0%"
    workbook.save(tmp_path / "table.xlsx")
    workbook.close()
    mapping = changed(("table.csv", "table.xlsx"))
    found = said(tmp_path, mapping)
    assert (
        "[unit_shown] cells of u formatted as percent, declared as percent (2 found). First: B2: 0.052, B3: 0.61. Excel keeps "
        "5.3 % as 0.053: declare table_unit: fraction, which is converted." in found
    )
    fixed = mapping.replace("unit: percent", "unit: percent, table_unit: fraction")
    assert levels(import_table(put(tmp_path, fixed)), "u") == [5.2, 61.0]


@pytest.mark.parametrize(
    ("cell", "words"),
    [
        ("n/a", "[value_not_number] cells of u that are not numbers (1 found). First: 2026Q1 (B7): 'n/a'."),
        (True, "[value_not_number] cells of u that are not numbers (1 found). First: 2026Q1 (B7): 'True'."),
        (None, "[value_blank] blank cells of u (1 found). First: 2026Q1 (B7)."),
        (datetime.date(2026, 1, 5), "[value_not_number] cells of u that are not numbers (1 found). First: 2026Q1 (B7): '2026-01-05"),
        ("#N/A", "[cell_error] cells that hold an error (1 found). First: B7: #N/A. Mend or clear them."),
    ],
)  # fmt: skip
def test_cells_that_are_no_numbers_are_named(cell, words, tmp_path):
    rows = [list(r) for r in ROWS]
    rows[6][1] = cell
    book(tmp_path, {"Adverse": rows})
    assert words in said(tmp_path)


def test_files_that_are_no_workbook(tmp_path, monkeypatch):
    put(tmp_path, EXCEL)
    (tmp_path / "table.xlsx").write_bytes(b"not a zip")
    assert said(tmp_path) == "table.xlsx: not an Excel workbook; save it as .xlsx without a password"
    with zipfile.ZipFile(tmp_path / "table.xlsx", "w") as packed:
        packed.writestr("a.txt", "x")
    assert said(tmp_path).startswith("table.xlsx: not an Excel workbook that can be read: ")
    (tmp_path / "table.xls").write_bytes(b"\xd0\xcf\x11\xe0")
    old = EXCEL.replace("table.xlsx", "table.xls")
    assert (
        said(tmp_path, old)
        == "table.xls: expected .csv or .xlsx; open it in a spreadsheet program and save it as one"
    )
    book(tmp_path, {"Adverse": ROWS})
    monkeypatch.setattr(sheets, "MAX_UNPACKED", 1000)
    assert " bytes when unpacked, more than the 1,000 that are read" in said(tmp_path)
    monkeypatch.setattr(sheets, "MAX_UNPACKED", 10**7)
    monkeypatch.setattr(sheets, "MAX_ROWS", 5)
    assert said(tmp_path) == "table.xlsx, sheet 'Adverse': more than 5 rows or 2,000 columns"


@pytest.mark.parametrize("keep", [0.1, 0.5, 0.9])
def test_a_damaged_sheet_is_an_error_of_the_file(keep, tmp_path):
    book(tmp_path, {"Adverse": ROWS})
    with zipfile.ZipFile(tmp_path / "table.xlsx") as packed:
        parts = {n: packed.read(n) for n in packed.namelist()}
    sheet = parts["xl/worksheets/sheet1.xml"]
    parts["xl/worksheets/sheet1.xml"] = sheet[: int(len(sheet) * keep)]
    with zipfile.ZipFile(tmp_path / "table.xlsx", "w") as packed:
        for name, content in parts.items():
            packed.writestr(name, content)
    assert said(tmp_path).startswith("table.xlsx: not an Excel workbook that can be read: ")


def test_a_sheet_that_understates_its_own_size_is_read_whole(tmp_path):
    """The dimension that a sheet states is a hint that some programs get wrong."""
    book(tmp_path, {"Adverse": ROWS})
    source = tmp_path / "table.xlsx"
    with zipfile.ZipFile(source) as packed:
        parts = {n: packed.read(n) for n in packed.namelist()}
    sheet = parts["xl/worksheets/sheet1.xml"]
    assert b'ref="A1:C9"' in sheet
    parts["xl/worksheets/sheet1.xml"] = sheet.replace(b'ref="A1:C9"', b'ref="A1:A2"')
    with zipfile.ZipFile(source, "w") as packed:
        for name, content in parts.items():
            packed.writestr(name, content)
    assert levels(import_table(put(tmp_path, EXCEL)), "hpi") == [149.25, 148.0]
