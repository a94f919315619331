"""What counts as moved between two files: figures by their size, words by the digits shown, rows by their keys."""

from __future__ import annotations

import json
from pathlib import Path

import openpyxl
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stresskit.repeat.differences import compare_file, tolerance_of
from stresskit.repeat.frames import frame_differences
from stresskit.repeat.moved import Tally, apart

NAN, INF = float("nan"), float("inf")


@pytest.mark.parametrize(
    ("a", "b", "distance"),
    [(1.0, 1.0, 0.0), (NAN, NAN, 0.0), (1.0, NAN, INF), (INF, INF, 0.0), (2.0, 1.0, 0.5), (1.0, -1.0, 2.0), (0.0, 1e-300, 1.0)],
)  # fmt: skip
def test_distance(a: float, b: float, distance: float) -> None:
    assert apart(a, b) == apart(b, a) == distance


@given(st.floats(allow_nan=False, allow_infinity=False), st.floats(allow_nan=False, allow_infinity=False))
def test_exact_counts_every_difference(a: float, b: float) -> None:
    tally = Tally("f", 0.0, tiny=1.0)
    tally.number("r", "c", a, b, scale=1e308)
    assert tally.done().count == (a != b)


def test_noise_beside_the_largest_of_a_column_does_not_count() -> None:
    tally = Tally("f", 1e-9)
    tally.number("r", "c", 1e-13, 3e-13, scale=1.0)
    assert (tally.differ, tally.count, tally.largest) == (1, 0, 0.0)
    tally.number("r", "c", 1e-11, 3e-11, scale=1.0)
    assert (tally.differ, tally.count) == (2, 1)


@pytest.mark.parametrize(
    ("before", "after", "moved"),
    [
        ("12.3% of 4,567 loans", "12.4% of 4,567 loans", 0),
        ("12.3% of 4,567 loans", "12.5% of 4,567 loans", 1),
        ("12.3% of 4,567 loans", "12.3% of 4,569 loans", 1),
        ("loss 1.0e-16", "loss 1.1e-16", 0),
        ("loss 1.0e-16", "loss 3.0e-16", 1),
        ("value −0.25", "value −0.27", 1),
        ("passed", "failed", 1),
        ("3 passed", "3 failed", 1),
    ],
)
def test_words(before: str, after: str, moved: int) -> None:
    tally = Tally("f", 1e-9)
    tally.words("r", "c", before, after)
    assert tally.count == moved
    exact = Tally("f", 0.0)
    exact.words("r", "c", before, after)
    assert exact.count == 1


def test_small_leftovers_of_an_iteration_are_noise_where_that_is_declared(tmp_path: Path) -> None:
    for side, gradient, coefficient in (("a", 1e-13, 0.5), ("b", 4e-16, 0.5 + 1e-9)):
        (tmp_path / side / "models").mkdir(parents=True)
        text = json.dumps({"facts": {"gradient": gradient}, "coefficients": [coefficient, 3.0]})
        (tmp_path / side / "models" / "default.json").write_text(text)
    found = compare_file("models/default.json", tmp_path / "a", tmp_path / "b", exact=False)
    assert (found.status, found.count) == ("within tolerance", 0)
    assert found.largest == pytest.approx(2e-9)
    exact = compare_file("models/default.json", tmp_path / "a", tmp_path / "b", exact=True)
    assert (exact.status, exact.count) == ("moved", 2)
    assert [m.row for m in exact.first] == ["facts.gradient", "coefficients[0]"]


def test_rows_go_by_their_keys() -> None:
    one = pd.DataFrame({"scenario": ["a", "a", "b"], "segment": ["x", "y", "x"], "el": [1.0, 2.0, 3.0]})
    two = pd.DataFrame({"scenario": ["b", "a", "c"], "segment": ["x", "x", "x"], "el": [3.5, 1.0, 9.0]})
    tally = Tally("summary.csv", 1e-9)
    frame_differences(one, two, tally)
    told = [(m.row, m.column, m.before, m.after) for m in tally.first]
    assert told == [
        ("a / y", "", "(row)", "(nothing)"),
        ("c / x", "", "(nothing)", "(row)"),
        ("b / x", "el", "3.0", "3.5"),
    ]


