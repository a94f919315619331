"""Bad mappings, bad tables, levels that do not join: the exact words."""

from __future__ import annotations

import pytest

from stresskit.core.errors import DataError, TextError, UsageError
from stresskit.imports import sheets
from stresskit.imports.api import import_table
from tests.imports.test_forms_by_hand import JOIN, changed
from tests.imports.world import MAPPING, TABLE, imported, put, refused

LINE = "mapping.yaml:"


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("period: Quarter", "period: quarter",
         "3:1: period: table.csv has no column 'quarter' (nearest: 'Quarter'). The table has: Quarter, Unemployment, Houses."),
        ("column: Houses", "column: House",
         "7:9: variables.hpi.column: table.csv has no column 'House' (nearest: 'Houses'). The table has: Quarter, "
         "Unemployment, Houses."),
        ("stress: {}", "stress: {name: Hard}",
         "9:12: scenarios.stress.name: name is looked for in scenario_column, which is not given"),
        ("stress: {}", "stress: {nme: Hard}", "9:12: scenarios.stress.nme: unknown key; did you mean 'name'? (keys here: name, table, sheet, variables, "
            "title, severity, author_role, approved_on, weight, weighted, missing, based_on, afterwards, notes)"),
        ("unit: percent", "unit: percents",
         "6:35: variables.u.unit: expected 'percent', 'fraction', 'index' or 'level', got the text 'percents'; did you mean 'percent'?"),
        ("unit: percent", "unit: percent, growth: per_period, amounts: percent",
         "6:44: variables.u.growth: growth of a variable in percent is not read; declare the growth as a variable of its own "
         "(without this key), or the unit as index or level"),
        ("unit: index", "unit: index, growth: per_period",
         "7:38: variables.hpi.growth: amounts says in which unit growth or deviations are: points, percent or fraction"),
        ("unit: index", "unit: index, growth: per_period, amounts: points",
         "7:58: variables.hpi.amounts: growth is in percent or fraction"),
        ("unit: index", "unit: index, amounts: percent",
         "7:38: variables.hpi.amounts: amounts belongs to growth or deviation_from; levels have table_unit"),
        ("unit: index", "unit: index, table_unit: percent",
         "7:38: variables.hpi.table_unit: table_unit converts levels between percent and fraction, nothing else"),
        ("unit: percent", "unit: percent, splice: growth", "6:44: variables.u.splice: splice is for levels of an index or level"),
        ("unit: index", "unit: index, at_as_of: 100",
         "7:38: variables.hpi.at_as_of: at_as_of is used with growth or splice: growth only"),
        ("unit: index", "unit: index, deviation_from: base, amounts: percent",
         "7:38: variables.hpi.deviation_from: there is no scenario 'base' in this mapping; there are stress"),
        ("unit: index", "unit: index, deviation_from: stress, amounts: percent",
         "7:38: variables.hpi.deviation_from: hpi of 'stress' is a deviation itself; give that scenario's own form under "
         "scenarios.stress.variables"),
        ("unit: index", "unit: index, growth: per_period, deviation_from: stress, amounts: percent",
         "7:58: variables.hpi.deviation_from: a column states growth or deviations, not both"),
        ("unit: index", "unit: index, within_year: linear",
         "7:38: variables.hpi.within_year: the table is not annual: its rows are a quarter apart"),
        ("unit: index", "unit: index, splice: growth",
         "7:38: variables.hpi.splice: there is no other history of hpi to splice onto; name it under join, or import with --study"),
        ("unit: index", "unit: index, growth: year_on_year, amounts: percent",
         "7:38: variables.hpi.growth: growth of hpi needs 4 values of its level up to 2025Q4 to start from, and there are 0; "
         "name the history under join, import with --study"),
        ("as_of: 2025Q4", "as_of: soon",
         "4:8: as_of: 'soon' is not a period: expected '2025-12', '2025Q4', '2025 Q4' or '2025-12-31'"),
        ("period: Quarter", "period: Quarter\nonly: {Houses: [A]}",
         "4:8: only.Houses: no row of table.csv has 'A' in column 'Houses'; it holds '140', '143', '146', '148', '150' and 3 more"),
        ("period: Quarter", "period: Quarter\nmarker: Here",
         "11:1: history: rows above the marker are the history; take history or marker out"),
    ],
)  # fmt: skip
def test_mappings(old, new, message, tmp_path):
    found = refused(tmp_path, changed((old, new)), error=TextError)
    assert found == LINE + message


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("2026 Q2,5.4", "2026 Q2,n/a",
         "table.csv, scenario 'stress': values that cannot be used\n  [value_not_number] cells of u that are not numbers "
         "(1 found). First: 2026Q2 (line 8): 'n/a'."),
        ("2026 Q2,5.4", "2026 Q2,5.4%", "First: 2026Q2 (line 8): '5.4%'. Write plain decimals"),
        ("2026 Q2,5.4", "2026 Q2,1e999", "First: 2026Q2 (line 8): '1e999'."),
        ("2026 Q2,5.4", "2026 Q2,", "[value_blank] blank cells of u (1 found). First: 2026Q2 (line 8)."),
        ("2025 Q2,5.2", "2025 Q2,", "[value_blank] blank cells of u (1 found). First: 2025Q2 (line 4)."),
        ("2026 Q2,5.4,147.5\n", "",
         "table.csv: the calendar of the table is broken\n  [period_missing] periods without a row (1 found). First: 2026Q2. "
         "Add the rows: every period is needed."),
        ("2026 Q2,", "2026 Q1,", "[period_doubled] periods with more than one row (1 found). First: 2026Q1 (rows 7, 8). Keep one row"),
        ("2026 Q2,", "2026,",
         "table.csv: column 'Quarter' mixes calendars: '2024 Q4' in line 2, '2026' in line 8; keep rows of one kind"),
        ("2026 Q2,", "2026-06,", "mixes calendars: '2024 Q4' in line 2, '2026-06' in line 8"),
        ("2026 Q2,", "2026 Q5,", "[period_unreadable] rows whose 'Quarter' names no period (1 found). First: line 8: '2026 Q5'."),
        ("2026 Q4,5.5,145\n", "2026 Q4,5.5,145\nSource: the authority\n",
         "[row_width] rows that do not have the header's 3 cells (1 found). First: line 11: 1 cells. Fill or remove cells so that "
         "every row matches the header; last_row leaves notes below the table out."),
        ("2026 Q1,5.2,149", "2026 Q1,5.2,-149",
         "paths that cannot be used\n  [value_not_positive] values of hpi (index) at or below zero (1 found). First: 2026Q1: -149."),
        (TABLE, "", "table.csv: header_row 1 is blank; the file is empty"),
        (TABLE, "Quarter,Unemployment,Houses\n", "table.csv: no row below the header in row 1"),
    ],
)  # fmt: skip
def test_tables(old, new, message, tmp_path):
    assert old in TABLE
    assert message in refused(tmp_path, table=TABLE.replace(old, new, 1), error=DataError)


