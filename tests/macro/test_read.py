"""Reading a macro table: what is accepted, and every refusal word for word."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import parse_period
from stresskit.macro.read import read_history
from tests.macro.world import MONTH, QUARTER, section, table

RATE = section({"rate": "percent"}, {"f": {"of": "rate"}})


def read(text: str, folder: Path, macro=RATE, model=QUARTER):
    (folder / "macro.csv").write_text(text, encoding="utf-8")
    return read_history(macro, base=folder, model=model)


def refused(text: str, folder: Path, macro=RATE, model=QUARTER, error=DataError) -> str:
    with pytest.raises(error) as caught:
        read(text, folder, macro, model)
    return str(caught.value).replace(str(folder / "macro.csv"), "FILE")


# --- accepted


@pytest.mark.parametrize(
    ("labels", "frequency", "start"),
    [
        (["2025 Q1", "2025 Q2", "2025 Q3"], QUARTER, "2025Q1"),
        (["2025Q4", "2026Q1", "2026Q2"], QUARTER, "2025Q4"),
        (["2025-03", "2025-06", "2025-09"], QUARTER, "2025Q1"),
        (["2025-03-31", "2025-06-30", "2025-09-30"], QUARTER, "2025Q1"),
        (["2025-01-01", "2025-04-01", "2025-07-01"], QUARTER, "2025Q1"),
        (["2025-01", "2025-02", "2025-03"], MONTH, "2025-01"),
        (["2024-12-31", "2025-01-31", "2025-02-28"], MONTH, "2024-12"),
    ],
)
def test_period_labels_and_the_calendar_they_make(labels, frequency, start, tmp_path):
    rows = "".join(f"{label},{i + 1}.5\n" for i, label in enumerate(labels))
    past = read("period,rate\n" + rows, tmp_path, model=MONTH)
    assert past.frequency is frequency
    assert past.start == parse_period(start, frequency)
    assert past.values["rate"].tolist() == [1.5, 2.5, 3.5]
    assert past.end == past.start + 2


def test_rows_in_any_order_are_sorted(tmp_path):
    past = read("period,rate\n2025Q3,3\n2025Q1,1\n2025Q2,2\n", tmp_path)
    assert past.values["rate"].tolist() == [1.0, 2.0, 3.0]


def test_blanks_before_a_variable_starts_and_numbers_in_all_spellings(tmp_path):
    text = "\ufeffperiod,rate,other\n2025Q1,,x\n2025Q2, ,x\n2025Q3,1e-3,x\n\n2025Q4,-.5,x\n2026Q1,+2.,x\n"
    past = read(text, tmp_path)
    np.testing.assert_array_equal(past.values["rate"], [math.nan, math.nan, 0.001, -0.5, 2.0])


def test_columns_are_mapped_and_rows_filtered(tmp_path):
    macro = section(
        {"unemployment_rate": {"unit": "percent", "column": "Unemployment, percent", "place": "step"}},
        {"f": {"of": "unemployment_rate"}},
        period="Date",
        only={"Vintage": ["final", "revised"]},
    )
    text = 'Date,Vintage,"Unemployment, percent"\n2025 Q1,first,9\n2025 Q1,final,5.1\n2025 Q2,revised,5.3\n2025 Q2,first,9\n'
    past = read(text, tmp_path, macro, MONTH)
    assert past.values["unemployment_rate"].tolist() == [5.1, 5.3]
    assert (dict(past.units), dict(past.place)) == (
        {"unemployment_rate": "percent"},
        {"unemployment_rate": "step"},
    )


@pytest.mark.parametrize(
    "periods",
    [
        pd.Series(["2025Q1", "2025Q2", "2025Q3"]),
        pd.Series(pd.period_range("2025Q1", periods=3, freq="Q")),
        pd.Series(pd.date_range("2025-03-31", periods=3, freq="QE")),
    ],
    ids=["text", "pandas periods", "timestamps"],
)
def test_a_frame_instead_of_a_file(periods, tmp_path):
    frame = pd.DataFrame({"period": periods, "rate": [np.nan, 0.1 + 0.2, 4]})
    past = read_history(RATE, base=tmp_path, model=QUARTER, frame=frame)
    assert past.start == parse_period("2025Q1", QUARTER)
    assert past.values["rate"][1:].tolist() == [0.1 + 0.2, 4.0]  # the same bits
    indexed = read_history(RATE, base=tmp_path, model=QUARTER, frame=frame.set_index("period"))
    assert indexed.values["rate"].tobytes() == past.values["rate"].tobytes()


def test_the_frame_is_left_as_it_was(tmp_path):
    frame = table("2025Q1", QUARTER, rate=[1, 2, 3]).iloc[::-1]
    before = frame.copy()
    read_history(RATE, base=tmp_path, model=QUARTER, frame=frame)
    pd.testing.assert_frame_equal(frame, before)


# --- refused: the file


def test_a_file_that_is_not_there(tmp_path):
    (tmp_path / "macros.csv").write_text("x")
    with pytest.raises(DataError) as caught:
        read_history(RATE, base=tmp_path, model=QUARTER)
    assert (
        str(caught.value)
        == f"{tmp_path / 'macro.csv'}: the file does not exist. That folder has: macros.csv."
    )
    with pytest.raises(DataError, match=r"the file does not exist\.$"):
        read_history(RATE, base=tmp_path / "nowhere", model=QUARTER)


def test_a_folder_in_place_of_a_file(tmp_path):
    (tmp_path / "macro.csv").mkdir()
    with pytest.raises(DataError, match=r"macro\.csv: cannot be read: Is a directory"):
        read_history(RATE, base=tmp_path, model=QUARTER)


def test_text_in_another_encoding(tmp_path):
    (tmp_path / "macro.csv").write_bytes("period,rate\n2025Q1,1\n".encode("utf-16"))
    with pytest.raises(DataError, match=r"not UTF-8 text \(byte 0\); save the table as CSV in UTF-8"):
        read_history(RATE, base=tmp_path, model=QUARTER)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "FILE: the file is empty; expected a line of column names and a row per period"),
        ("\n , \n", "FILE: the file is empty; expected a line of column names and a row per period"),
        ("period,rate\n", "FILE: the table has no rows; expected a row per period"),
        ('period,rate\n2025Q1,"1\n', "FILE: line 2 is not CSV: unexpected end of data"),
        (
            "period,rate,rate\n2025Q1,1\n2025Q2,1,2,3\n",
            "FILE: the table cannot be read\n"
            "  [row_width] rows that do not have the header's 3 cells (2 found). First: line 2: 2 cells, line 3: 4 cells. "
            "Fill or remove cells so that every row matches the header.\n"
            "  [column_doubled] columns that are named more than once (1 found). First: 'rate'. Give every column its own name.",
        ),
        (
            "Period,rates\n2025Q1,1\n",
            "FILE: the table lacks columns\n"
            "  [column_missing] columns that the table does not have (2 found). First: 'period' for period (nearest: 'Period'), "
            "'rate' for variable rate (nearest: 'rates'). The table has: Period, rates.",
        ),
    ],
)
def test_tables_that_cannot_be_read(text, message, tmp_path):
    assert refused(text, tmp_path) == message


def test_a_filter_that_keeps_no_row(tmp_path):
    macro = section({"rate": "percent"}, only={"scenario": ["Actual", "History"]})
    rows = "".join(f"2025Q{i},1,s{i}\n" for i in range(1, 5))
    assert refused("period,rate,scenario\n" + rows, tmp_path, macro) == (
        "FILE: no row has 'Actual' or 'History' in column 'scenario'; it holds 's1', 's2', 's3', 's4'"
    )


def test_a_filter_on_a_column_that_is_not_there(tmp_path):
    macro = section({"rate": "percent"}, only={"scenario name": ["Actual"]})
    assert "First: 'scenario name' for only.scenario name (nearest: 'Scenario Name')." in refused(
        "period,rate,Scenario Name\n2025Q1,1,Actual\n", tmp_path, macro
    )


# --- refused: the calendar


@pytest.mark.parametrize(
    ("labels", "message"),
    [
        (
            ["2025Q1", "Q2 2025", "", "2025Q5"],
            "FILE: periods cannot be read\n"
            "  [period_unreadable] rows whose 'period' names no period (3 found). First: 'Q2 2025', '', '2025Q5'. "
            "Expected one shape throughout: '2025 Q4', '2025-12' or '2025-12-31'.",
        ),
        (
            ["2025Q1", "2025-06-30"],
            "FILE: periods cannot be read\n"
            "  [period_unreadable] rows whose 'period' names no period (1 found). First: '2025-06-30' among quarters. "
            "Expected one shape throughout: '2025 Q4', '2025-12' or '2025-12-31'.",
        ),
        (
            ["2025-02-30"],
            "FILE: periods cannot be read\n"
            "  [period_unreadable] rows whose 'period' names no period (1 found). First: '2025-02-30'. "
            "Expected one shape throughout: '2025 Q4', '2025-12' or '2025-12-31'.",
        ),
        (
            ["2025Q1", "2025Q3", "2025 Q3", "2025Q3", "2026Q2"],
            "FILE: the calendar of the table is broken\n"
            "  [period_doubled] periods with more than one row (1 found). First: 2025Q3. "
            "Keep one row per period; if the table holds several scenarios or vintages, choose one with only.\n"
            "  [period_missing] periods without a row (3 found). First: 2025Q2, 2025Q4, 2026Q1. "
            "Add the rows: lags and changes need every period.",
        ),
        (
            ["2025-03-31", "2025-06-30", "2025-12-31"],
            "FILE: the calendar of the table is broken\n"
            "  [period_missing] periods without a row (1 found). First: 2025Q3. "
            "Add the rows: lags and changes need every period.",
        ),
        (
            ["2025-12-31"],
            "FILE: column 'period' steps by no months; expected rows one month or three months apart "
            "(quarter labels like '2025 Q4' say the frequency themselves)",
        ),
        (
            ["2023-12-31", "2024-12-31", "2025-12-31"],
            "FILE: column 'period' steps by 12 months; expected rows one month or three months apart "
            "(quarter labels like '2025 Q4' say the frequency themselves)",
        ),
    ],
)
def test_calendars_that_are_broken(labels, message, tmp_path):
    assert refused("period,rate\n" + "".join(f"{label},1\n" for label in labels), tmp_path) == message


def test_a_hole_in_a_monthly_table(tmp_path):
    assert "[period_missing] periods without a row (1 found). First: 2025-03." in refused(
        "period,rate\n2025-01,1\n2025-02,1\n2025-04,1\n", tmp_path, model=MONTH
    )


# --- refused: the values


def test_every_problem_of_the_values_is_reported_at_once(tmp_path):
    macro = section({"rate": "percent", "index": "index", "gone": "level"})
    text = (
        'period,rate,index,gone\n2025Q2,n/a,,\n2025Q1,,1,\n2025Q3,5.1%,3,\n2025Q4,"1,000",,\n2026Q1,inf,,\n'
        "2026Q2,nan,7,\n2026Q3,1e999,8,\n"
    )
    assert refused(text, tmp_path, macro) == (
        "FILE: values that cannot be used\n"
        "  [value_not_number] cells of rate that are not numbers (6 found). First: 2025Q2: 'n/a', 2025Q3: '5.1%', "
        "2025Q4: '1,000', 2026Q1: 'inf', 2026Q2: 'nan'. Write plain decimals (5.1 or 1e-3, no separators or percent signs); "
        "leave unknown values blank.\n"
        "  [value_blank] blank cells of index after its first value (3 found). First: 2025Q2, 2025Q4, 2026Q1. "
        "Fill them, or cut the table at its last complete period.\n"
        "  [variable_empty] rows, in none of which gone has a value (7 found). First: 2025Q1, 2025Q2, 2025Q3, 2025Q4, 2026Q1. "
        "Remove the variable or name the right column."
    )


@pytest.mark.parametrize("cell", [True, np.inf, "x", np.bool_(False)])
def test_cells_of_a_frame_that_are_not_numbers(cell, tmp_path):
    frame = pd.DataFrame({"period": ["2025Q1", "2025Q2"], "rate": pd.Series([1.0, cell], dtype=object)})
    with pytest.raises(DataError, match=rf"macro frame.*\n.*value_not_number.*First: 2025Q2: '{cell}'"):
        read_history(RATE, base=tmp_path, model=QUARTER, frame=frame)


def test_a_trailing_blank_is_a_hole(tmp_path):
    assert "[value_blank] blank cells of rate after its first value (1 found). First: 2025Q2." in refused(
        "period,rate\n2025Q1,1\n2025Q2,\n", tmp_path
    )


def test_a_fraction_that_looks_like_percent(tmp_path):
    macro = section({"rate": "fraction"})
    assert refused("period,rate\n2025Q1,0.9\n2025Q2,5.1\n2025Q3,-6\n", tmp_path, macro) == (
        "FILE: values do not fit what the study says about them\n"
        "  [unit_fraction] values of rate above 1 in size, though its unit is fraction (2 found). First: 2025Q2: 5.1, 2025Q3: -6. "
        "Declare unit: percent (or level, for a ratio that lives above 1)."
    )
    assert read("period,rate\n2025Q1,0.05\n2025Q2,0.06\n2025Q3,1.2\n", tmp_path, macro).n_periods == 3


def test_growth_of_values_at_or_below_zero(tmp_path):
    features = {"a": {"of": "rate", "transform": "growth"}, "b": {"of": "rate", "transform": "difference"}}
    text = "period,rate\n2025Q1,1\n2025Q2,0\n"
    assert refused(text, tmp_path, section({"rate": "index"}, features)) == (
        "FILE: values do not fit what the study says about them\n"
        "  [value_not_positive] values of rate at or below zero, of which a takes growth (1 found). First: 2025Q2: 0. "
        "Use transform: difference, or an index that stays above zero."
    )
    assert read(text, tmp_path, section({"rate": "index"}, {"b": features["b"]})).n_periods == 2


# --- refused: what the study says


def test_quarters_in_a_monthly_study_need_a_rule_for_every_variable_used(tmp_path):
    bare = {"unit": "percent"}
    text = "period,a,b,c\n2025Q1,1,1,1\n"
    features = {"f": {"of": "a"}, "g": {"of": "b"}}
    message = refused(text, tmp_path, section({"a": bare, "b": bare, "c": bare}, features), MONTH, TextError)
    assert message == (
        "macro.variables: a, b are quarterly in a monthly study; say how quarters become months: place: linear (straight lines "
        "between the quarters' last months) or place: step (every month takes its quarter's value)"
    )
    one = section({"a": bare, "b": "percent", "c": bare}, features)
    assert "macro.variables: a is quarterly in a monthly study;" in refused(
        text, tmp_path, one, MONTH, TextError
    )
    assert (
        read(text, tmp_path, section({"a": "percent", "b": "percent", "c": bare}, features), MONTH).n_periods
        == 1
    )
    assert read(text, tmp_path, section({"a": bare, "b": bare, "c": bare}, features), QUARTER).n_periods == 1


def test_a_monthly_table_in_a_quarterly_study(tmp_path):
    assert refused("period,rate\n2025-01,1\n2025-02,1\n", tmp_path) == (
        "the macro table is monthly and the study is quarterly: how months become a quarter (last, mean, sum) cannot be declared "
        "yet, and stresskit does not choose silently. Supply a quarterly table, or set frequency: month"
    )


def test_a_span_without_use_is_found_when_history_is_read(tmp_path):
    macro = section({"rate": "percent"}, {"f": {"of": "rate", "over": 2}})
    assert "macro.features.f: transform level takes one value" in refused(
        "period,rate\n2025Q1,1\n", tmp_path, macro, error=TextError
    )