def test_columns_that_come_or_go() -> None:
    tally = Tally("f", 1e-9)
    frame_differences(pd.DataFrame({"a": [1], "b": [2]}), pd.DataFrame({"a": [1], "c": [2]}), tally)
    assert [(m.column, m.before, m.after) for m in tally.first] == [
        ("b", "(column)", "(nothing)"),
        ("c", "(nothing)", "(column)"),
    ]


def test_text_that_reads_like_the_same_number_is_told_when_bytes_must_agree(tmp_path: Path) -> None:
    for side, cell in (("a", "1.0"), ("b", "1.00")):
        (tmp_path / side).mkdir()
        (tmp_path / side / "x.csv").write_text(f"value\n{cell}\n")
    exact = compare_file("x.csv", tmp_path / "a", tmp_path / "b", exact=True)
    assert (exact.status, exact.first[0].column, exact.first[0].after) == (
        "moved",
        "bytes",
        "no figure differs",
    )
    assert compare_file("x.csv", tmp_path / "a", tmp_path / "b", exact=False).agrees


def test_workbooks_cell_by_cell(tmp_path: Path) -> None:
    for side, value in (("a", 1.0), ("b", 1.5)):
        (tmp_path / side).mkdir()
        book = openpyxl.Workbook()
        sheet = book.active
        assert sheet is not None
        sheet.title = "summary"
        sheet.append(["scenario", "el"])
        sheet.append(["slump", value])
        book.save(tmp_path / side / "results.xlsx")
    found = compare_file("results.xlsx", tmp_path / "a", tmp_path / "b", exact=False)
    (one,) = found.first
    assert (one.row, one.column, one.before, one.after) == ("summary, row 2", "el", "1.0", "1.5")


def test_files_that_only_one_folder_has(tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    (tmp_path / "b").mkdir()
    (tmp_path / "a" / "x.csv").write_text("1")
    assert compare_file("x.csv", tmp_path / "a", tmp_path / "b", exact=True).status == "missing"
    assert compare_file("x.csv", tmp_path / "b", tmp_path / "a", exact=True).status == "new"


def test_pictures_are_left_out_when_another_library_drew_them(tmp_path: Path) -> None:
    for side, path in (("a", "M0 0L1 1"), ("b", "M0 0C9 9 9 9 9 9")):
        (tmp_path / side).mkdir()
        (tmp_path / side / "report.html").write_text(f"<p>12</p>\n<svg><path d='{path}'/></svg>\n")
    assert not compare_file("report.html", tmp_path / "a", tmp_path / "b", exact=False).agrees
    assert compare_file("report.html", tmp_path / "a", tmp_path / "b", exact=False, pictures=False).agrees


def test_the_tolerances_of_the_page_are_those_of_the_code() -> None:
    page = (Path(__file__).parents[2] / "docs" / "repeat.md").read_text(encoding="utf-8")
    for name, told in (
        ("evidence/auc.csv", "`evidence/*` | 10⁻⁶"), ("recovery/cox.csv", "`recovery/cox.csv` | 10⁻⁶"),
        ("models/default.json", "`models/*`, `coefficients.csv` | 10⁻⁷"), ("coefficients.csv", "`coefficients.csv` | 10⁻⁷"),
        ("report.html", "`report.html` | 10⁻⁷"), ("results.xlsx", "`results.xlsx` | 10⁻⁶"),
        ("summary.csv", "paths | 10⁻⁹"), ("loans.parquet", "paths | 10⁻⁹"),
    ):  # fmt: skip
        assert told in page
        assert tolerance_of(name) == pytest.approx(10.0 ** -{"⁶": 6, "⁷": 7, "⁹": 9}[told[-1]])