def test_another_separator_and_decimal_sign_than_declared(tmp_path):
    table = TABLE.replace(",", ";")
    assert refused(tmp_path, table=table, error=TextError) == (
        "mapping.yaml:3:1: period: table.csv has no column 'Quarter'. The table has: Quarter;Unemployment;Houses; cells are parted by "
        "another sign, see separator."
    )
    comma = MAPPING + "separator: semicolon\ndecimal: comma\n"
    found = refused(tmp_path, comma, table, error=DataError)
    assert "First: 2024Q4 (line 2): '5.7 (with decimal: comma)'" in found
    assert "'1,234'" in refused(
        tmp_path, table=TABLE.replace("2026 Q1,5.2,149", '2026 Q1,5.2,"1,234"'), error=DataError
    )


def test_notes_below_the_table_are_left_out_by_last_row(tmp_path):
    table = TABLE + "Source: the authority\n"
    assert len(imported(tmp_path, MAPPING + "last_row: 10\n", table).paths["stress"].values["u"]) == 4


@pytest.mark.parametrize(
    ("as_of", "words"),
    [
        ("2026Q4", "stale vintage: the table ends in 2026Q4, and nothing in it comes after as_of 2026Q4; supply the vintage whose "
                   "projection starts in 2027Q1, or set as_of to the period before the table's own start"),
        ("2024Q2", "a later vintage: the table's first projected period is 2024Q4, but the one after as_of 2024Q2 is 2024Q3; supply the "
                   "vintage whose projection starts in 2024Q3, or set as_of to the period before the table's own start"),
    ],
)  # fmt: skip
def test_a_table_of_another_vintage(as_of, words, tmp_path):
    found = refused(tmp_path, changed(("as_of: 2025Q4", f"as_of: {as_of}")), error=DataError)
    assert found == f"table.csv: {words}"


