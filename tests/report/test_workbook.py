"""The workbook read back by another library: values, types, formats, and text that no spreadsheet runs."""

from __future__ import annotations

import dataclasses
import io
import zipfile
from pathlib import Path
from typing import Any

import numpy as np
import openpyxl
import pandas as pd
import pytest

from stresskit.report import sheet as limits
from stresskit.report.workbook import Sheet, render_workbook, sheets, write_workbook
from stresskit.runs.records import StudyResult
from tests.report.report_samples import sample

DANGEROUS = ("=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1", " =1", '=HYPERLINK("x")')
SAFE = ("plain", "a=b", "<b>", "http://example.invalid", "1e5", "2026-01", "mailto:x", "")


def opened(data: bytes) -> Any:
    return openpyxl.load_workbook(io.BytesIO(data))


@pytest.fixture(scope="module")
def result() -> StudyResult:
    return sample(steps=24)


@pytest.fixture(scope="module")
def book(result: StudyResult) -> Any:
    return opened(render_workbook(sheets(result)))


def rows(sheet: Any) -> list[dict[str, Any]]:
    values = list(sheet.iter_rows(values_only=True))
    return [dict(zip(values[0], r, strict=True)) for r in values[1:]]


def test_sheets_and_their_order(book: Any) -> None:
    assert book.sheetnames == [
        "summary",
        "segment curves",
        "paths",
        "coefficients",
        "reconciliation",
        "findings",
        "record",
    ]


@pytest.mark.parametrize(
    ("name", "table"),
    [("segment curves", "segments"), ("paths", "paths"), ("coefficients", "coefficients"), ("reconciliation", "reconciliation"),
     ("findings", "findings")],
)  # fmt: skip
def test_every_value_comes_back(book: Any, result: StudyResult, name: str, table: str) -> None:
    frame: pd.DataFrame = getattr(result, table)
    back = rows(book[name])
    assert len(back) == len(frame)
    assert [c for c in back[0] if c != "period_end"] == list(frame.columns)
    for shown, (_, row) in zip(back, frame.iterrows(), strict=True):
        for column, value in row.items():
            got = shown[str(column)]
            if value is None or (isinstance(value, float) and np.isnan(value)) or value == "":
                assert got in (None, ""), (column, got)
            elif isinstance(value, bool | np.bool_):
                assert got is bool(value)
            elif isinstance(value, int | float | np.integer | np.floating):
                assert isinstance(got, int | float)
                assert got == pytest.approx(float(value), rel=1e-15), column
            else:
                assert got == value


def test_differences_to_the_reference_by_hand(book: Any, result: StudyResult) -> None:
    back = rows(book["summary"])
    assert len(back) == len(result.summary)
    base = {(r["by"], r["segment"]): r for r in back if r["scenario"] == "baseline"}
    for r in back:
        before = base[(r["by"], r["segment"])]
        for c in ("el_12m", "el_lifetime"):
            assert r[f"{c}_difference"] == pytest.approx(r[c] - before[c], abs=1e-6)
            assert r[f"{c}_change"] == pytest.approx(r[c] / before[c] - 1, abs=1e-12)


def test_number_formats_frozen_headings_and_filters(book: Any) -> None:
    sheet = book["summary"]
    formats = {c.value: sheet.cell(2, c.column).number_format for c in sheet[1]}
    assert formats["pd_12m"] == formats["lgd"] == formats["el_lifetime_change"] == "0.00%"
    assert formats["exposure"] == formats["el_lifetime"] == formats["loans"] == "#,##0"
    for sheet in book:
        assert sheet.freeze_panes is not None
        assert sheet.freeze_panes.endswith("2")
        assert sheet.auto_filter.ref == sheet.dimensions


@pytest.mark.parametrize("text", DANGEROUS + SAFE)
def test_text_stays_text(text: str) -> None:
    frame = pd.DataFrame({text or "empty": ["x"], "value": [text]})
    data = render_workbook([Sheet("t", frame, "t.csv")])
    sheet = opened(data)["t"]
    cell = sheet["B2"]
    assert (cell.value or "").replace("_x000D_", "\r") == text
    assert cell.data_type != "f"
    assert cell.hyperlink is None
    assert cell.quotePrefix is (text in DANGEROUS)
    with zipfile.ZipFile(io.BytesIO(data)) as z:
        assert b"<f>" not in z.read("xl/worksheets/sheet1.xml")


