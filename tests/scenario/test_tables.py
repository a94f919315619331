"""A published wide table as a scenario."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.core.errors import DataError
from tests.macro.world import MONTH, history, section
from tests.scenario.world import BASELINE, refused, resolved, scenario

TABLE = "Name,Date,Unemployment,Houses\nMild,2026 Q1,9,9\nHard,2026 Q2,7.1,140\nHard,2026 Q1,6.3,145.5\n"
MAPPING = """
    scenario: published
    table: tables/supervisor.csv
    period: Date
    only: {Name: [Hard]}
    variables: {u: Unemployment, hpi: Houses}
    title: As published
    notes: {edition: first}
"""


def put(folder: Path, text: str = TABLE) -> Path:
    (folder / "tables").mkdir(exist_ok=True)
    file = folder / "tables" / "supervisor.csv"
    file.write_text(text, encoding="utf-8")
    return folder


def test_columns_are_mapped_and_rows_filtered(tmp_path):
    path = resolved(put(tmp_path), MAPPING)["published"]
    assert path.values["u"].tolist() == [6.3] + [7.1] * 7
    assert path.values["hpi"].tolist() == [145.5] + [140.0] * 7
    assert path.flags["hpi"].tolist() == [0, 0] + [2] * 6
    assert dict(path.notes) == {"title": "As published", "table": "tables/supervisor.csv", "edition": "first"}


def test_the_table_is_found_beside_the_mapping_not_beside_the_caller(tmp_path, monkeypatch):
    put(tmp_path)
    monkeypatch.chdir(tmp_path.parent)
    assert resolved(tmp_path, MAPPING)["published"].values["u"][0] == 6.3


def test_a_table_carries_weight_and_afterwards_and_can_be_built_upon(tmp_path):
    mapping = MAPPING + "    weight: 0.25\n    afterwards: {u: {revert_to: 5.1, over: 2}, hpi: hold}\n"
    stress = scenario(
        head="weight: 0.75\nbased_on: published", u="{add_to: published, values: [1], then: hold}"
    )
    paths = resolved(put(tmp_path), mapping, stress, horizon=12)
    assert paths["published"].weight == 0.25
    assert paths["published"].values["u"].tolist() == pytest.approx([6.3, 7.1, 6.1, 5.1], rel=1e-15)
    # one point above the table and above what the table's own rule makes of it
    assert paths["stress"].values["u"].tolist() == pytest.approx([7.3, 8.1, 7.1, 6.1], rel=1e-15)


def test_a_table_may_be_the_baseline(tmp_path):
    mapping = MAPPING.replace("scenario: published", "scenario: baseline")
    stress = scenario(u="{values: [9]}", tail="afterwards: {u: baseline}")
    assert resolved(put(tmp_path), mapping, stress, horizon=6)["stress"].values["u"].tolist() == [9.0, 7.1]


# --- refused, with the place in the mapping


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (
            "tables/supervisor.csv",
            "tables/supervisors.csv",
            "s0.yaml:2:1: table: table 'tables/supervisors.csv' does not exist; that folder has supervisor.csv",
        ),
        (
            "tables/supervisor.csv",
            "elsewhere/x.csv",
            "s0.yaml:2:1: table: table 'elsewhere/x.csv' does not exist",
        ),
        (
            "period: Date",
            "period: date",
            "s0.yaml:3:1: period: tables/supervisor.csv has no column 'date' for period (nearest: 'Date'). "
            "The table has: Name, Date, Unemployment, Houses.",
        ),
        (
            "only: {Name:",
            "only: {Scenario:",
            "s0.yaml:4:8: only.Scenario: tables/supervisor.csv has no column 'Scenario' for only. "
            "The table has: Name, Date, Unemployment, Houses.",
        ),
        (
            "hpi: Houses",
            "hpi: House",
            "s0.yaml:5:30: variables.hpi: tables/supervisor.csv has no column 'House' for hpi (nearest: 'Houses'). "
            "The table has: Name, Date, Unemployment, Houses.",
        ),
        (
            "hpi: Houses",
            "policy: Houses",
            "s0.yaml:5:1: variables: scenario 'published' gives no path of 'hpi', which feature hpi_growth needs; "
            "map its column under variables",
        ),
        (
            "title: As published",
            "afterwards: baseline",
            "s0.yaml:6:1: afterwards: baseline means the scenario called 'baseline', and the study has none (it has published); "
            "add it, or use hold, revert_to or back_to",
        ),
    ],
)
def test_mappings(old, new, message, tmp_path):
    assert refused(put(tmp_path), MAPPING.replace(old, new)) == message


def test_a_table_that_starts_in_another_period(tmp_path):
    assert refused(put(tmp_path, TABLE.replace("2026", "2027")), MAPPING) == (
        "s0.yaml:2:1: table: scenario 'published' starts in 2027Q1, but the first period after as_of 2025-12 is 2026Q1; "
        "restate it from 2026Q1, or move as_of"
    )


def test_a_table_value_that_growth_cannot_take(tmp_path):
    assert refused(put(tmp_path, TABLE.replace("140", "0")), MAPPING) == (
        "s0.yaml:5:1: variables: scenario 'published': hpi is 0 in 2026Q2, and hpi_growth takes growth of it, "
        "which needs values above zero"
    )


def test_a_table_on_another_calendar(tmp_path):
    monthly = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(monthly, "2025-11", MONTH, u=[5.0, 5.0])
    assert refused(put(tmp_path), MAPPING, macro=monthly, past=past) == (
        "s0.yaml:2:1: table: tables/supervisor.csv is on a quarter calendar, macro history on a month calendar; "
        "supply the table on the calendar of the history"
    )


def test_a_table_needs_a_macro_section(tmp_path):
    assert refused(put(tmp_path), MAPPING, macro=None, past=None) == (
        "s0.yaml:2:1: table: a scenario from a table needs a macro section in the study that says what its variables are"
    )


@pytest.mark.parametrize(
    ("old", "new", "problem"),
    [
        (
            "6.3",
            "",
            "  [value_blank] blank cells of u (1 found). First: 2026Q1. A scenario states every value of its variables.",
        ),
        (
            "7.1",
            "x",
            "  [value_not_number] cells of u that are not numbers (1 found). First: 2026Q2: 'x'. Write plain",
        ),
        (
            "Hard,2026 Q2",
            "Hard,2026 Q3",
            "  [period_missing] periods without a row (1 found). First: 2026Q2.",
        ),
        (
            "Hard,2026 Q2",
            "Hard,2026 Q1",
            "  [period_doubled] periods with more than one row (1 found). First: 2026Q1.",
        ),
        ("Hard", "Harsh", "no row has 'Hard' in column 'Name'; it holds 'Harsh', 'Mild'"),
    ],
)
def test_a_table_gets_the_checks_of_history(old, new, problem, tmp_path):
    message = refused(put(tmp_path, TABLE.replace(old, new)), MAPPING, error=DataError)
    assert message.startswith("scenario 'published', tables/supervisor.csv: ")
    assert problem in message


def test_scenarios_and_tables_side_by_side(tmp_path):
    paths = resolved(put(tmp_path), BASELINE, MAPPING)
    assert list(paths) == ["baseline", "published"]