def test_rows_up_to_as_of_are_not_taken_for_history_unasked(tmp_path):
    """A table of the last vintage has projections of periods that are history by now."""
    undeclared = changed(("history: rows_up_to_as_of\n", ""))
    assert refused(tmp_path, undeclared, error=DataError) == (
        "table.csv: stale vintage: the table's first projected period is 2024Q4, but the one after as_of 2025Q4 is 2026Q1; supply the "
        "vintage whose projection starts in 2026Q1, or set as_of to the period before the table's own start; if the rows up to as_of "
        "are observed, say history: rows_up_to_as_of"
    )


def test_a_marker_that_stands_in_another_period_than_as_of(tmp_path):
    table = TABLE.replace("2026 Q1", "Forecast\n2026 Q1")
    mapping = changed(
        ("as_of: 2025Q4", "as_of: 2026Q1\nmarker: Forecast"), ("history: rows_up_to_as_of\n", "")
    )
    assert refused(tmp_path, mapping, table, error=DataError).startswith(
        "table.csv: stale vintage: the table's first projected period is 2026Q1, but the one after as_of 2026Q1 is 2026Q2; "
    )


def test_markers(tmp_path):
    mapping = changed(
        ("as_of: 2025Q4", "as_of: 2025Q4\nmarker: Forecast"), ("history: rows_up_to_as_of\n", "")
    )
    assert refused(tmp_path, mapping, error=DataError).startswith(
        "table.csv: no row holds the marker 'Forecast'; give its text as it stands in one cell, or take marker out"
    )
    twice = TABLE.replace("2026 Q1", "Forecast,,\n2026 Q1").replace("2026 Q3", "Forecast,,\n2026 Q3")
    assert refused(tmp_path, mapping, twice, error=DataError) == (
        "table.csv: the marker 'Forecast' stands in 2 rows: line 7, line 10; expected one"
    )
    near = TABLE.replace("2026 Q1", "Forecasts,,\n2026 Q1")
    assert "no row holds the marker 'Forecast' (nearest: 'Forecasts')" in refused(
        tmp_path, mapping, near, error=DataError
    )


def test_a_history_that_stops_before_the_projection(tmp_path):
    table = "Name,Quarter,Unemployment,Houses\nA,2025 Q2,5,150\nA,2025 Q3,5,150\nB,2026 Q1,5,150\nB,2026 Q2,5,150\n"
    mapping = changed(
        ("period: Quarter", "period: Quarter\nscenario_column: Name"),
        ("stress: {}", "stress: {name: B}"),
        ("history: rows_up_to_as_of", "history: {name: A}"),
    )
    assert refused(tmp_path, mapping, table, error=DataError) == (
        "table.csv: the table's history ends in 2025Q3, but its projection starts in 2026Q1: supply the rows between, or another "
        "vintage"
    )
    wrong = mapping.replace("name: B", "name: Bee")
    assert refused(tmp_path, wrong, table, error=TextError) == (
        "mapping.yaml:10:12: scenarios.stress.name: no row of table.csv has 'Bee' in column 'Name'; it holds 'A', 'B'"
    )


# --- units


