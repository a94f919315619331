"""What the scenarios say about themselves: title, severity, weight, who stands for them, approval, notes."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from stresskit.report import numbers as num
from stresskit.report.tables import Cell, Table, columns, row, without
from stresskit.runs.records import StudyResult

#: Characters of a note that are shown; the run record has all of it.
LONGEST_NOTE = 400
_OPTIONAL = {"Severity": "severity", "Author (role)": "author_role", "Approved on": "approved_on"}


def scenario_table(result: StudyResult) -> Table:
    """A row per scenario of the run; columns that no scenario fills are left out."""
    told: list[Mapping[str, Any]] = list(result.record.get("scenarios", ()))
    rows = []
    for scenario in told:
        notes = _sentences(f"{key}: {_short(value)}" for key, value in scenario.get("notes", {}).items())
        rows.append(
            row(
                Cell(str(scenario["name"]), str(scenario.get("title", ""))),
                *(str(scenario.get(key, num.MISSING)) for key in _OPTIONAL.values()),
                _weight(scenario),
                notes or num.MISSING,
            )
        )
    heads = columns("Scenario", *_OPTIONAL, "Weight", "Notes", words=6)
    table = Table("Scenarios in their own words", heads, tuple(rows))
    empty = [label for label, key in _OPTIONAL.items() if not any(key in s for s in told)]
    if not any("weight" in s for s in told):
        empty.append("Weight")
    if not any(s.get("notes") for s in told):
        empty.append("Notes")
    return without(table, *empty)


def _sentences(notes: Iterable[str]) -> str:
    """Notes after each other; one that ends as a sentence needs no semicolon."""
    out = ""
    for note in notes:
        out += (" " if out.endswith((".", "!", "?")) else "; " if out else "") + note
    return out


def _short(note: str) -> str:
    return note if len(note) <= LONGEST_NOTE else note[: LONGEST_NOTE - 3] + "..."


def _weight(scenario: Mapping[str, Any]) -> str:
    if scenario.get("weighted", True):
        return f"{scenario['weight']:g}" if "weight" in scenario else num.MISSING
    return "outside the mean"
