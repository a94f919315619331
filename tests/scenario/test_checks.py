"""Findings on paths: what is said, and that nothing is said about a path that gives no reason."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.scenario.checks import path_findings
from tests.macro.world import MONTH, history, section
from tests.macro.world import path as stress
from tests.scenario.world import BASELINE, HISTORY, resolved, scenario

# history: u 4.0, 5.0, 5.5, 5.3, 5.2 (largest move +1.0 in 2025Q1), hpi 140, 142, 145, 147, 150 (largest +2.1% in 2025Q2)
MACRO = section({"u": "percent", "hpi": "index", "spread": "level"})
PAST = history(
    MACRO,
    "2024Q4",
    u=[4.0, 5.0, 5.5, 5.3, 5.2],
    hpi=[140.0, 142.0, 145.0, 147.0, 150.0],
    spread=[2.0, 1.0, 3.0, 2.0, 2.0],
)


def test_a_quiet_path_gives_no_finding():
    assert (
        path_findings([stress("2026Q1", u=[5.3, 5.4, 5.5], hpi=[151, 152, 153], spread=[2, 3, 1])], PAST)
        == []
    )


def test_paths_without_values_give_no_finding(tmp_path):
    texts = [scenario("a"), scenario("b")]
    paths = list(resolved(tmp_path, *texts, macro=None, past=None).values())
    assert path_findings(paths, PAST) == []


def test_a_jump_at_the_join_in_points():
    assert path_findings([stress("2026Q1", u=[4.0, 4.1])], PAST)[0] == (
        "Scenario stress: u jumps by -1.2 points where the path joins history, from 5.2 in 2025Q4 to 4 in 2026Q1; "
        "history's largest one-period move is +1 points in 2025Q1."
    )
    assert (
        path_findings([stress("2026Q1", u=[4.2, 4.1])], PAST) == []
    )  # as large as history's largest, not larger


def test_a_jump_of_an_index_is_relative():
    # history's largest: 145/142 - 1 = 2.1%; 3.5 is larger than any move in points, and 1.0 / 150 is not larger than 2.1%
    got = path_findings([stress("2026Q1", hpi=[145.5])], PAST)
    assert got[0] == (
        "Scenario stress: hpi jumps by -3.0% where the path joins history, from 150 in 2025Q4 to 145.5 in 2026Q1; "
        "history's largest one-period move is +2.1% in 2025Q2."
    )
    assert (
        path_findings([stress("2026Q1", hpi=[153.1])], PAST) == []
    )  # +2.07%, though 3.1 is more than 3 points


def test_a_jump_where_afterwards_takes_over(tmp_path):
    text = scenario(
        u="{values: [5.3, 5.4]}", tail="afterwards: {u: {revert_to: 4.0, over: 1}}", hpi="{values: [151]}"
    )
    got = path_findings(list(resolved(tmp_path, text).values()), HISTORY)
    assert got[0] == (
        "Scenario stress: u jumps by -1.4 points in 2026Q3, where the stated values end and the afterwards rule begins; "
        "history's largest one-period move is +1 points in 2025Q1."
    )


def test_where_a_shock_ends_is_the_end_of_its_list_when_that_is_the_later_one(tmp_path):
    """Baseline is stated up to 2026Q4, the list up to 2027Q2: the drop from 7.3 to 5.3 comes one quarter later."""
    slump = (
        "scenario: slump\nstarts: 2026Q1\nbased_on: baseline\npaths:\n"
        "  u: {add_to: baseline, values: [0.5, 1, 1.5, 2, 2, 2], then: zero}"
    )
    got = path_findings(list(resolved(tmp_path, BASELINE, slump).values()), HISTORY)
    assert [s for s in got if s.startswith("Scenario slump: u")] == [
        "Scenario slump: u jumps by -2 points in 2027Q3, where the stated values end and the afterwards rule begins; "
        "history's largest one-period move is +1 points in 2025Q1.",
        "Scenario slump: u lies above anything in history (4 to 5.5) in 5 quarters from 2026Q2, by up to 1.8 points.",
        "Scenario slump: u changes a path that is stated up to 2026Q4; the last 4 quarters of 8 (50%) follow the afterwards rule "
        "of that path or of this scenario.",
    ]


@pytest.mark.parametrize(
    ("unit", "values", "said"),
    [
        (
            "percent",
            [0.04, 0.05, -0.5],
            "small for unit: percent (5 is 5 %); if 0.05 means 5 %, declare unit: fraction.",
        ),
        ("percent", [0.04, 0.05, 0.51], None),
        ("percent", [np.nan, 0.0, 0.0], None),  # zero is zero in either unit
        (
            "fraction",
            [0.04, 0.05, 1.6],
            "large for unit: fraction (0.05 is 5 %); if 5 means 5 %, declare unit: percent.",
        ),
        ("fraction", [0.04, 0.05, -1.5], None),
        ("index", [0.04, 0.05, 0.06], None),
        ("level", [0.04, 0.05, 1.6], None),
    ],
)
def test_a_history_that_looks_like_another_unit(unit, values, said):
    past = history(section({"u": unit}), "2025Q1", u=values)
    got = [s for s in path_findings([], past) if s.startswith("Unit")]
    seen = f"Unit of u: the history of u lies between {min(values):.4g} and {max(values):.4g}"
    assert got == ([] if said is None else [f"{seen}{' throughout' if unit == 'percent' else ''}, {said}"])


def test_values_beyond_history_how_far_and_how_long():
    assert path_findings([stress("2026Q1", u=[5.4, 6.0, 6.5, 5.9, 5.5, 4.6, 3.7, 3.9])], PAST) == [
        "Scenario stress: u lies above anything in history (4 to 5.5) in 3 quarters from 2026Q2, by up to 1 points.",
        "Scenario stress: u lies below anything in history (4 to 5.5) in 2 quarters from 2027Q3, by up to 0.3 points.",
    ]


def test_a_trending_index_is_compared_by_its_yearly_growth():
    # the only year in history: 150 / 140 - 1 = 7.1%; two years are needed for a range
    longer = history(
        MACRO, "2024Q3", u=[4.0] * 6, hpi=[138.0, 140.0, 142.0, 145.0, 147.0, 150.0], spread=[1.0] * 6
    )
    # 147/138 = 6.5%, 150/140 = 7.1%; ahead: 151.5/142 = 6.7%, 154.9/145 = 6.8%, 150/147 = 2.0%
    assert path_findings([stress("2026Q1", hpi=[151.5, 154.9, 150.0])], longer) == [
        "Scenario stress: the yearly growth of hpi lies below anything in history (6.5% to 7.1%) in 1 quarter from 2026Q3, "
        "by up to 4.5 percentage points.",
    ]
    assert (
        path_findings([stress("2026Q1", hpi=[152.0, 154.9])], longer) == []
    )  # higher than ever, growing as before


def test_values_at_or_below_zero_are_named_where_the_unit_excludes_them():
    got = path_findings(
        [stress("2026Q1", hpi=[149.0, 0.0, -1.0], spread=[1.5, 1.0, 0.0], u=[5.0, 4.5, 4.0])], PAST
    )
    assert got[:2] == [
        "Scenario stress: hpi (index) is at or below zero in 2 quarters, first in 2026Q2.",
        "Scenario stress: spread (level) is at or below zero in 1 quarter, first in 2026Q3.",
    ]
    negative_rate = history(section({"r": "percent"}), "2025Q1", r=[-1.0, 0.0, 1.0, 0.0])
    assert path_findings([stress("2026Q1", r=[-0.5, 0.0])], negative_rate) == []


def test_how_much_follows_the_afterwards_rule_is_said_once_for_scenarios_alike(tmp_path):
    alike = [
        scenario(n, u=f"{{values: [5.3, 5.4, {u}]}}", hpi="{values: [151, 152, 153]}")
        for n, u in (("a", 5.5), ("b", 5.4))
    ]
    other = scenario("other", u="{values: [5.3, 5.4, 5.5, 5.4]}", hpi="{values: [151, 152, 153]}")
    got = path_findings(list(resolved(tmp_path, *alike, other).values()), HISTORY)
    words = "the last 5 quarters of 8 (62%) follow the afterwards rule."
    reach = [s for s in got if "afterwards" in s]
    assert reach == [
        f"Scenarios a, b: u, hpi are stated up to 2026Q3; {words}",
        f"Scenario other: hpi is stated up to 2026Q3; {words}",
        "Scenario other: u is stated up to 2026Q4; the last 4 quarters of 8 (50%) follow the afterwards rule.",
    ]
    assert got[-3:] == reach


def test_identical_scenarios_are_named(tmp_path):
    twin = BASELINE.replace("scenario: baseline", "scenario: twin")
    child = "scenario: child\nstarts: 2026Q1\nbased_on: baseline"
    got = path_findings(list(resolved(tmp_path, BASELINE, twin, child).values()), HISTORY)
    assert got[:3] == [
        f"Scenarios {a} and {b} are identical: every variable has the same values in every period."
        for a, b in (("baseline", "twin"), ("baseline", "child"), ("twin", "child"))
    ]
    other = twin.replace("5.1", "5.1000001")
    assert not any(
        "identical" in s for s in path_findings(list(resolved(tmp_path, BASELINE, other).values()), HISTORY)
    )


def test_history_beyond_the_start_of_a_path_does_not_count():
    longer = history(MACRO, "2024Q4", u=[4.0, 5.0, 5.5, 5.3, 5.2, 20.0], hpi=[140.0] * 6, spread=[2.0] * 6)
    assert (
        "u lies above anything in history (4 to 5.5) in 1 quarter from 2026Q1"
        in path_findings([stress("2026Q1", u=[6.0])], longer)[0]
    )


@pytest.mark.parametrize("u", [[5.0], [np.nan, 5.0]])
def test_too_little_history_to_compare_with(u):
    short = history(section({"u": "percent"}), "2025Q4" if len(u) == 1 else "2025Q3", u=u)
    assert path_findings([stress("2026Q1", u=[50.0])], short) == []


def test_months_are_called_months():
    past = history(section({"u": "percent"}), "2025-11", MONTH, u=[5.0, 5.5])
    assert path_findings([stress("2026-01", MONTH, u=[5.6, 5.7])], past) == [
        "Scenario stress: u lies above anything in history (5 to 5.5) in 2 months from 2026-01, by up to 0.2 points."
    ]


def test_a_macro_table_that_is_newer_than_the_scenarios_is_named():
    """Two quarters of the table lie where the path begins; the sentence says which, and what would use them."""
    longer = history(
        MACRO, "2024Q4", u=[4.0, 5.0, 5.5, 5.3, 5.2, 5.3, 5.4], hpi=[140.0] * 7, spread=[2.0] * 7
    )
    found = path_findings([stress("2026Q1", u=[5.3, 5.4]), stress("2026Q1", u=[5.3, 5.5])], longer)
    assert found == [
        "Stale vintage: the macro table has 2 quarters (2026Q1 to 2026Q2) that the scenarios still project. They are not used, and "
        "what was revised up to as_of is; a later as_of with scenarios restated from 2026Q3 uses them."
    ]
    one = history(MACRO, "2025Q1", u=[4.0, 5.0, 5.5, 5.3, 5.2], hpi=[140.0] * 5, spread=[2.0] * 5)
    assert "has 1 quarter (2026Q1) that" in path_findings([stress("2026Q1", u=[5.3])], one)[-1]
    assert path_findings([stress("2026Q2", u=[5.3])], one) == []