@pytest.mark.parametrize(
    ("cells", "declared", "words"),
    [
        (("0.05", "0.06"), "unit: percent",
         "[unit_doubtful] values of u, small for percent (5 is 5 %) (1 found). First: all between 0.05 and 0.06. Declare "
         "table_unit: fraction if that is what the column holds; if the unit is right, say sure: true."),
        (("5.0", "6.0"), "unit: fraction",
         "[unit_doubtful] values of u, large for fraction (0.05 is 5 %) (1 found). First: all between 5 and 6. Declare table_unit: "
         "percent"),
        (("0.01", "0.02"), "unit: index, growth: per_period, amounts: percent, at_as_of: 100",
         "[unit_doubtful] growth of u, small for percent (5 is 5 %) (1 found). First: all between 0.01 and 0.02. Declare amounts: "
         "fraction"),
        (("2", "-0.5"), "unit: index, growth: per_period, amounts: fraction, at_as_of: 100",
         "[unit_doubtful] growth of u, large for fraction (0.05 is 5 %) (1 found)."),
    ],
)  # fmt: skip
def test_units_that_the_values_contradict(cells, declared, words, tmp_path):
    table = f"Quarter,Unemployment,Houses\n2026 Q1,{cells[0]},150\n2026 Q2,{cells[1]},150\n"
    assert words in refused(tmp_path, changed(("unit: percent", declared)), table, error=DataError)
    sure = changed(("unit: percent", declared + ", sure: true"))
    assert imported(tmp_path, sure, table).paths["stress"].values["u"].size == 2


# --- joining history


def test_an_index_on_another_base_is_refused_with_both_values(tmp_path):
    """The table says 150 in 2025Q4, the bank's history 200: 25 % apart, and history never moved more than 2.2 %."""
    found = refused(tmp_path, MAPPING + "join: {file: join.csv}\n", error=DataError, join=JOIN)
    assert found == (
        "table.csv, scenario 'stress': paths that cannot be used\n  [level_does_not_join] levels that do not join history (its "
        "largest one-period move is +2.2%) (1 found). First: hpi is 150 in 2025Q4 in the table, 200 in join.csv. On another index "
        "base declare splice: growth, which continues history by the table's own growth; splice: none takes the values as published."
    )