def test_names_in_every_sheet_are_text(result: StudyResult) -> None:
    bad = "=cmd|' /C calc'!A0"
    changed = dataclasses.replace(
        result,
        summary=result.summary.assign(segment=bad + result.summary["segment"]),
        segments=result.segments.assign(segment=bad),
        paths=result.paths.assign(variable=bad),
        coefficients=result.coefficients.assign(term=bad),
        reconciliation=result.reconciliation.assign(reason=bad),
        findings=result.findings.assign(message=bad),
        cautions=(bad,),
        record={bad: bad, "text": f"{bad}\n{bad}"},
    )
    book = opened(render_workbook(sheets(changed)))
    for sheet in book:
        cells = [c for line in sheet.iter_rows() for c in line]
        assert not [c for c in cells if c.data_type == "f"], sheet.title
        found = [c for c in cells if str(c.value).startswith(bad)]
        assert found, sheet.title
        assert all(c.quotePrefix for c in found), sheet.title


def test_missing_infinite_and_mixed_values() -> None:
    frame = pd.DataFrame(
        {
            "number": [1.5, np.nan, np.inf, -np.inf],
            "whole": pd.array([1, None, 3, 4], dtype="Int64"),
            "flag": pd.Series([True, None, False, np.True_], dtype=object),
            "mixed": pd.Series([1, "=2", None, 2.5], dtype=object),
        }
    )
    sheet = opened(render_workbook([Sheet("t", frame, "t.csv")]))["t"]
    assert [c.value for c in sheet["A"]] == ["number", 1.5, None, "infinite", "minus infinite"]
    assert [c.value for c in sheet["B"]] == ["whole", 1, None, 3, 4]
    assert [c.value for c in sheet["C"]] == ["flag", True, None, False, True]
    assert [c.value for c in sheet["D"]] == ["mixed", 1, "=2", None, 2.5]
    assert sheet["D3"].data_type == "s"


def test_a_table_longer_than_a_sheet_is_refused_with_its_place() -> None:
    frame = pd.DataFrame({"el": np.zeros(1_048_576)})
    sheet = opened(render_workbook([Sheet("segment curves", frame, "segments.parquet")]))["segment curves"]
    assert sheet.dimensions == "A1:A1"
    assert sheet["A1"].value == (
        "1,048,576 rows are more than a sheet can hold (1,048,575). They are in the file segments.parquet of this run's folder."
    )


def test_the_limit_itself_is_written(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(limits, "MOST_ROWS", 3)
    for n, last in ((3, 4), (4, 1)):
        sheet = opened(render_workbook([Sheet("t", pd.DataFrame({"x": range(n)}), "loans.parquet")]))["t"]
        assert sheet.max_row == last
    assert "loans.parquet" in sheet["A1"].value


def test_which_file_stands_for_which_sheet(result: StudyResult) -> None:
    assert {s.name: s.elsewhere for s in sheets(result)}["segment curves"] == "segments.parquet"
    record = rows(opened(render_workbook(sheets(result)))["record"])
    assert {"kind": "note", "item": "loan by loan", "value": "loans.parquet in this run's folder"} in record


def test_a_text_longer_than_a_cell_is_cut_and_says_so() -> None:
    sheet = opened(render_workbook([Sheet("t", pd.DataFrame({"x": ["y" * 40_000]}), "t.csv")]))["t"]
    assert len(sheet["A2"].value) == 32_767
    assert sheet["A2"].value.endswith("y ... (cut)")


def test_record_holds_cautions_facts_and_study_text(book: Any, result: StudyResult) -> None:
    back = rows(book["record"])
    assert [r["value"] for r in back if r["kind"] == "caution"] == list(result.cautions)
    lines = [r["value"] for r in back if r["kind"] == "text" and r["item"] == "study_text"]
    assert "\n".join(lines) + "\n" == result.record["study_text"]
    assert {"kind": "fit", "item": "default.periods", "value": "120"} in back


def test_same_bytes_and_no_clock(tmp_path: Path, result: StudyResult) -> None:
    write_workbook(result, tmp_path / "a.xlsx")
    write_workbook(result, tmp_path / "b.xlsx")
    assert (tmp_path / "a.xlsx").read_bytes() == (tmp_path / "b.xlsx").read_bytes()
    with zipfile.ZipFile(tmp_path / "a.xlsx") as z:
        assert {i.date_time for i in z.infolist()} == {(1980, 1, 1, 0, 0, 0)}
        core = z.read("docProps/core.xml").decode()
    assert core.count("2000-01-01T00:00:00Z") == 2


def test_empty_tables_keep_their_headings(result: StudyResult) -> None:
    empty = dataclasses.replace(result, findings=result.findings.head(0), paths=result.paths.head(0))
    book = opened(render_workbook(sheets(empty)))
    assert [c.value for c in book["findings"][1]] == list(result.findings.columns)
    assert book["paths"].max_row == 1


def test_an_unwritable_place_is_an_os_error(tmp_path: Path, result: StudyResult) -> None:
    with pytest.raises(OSError, match="No such file"):
        write_workbook(result, tmp_path / "missing" / "results.xlsx")
