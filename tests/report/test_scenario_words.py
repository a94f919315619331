"""The section that shows what scenarios say about themselves."""

from __future__ import annotations

import dataclasses

from stresskit.report.html import render_report
from stresskit.report.scenario_words import LONGEST_NOTE, scenario_table
from stresskit.runs.records import StudyResult
from tests.report.report_samples import sample


def told(*scenarios: dict[str, object]) -> StudyResult:
    result = sample()
    return dataclasses.replace(result, record=dict(result.record) | {"scenarios": list(scenarios)})


def test_all_fields_are_shown() -> None:
    result = told(
        {"name": "baseline", "weight": 0.75, "title": "Steady", "notes": {"origin": "invented"}},
        {"name": "deep", "weight": 0.25, "severity": "severe", "author_role": "scenario committee", "approved_on": "2025-11-28"},
        {"name": "what_if", "weighted": False, "notes": {"what_if": "u + 4", "long": "x" * 1000}},
    )  # fmt: skip
    table = scenario_table(result)
    assert [c.label for c in table.columns] == [
        "Scenario", "Severity", "Author (role)", "Approved on", "Weight", "Notes",
    ]  # fmt: skip
    shown = [[c.text for c in r] for r in table.rows]
    assert shown[0] == ["baseline", "–", "–", "–", "0.75", "origin: invented"]
    assert table.rows[0][0].sub == "Steady"
    assert shown[1] == ["deep", "severe", "scenario committee", "2025-11-28", "0.25", "–"]
    assert shown[2][4] == "outside the mean"
    assert shown[2][5] == "what_if: u + 4; long: " + "x" * (LONGEST_NOTE - 3) + "..."
    text = render_report(result)
    assert '<section id="scenarios"' in text
    assert "scenario committee" in text.replace("<wbr>", "")


def test_columns_that_nobody_fills_are_left_out() -> None:
    table = scenario_table(told({"name": "baseline"}, {"name": "deep", "severity": "severe"}))
    assert [c.label for c in table.columns] == ["Scenario", "Severity"]


def test_markup_in_a_note_is_text() -> None:
    text = render_report(
        told({"name": "baseline", "title": "<b>x</b>", "notes": {"a": "<script>alert(1)</script>"}})
    )
    assert "<script>alert" not in text
    assert "&lt;script&gt;" in text


def test_a_record_without_scenarios_shows_no_section() -> None:
    assert 'id="scenarios"' not in render_report(told())