def test_without_a_common_period_the_first_value_is_held_against_history(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026 Q1,5,149\n2026 Q2,5,150\n"
    mapping = MAPPING + "join: {file: join.csv}\n"
    found = refused(tmp_path, mapping, table, error=DataError, join=JOIN)
    assert (
        "First: hpi goes from 200 in 2025Q4 (join.csv) to 149 in 2026Q1 (-25.5%). On another index base"
        in found
    )
    declared = mapping.replace("unit: index", "unit: index, splice: none")
    said = imported(tmp_path, declared, table, join=JOIN).cautions["stress"]
    assert said == (
        "hpi goes from 200 in 2025Q4 (join.csv) to 149 in 2026Q1 (-25.5%), more than history's largest one-period move (+2.2%).",
    )


def test_one_value_of_history_can_still_contradict_the_table(tmp_path):
    short = "period,u,hpi\n2025Q4,5.0,200.0\n"
    mapping = MAPPING + "join: {file: join.csv, period: period}\n"
    one = "period,u,hpi\n2025Q3,5.1,\n2025Q4,5.0,200.0\n"
    found = refused(tmp_path, mapping, error=DataError, join=one)
    assert "First: hpi is 150 in 2025Q4 in the table, 200 in join.csv." in found
    agreed = imported(tmp_path, mapping, join=one.replace("200.0", "150"))
    assert not any("hpi" in s for s in agreed.cautions["stress"])
    assert "200 in join.csv" in refused(tmp_path, mapping, error=DataError, join=short)


def test_a_jump_that_the_scenario_means_is_a_caution_and_a_note(tmp_path):
    result = imported(tmp_path, table=TABLE.replace("2026 Q1,5.2,149", "2026 Q1,7.2,129"))
    assert result.cautions["stress"] == (
        "u goes from 5 in 2025Q4 (the table's own history) to 7.2 in 2026Q1 (+2.2), more than history's largest one-period move (-0.4).",
        "hpi goes from 150 in 2025Q4 (the table's own history) to 129 in 2026Q1 (-14.0%), more than history's largest one-period "
        "move (+2.1%).",
    )
    assert 'cautions of the import: "u goes from 5 in 2025Q4' in result.texts["stress"]


def test_a_revised_value_is_named_and_taken_as_published(tmp_path):
    join = (
        JOIN.replace("186.0", "139")
        .replace("190.0", "142")
        .replace("194.0", "145")
        .replace("197.0", "147")
        .replace("200.0", "150.5")
    )
    result = imported(tmp_path, MAPPING + "join: {file: join.csv}\n", join=join)
    assert (
        result.cautions["stress"]
        == (
            "hpi is 150 in 2025Q4 in the table, 150.5 in join.csv; the path is taken as published.",
            "u goes from 5 in 2025Q4 (join.csv) to 5.2 in 2026Q1 (+0.2), more than history's largest one-period move (-0.1).",
        )[::-1]
    )


def test_a_history_to_join_that_does_not_reach(tmp_path):
    short = "\n".join(JOIN.splitlines()[:-1]) + "\n"
    assert refused(tmp_path, MAPPING + "join: {file: join.csv}\n", error=DataError, join=short) == (
        "join.csv: the history to join runs from 2024Q4 to 2025Q3, and as_of 2025Q4 needs it up to 2025Q4"
    )


# --- annual tables


def test_annual_tables(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026,6,160\n2027,8,170\n"
    assert refused(tmp_path, table=table, error=TextError) == (
        "mapping.yaml:6:3: variables.u: the table is annual: say how u runs within a year, within_year: step, linear or growth"
    )
    inside = changed(("as_of: 2025Q4", "as_of: 2025Q2"))
    assert refused(tmp_path, inside, table, error=TextError) == (
        "mapping.yaml:4:1: as_of: the table is annual, and 2025Q2 does not end a year"
    )
    linear = changed(
        ("unit: percent", "unit: percent, within_year: linear"),
        ("unit: index", "unit: index, within_year: step"),
    )
    assert refused(tmp_path, linear, table, error=TextError) == (
        "mapping.yaml:6:44: variables.u.within_year: linear starts from the value of u in 2025Q4, which is not known; name the "
        "history under join, import with --study, or use step"
    )
    own = table.replace("2026", "2025,5,150\n2026", 1)
    assert imported(tmp_path, linear, own).paths["stress"].values["u"][:2].tolist() == [5.25, 5.5]


# --- files


def test_files_and_names(tmp_path, monkeypatch):
    file = put(tmp_path)
    with pytest.raises(UsageError, match="has no scenario 'stres'; it has stress; did you mean 'stress'"):
        import_table(file, scenarios=["stres"])
    gone = changed(("table: table.csv", "table: tables.csv"))
    assert (
        refused(tmp_path, gone, error=DataError)
        == "tables.csv: the file does not exist; that folder has table.csv"
    )
    text = changed(("table: table.csv", "table: mapping.yaml\nsheet: A"))
    assert "a CSV file has no worksheets" in refused(tmp_path, text, error=DataError)
    monkeypatch.setattr(sheets, "MAX_BYTES", 100)
    assert (
        refused(tmp_path, error=DataError)
        == "table.csv: larger than 100 bytes, the largest table that is read"
    )
    monkeypatch.setattr(sheets, "MAX_BYTES", 10_000)
    monkeypatch.setattr(sheets, "MAX_ROWS", 5)
    assert refused(tmp_path, error=DataError) == "table.csv: more than 5 rows or 2,000 columns"
    (tmp_path / "table.csv").write_bytes(b"Quarter,Unemployment,Houses\n2026 Q1,\xff,1\n")
    with pytest.raises(DataError, match=r"not UTF-8 text \(byte 36\)"):
        import_table(file)


def test_a_study_or_a_scenario_is_not_a_mapping_and_a_mapping_no_scenario(tmp_path):
    from stresskit.spec.load import load_scenario

    file = put(tmp_path, "scenario: x\nstarts: 2026Q1\n")
    with pytest.raises(TextError, match="this file is a scenario, where an import mapping was expected"):
        import_table(file)
    with pytest.raises(
        TextError, match="this file is an import mapping, where a scenario was expected: `stresskit import`"
    ):
        load_scenario(put(tmp_path))
