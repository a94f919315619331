"""Values, shocks, inheritance and afterwards, worked out by hand on eight quarters."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.core.period import parse_period
from tests.macro.world import MONTH, QUARTER, history, section
from tests.scenario.world import BASELINE, MACRO, resolved, scenario

HOLD8 = [5.0, 5.1, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3]


def test_values_by_position_then_hold(tmp_path):
    path = resolved(tmp_path, BASELINE)["baseline"]
    assert path.frequency is QUARTER
    assert path.start == parse_period("2026Q1", QUARTER)
    assert path.horizon == 8
    assert list(path.values) == ["u", "hpi"]
    assert path.values["u"].tolist() == HOLD8
    assert path.flags["u"].tolist() == [0, 0, 0, 0, 2, 2, 2, 2]


def test_values_by_label_in_any_order(tmp_path):
    text = scenario(u="{values: {2026Q2: 7.5, 2026 Q1: 6.5, 2026-09: 8}}")
    assert resolved(tmp_path, text)["stress"].values["u"].tolist() == [6.5, 7.5] + [8.0] * 6


def test_values_beyond_the_horizon_are_not_carried(tmp_path):
    path = resolved(tmp_path, scenario(u="{values: [1, 2, 3, 4, 5]}"), horizon=7)["stress"]
    assert path.values["u"].tolist() == [1.0, 2.0, 3.0]
    assert path.flags["u"].tolist() == [0, 0, 0]
    assert path.flags["hpi"].tolist() == [0, 2, 2]


@pytest.mark.parametrize(("horizon", "periods"), [(1, 1), (3, 1), (4, 2), (24, 8), (25, 9)])
def test_a_path_covers_every_quarter_that_the_horizon_touches(horizon, periods, tmp_path):
    assert resolved(tmp_path, BASELINE, horizon=horizon)["baseline"].horizon == periods


def test_a_quarter_that_is_still_running_at_as_of_is_the_first_of_the_path(tmp_path):
    """2025Q4 ends after November, so it is not observed; history's 2025Q4 must not be seen."""
    text = scenario(tail="afterwards: {u: {revert_to: long_run_mean, over: 1}}").replace("2026Q1", "2025Q4")
    path = resolved(tmp_path, text, as_of="2025-11", horizon=8)["stress"]
    assert path.start == parse_period("2025Q4", QUARTER)
    # December 2025 .. July 2026: four quarters; the mean is that of 4.0, 5.0, 5.5, 5.3
    assert path.values["u"].tolist() == [6.0, 7.0, 4.95, 4.95]


@pytest.mark.parametrize(
    ("u", "expected"),
    [
        ("{add_to: baseline, values: [1, 2]}", [6.0, 7.1, 7.2, 7.3, 7.3, 7.3, 7.3, 7.3]),
        ("{add_to: baseline, values: [1, 2], then: zero}", [6.0, 7.1, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3]),
        (
            "{add_to: baseline, values: {2026Q1: 1, 2026Q2: 2}, then: hold}",
            [6.0, 7.1, 7.2, 7.3, 7.3, 7.3, 7.3, 7.3],
        ),
        ("{multiply: baseline, values: [2, 1.5]}", [10.0, 7.65, 7.8, 7.95, 7.95, 7.95, 7.95, 7.95]),
        ("{multiply: baseline, values: [2, 1.5], then: one}", [10.0, 7.65, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3]),
        # up by 1, 2, 3; back by 1.5 each
        (
            "{change_from: baseline, peak_points: 3, at: 2026Q3, back_by: 2027Q1}",
            [6.0, 7.1, 8.2, 6.8, 5.3, 5.3, 5.3, 5.3],
        ),
        (
            "{change_from: baseline, peak_points: 3, at: 2026Q1, back_by: 2026Q2}",
            [8.0, 5.1, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3],
        ),
        ("{change_from: baseline, peak_points: -2, at: 2026Q2}", [4.0, 3.1, 3.2, 3.3, 3.3, 3.3, 3.3, 3.3]),
    ],
)
def test_shocks_on_another_scenario(u, expected, tmp_path):
    path = resolved(tmp_path, BASELINE, scenario(u=u))["stress"]
    np.testing.assert_allclose(path.values["u"], expected, rtol=1e-15)


def test_a_relative_peak_on_an_index(tmp_path):
    # -10% at 2026Q2, back by 2026Q4: -5%, -10%, -5%, 0
    text = scenario(hpi="{change_from: baseline, peak: -10%, at: 2026Q2, back_by: 2026Q4}")
    path = resolved(tmp_path, BASELINE, text)["stress"]
    np.testing.assert_allclose(
        path.values["hpi"], [151 * 0.95, 152 * 0.9, 153 * 0.95] + [154.0] * 5, rtol=1e-15
    )


def test_a_shock_is_stated_where_its_list_or_what_it_changes_is(tmp_path):
    """Baseline is stated for four quarters, the shock for six; in two of them it changes a value that nobody gave."""
    long = scenario(
        u="{add_to: baseline, values: [1, 1, 1, 1, 1, 1]}", tail="afterwards: {u: {revert_to: 9, over: 1}}"
    )
    path = resolved(tmp_path, BASELINE, long)["stress"]
    assert path.flags["u"].tolist() == [0, 0, 0, 0, 2, 2, 2, 2]
    assert path.stated["u"] == 6
    # baseline + 1 for all six quarters that the shock states, its own afterwards only then
    np.testing.assert_allclose(path.values["u"], [6.0, 6.1, 6.2, 6.3, 6.3, 6.3, 9.0, 9.0])


def test_a_way_back_longer_than_the_baseline_is_finished_before_afterwards(tmp_path):
    text = scenario(
        u="{change_from: baseline, peak_points: 6, at: 2026Q2, back_by: 2027Q2}",
        tail="afterwards: {u: {revert_to: 8, over: 2}}",
    )
    path = resolved(tmp_path, BASELINE, text)["stress"]
    np.testing.assert_allclose(path.values["u"], [8.0, 11.1, 9.7, 8.3, 6.8, 5.3, 6.65, 8.0])


# --- shocks beyond what the other scenario states: baseline is 5.0, 5.1, 5.2, 5.3 and then held


def bare(u: str, *, head: str = "", tail: str = "", name: str = "stress") -> str:
    """A scenario on top of baseline that states one path."""
    lines = [f"scenario: {name}", "starts: 2026Q1", "based_on: baseline", *head.splitlines()]
    return "\n".join([*lines, "paths:", f"  u: {u}", *tail.splitlines()])


REVERTING = BASELINE + "    afterwards: {u: {revert_to: 7.3, over: 8}, hpi: hold}\n"


@pytest.mark.parametrize(
    ("u", "expected", "stated"),
    [
        ("{add_to: baseline, values: [1, 2, 3, 3, 2, 1], then: zero}", [6, 7.1, 8.2, 8.3, 7.3, 6.3, 5.3, 5.3], 6),
        ("{add_to: baseline, values: [1, 2, 3, 3, 2, 1], then: hold}", [6, 7.1, 8.2, 8.3, 7.3, 6.3, 6.3, 6.3], 6),
        ("{multiply: baseline, values: [2, 2, 2, 2, 2, 2], then: one}", [10, 10.2, 10.4, 10.6, 10.6, 10.6, 5.3, 5.3], 6),
        ("{multiply: baseline, values: [2, 2, 2, 2, 2, 2], then: hold}", [10, 10.2, 10.4, 10.6, 10.6, 10.6, 10.6, 10.6], 6),
        # up by 3, 6; back by 1.5 each
        ("{change_from: baseline, peak_points: 6, at: 2026Q2, back_by: 2027Q2}", [8, 11.1, 9.7, 8.3, 6.8, 5.3, 5.3, 5.3], 6),
        ("{add_to: baseline, values: [1, 2], then: zero}", [6, 7.1, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3], 4),
    ],
)  # fmt: skip
def test_then_acts_although_the_list_outlasts_the_baseline(u, expected, stated, tmp_path):
    path = resolved(tmp_path, BASELINE, bare(u))["stress"]
    np.testing.assert_allclose(path.values["u"], expected, rtol=1e-14)
    assert path.stated["u"] == stated
    # the baseline is given for four quarters, and nothing that rests on it longer
    assert path.flags["u"].tolist() == [0] * 4 + [2] * 4


def test_a_shock_follows_a_reverting_baseline_from_where_the_baseline_reverts(tmp_path):
    """Baseline goes 5.3 -> 7.3 by 0.25 a quarter from 2027Q1 on; the list ends in 2027Q3, seven quarters in."""
    zeros = bare("{add_to: baseline, values: [0, 0, 0, 0, 0, 0, 0], then: hold}", name="zeros")
    ones = bare("{add_to: baseline, values: [1, 1, 1, 1, 1, 1, 1], then: zero}", name="ones")
    back = bare("{change_from: baseline, peak_points: 6, at: 2026Q2, back_by: 2027Q2}", name="back")
    paths = resolved(tmp_path, REVERTING, zeros, ones, back, horizon=30)
    base = [5.0, 5.1, 5.2, 5.3, 5.55, 5.8, 6.05, 6.3, 6.55, 6.8]
    np.testing.assert_allclose(paths["baseline"].values["u"], base, rtol=1e-14)
    assert paths["zeros"].values["u"].tobytes() == paths["baseline"].values["u"].tobytes()
    added = np.array([1, 1, 1, 1, 1, 1, 1, 0, 0, 0])
    np.testing.assert_allclose(paths["ones"].values["u"], base + added, rtol=1e-14)
    # straight back from 2026Q2, where it is 6, to nothing in 2027Q2
    there = np.array([3, 6, 4.5, 3, 1.5, 0, 0, 0, 0, 0])
    np.testing.assert_allclose(paths["back"].values["u"], base + there, rtol=1e-14)


@pytest.mark.parametrize(
    ("u", "rule", "expected"),
    [
        # the list of six outlasts the baseline's four: a rule departs from the list's last value ...
        ("[1, 1, 1, 1, 1, 1], then: hold", "hold", [6.0, 6.1, 6.2, 6.3, 6.55, 6.8, 6.8, 6.8, 6.8, 6.8]),
        ("[1, 1, 1, 1, 1, 1], then: hold", "{revert_to: 2.8, over: 2}", [6.0, 6.1, 6.2, 6.3, 6.55, 6.8, 4.8, 2.8, 2.8, 2.8]),
        # ... or, when the shock is then over, from the first value without it
        ("[1, 1, 1, 1, 1, 1], then: zero", "hold", [6.0, 6.1, 6.2, 6.3, 6.55, 6.8, 6.05, 6.05, 6.05, 6.05]),
        ("[1, 1, 1, 1, 1, 1], then: zero", "{revert_to: 4.05, over: 2}", [6.0, 6.1, 6.2, 6.3, 6.55, 6.8, 6.05, 5.05, 4.05, 4.05]),
        ("[1, 1, 1, 1, 1, 1], then: hold", "baseline", [6.0, 6.1, 6.2, 6.3, 6.55, 6.8, 6.05, 6.3, 6.55, 6.8]),
        # a short list: what the baseline states is kept
        ("[1, 2], then: hold", "hold", [6.0, 7.1, 7.2, 7.3, 7.3, 7.3, 7.3, 7.3, 7.3, 7.3]),
        ("[1, 2], then: zero", "{revert_to: 3.3, over: 2}", [6.0, 7.1, 5.2, 5.3, 4.3, 3.3, 3.3, 3.3, 3.3, 3.3]),
    ],
)  # fmt: skip
@pytest.mark.parametrize("scope", ["{{u: {}}}", "{}"])
def test_a_rule_of_the_shocked_scenario_itself(u, rule, expected, scope, tmp_path):
    text = bare(f"{{add_to: baseline, values: {u}}}", tail=f"afterwards: {scope.format(rule)}")
    if scope == "{}":  # one rule for all: the index is given here, so that the rule can hold for it
        text = text.replace("paths:", "paths:\n  hpi: {values: [150]}")
    path = resolved(tmp_path, REVERTING, text, horizon=30)["stress"]
    np.testing.assert_allclose(path.values["u"], expected, rtol=1e-14)


def test_a_rule_is_looked_for_no_further_than_the_scenario_that_states_the_shock(tmp_path):
    """top < middle < low < baseline; low's rule is about low's path, middle's shock does not come back under it."""
    low = bare("{values: [6]}", name="low", tail="afterwards: {u: {revert_to: 8, over: 2}}")
    middle = bare("{add_to: low, values: [1, 1], then: zero}", name="middle").replace(
        "based_on: baseline", "based_on: low"
    )
    heir = "scenario: heir\nstarts: 2026Q1\nbased_on: middle"
    ruled = heir.replace("heir", "ruled") + "\nafterwards: {u: {revert_to: 10, over: 1}}"
    top = bare("{multiply: ruled, values: [2, 2, 2], then: one}", name="top").replace(
        "based_on: baseline", "based_on: ruled"
    )
    paths = resolved(tmp_path, BASELINE, low, middle, heir, ruled, top, horizon=18)
    assert paths["low"].values["u"].tolist() == [6.0, 7.0, 8.0, 8.0, 8.0, 8.0]
    assert paths["middle"].values["u"].tolist() == [7.0, 8.0, 8.0, 8.0, 8.0, 8.0]
    assert paths["heir"].values["u"].tobytes() == paths["middle"].values["u"].tobytes()
    # the shock is off in 2026Q3; from there
    assert paths["ruled"].values["u"].tolist() == [7.0, 8.0, 8.0, 10.0, 10.0, 10.0]
    # ruled's rule is in ruled's path; top's factors change that path
    assert paths["top"].values["u"].tolist() == [14.0, 16.0, 16.0, 10.0, 10.0, 10.0]
    assert [paths[n].stated["u"] for n in ("low", "middle", "ruled", "top")] == [1, 2, 2, 3]
    # low gives one value, and all others stand on it
    assert [paths[n].flags["u"].tolist().count(0) for n in ("low", "middle", "ruled", "top")] == [1, 1, 1, 1]


# --- inheritance


def test_what_is_not_stated_is_taken_from_below_over_several_levels(tmp_path):
    middle = (
        "scenario: middle\nstarts: 2026Q1\nbased_on: baseline\npaths:\n  u: {add_to: baseline, values: [1]}"
    )
    top = "scenario: top\nstarts: 2026Q1\nbased_on: middle\npaths:\n  policy: {values: [1]}\ntitle: On top\nnotes: {author: risk}"
    paths = resolved(tmp_path, top, middle, BASELINE)
    assert paths["top"].values["u"].tobytes() == paths["middle"].values["u"].tobytes()
    assert paths["top"].values["hpi"].tobytes() == paths["baseline"].values["hpi"].tobytes()
    assert paths["top"].values["policy"].tolist() == [1.0] * 8
    assert "policy" not in paths["middle"].values
    assert dict(paths["top"].notes) == {"title": "On top", "author": "risk"}


def test_a_rule_is_inherited_variable_by_variable(tmp_path):
    below = scenario("below", tail="afterwards: {u: {revert_to: 10, over: 1}, hpi: hold}")
    same = "scenario: same\nstarts: 2026Q1\nbased_on: below"
    other = "scenario: other\nstarts: 2026Q1\nbased_on: below\nafterwards: {hpi: {revert_to: 100, over: 1}}"
    general = "scenario: general\nstarts: 2026Q1\nbased_on: below\nafterwards: hold"
    paths = resolved(tmp_path, below, same, other, general, horizon=9)
    assert paths["same"].values["u"].tolist() == paths["other"].values["u"].tolist() == [6.0, 7.0, 10.0]
    assert paths["general"].values["u"].tolist() == [6.0, 7.0, 7.0]
    assert paths["other"].values["hpi"].tolist() == [150.0, 100.0, 100.0]


def test_references_between_scenarios_may_cross_as_long_as_no_variable_depends_on_itself(tmp_path):
    a = scenario("a", u="{add_to: b, values: [1]}", hpi="{values: [100]}")
    b = scenario("b", u="{values: [6]}", hpi="{multiply: a, values: [1.5]}")
    paths = resolved(tmp_path, a, b, horizon=3)
    assert (paths["a"].values["u"][0], paths["b"].values["hpi"][0]) == (7.0, 150.0)


def test_a_scenario_may_change_its_own_parent(tmp_path):
    child = (
        "scenario: child\nstarts: 2026Q1\nbased_on: baseline\npaths:\n  u: {multiply: baseline, values: [2]}"
    )
    assert resolved(tmp_path, BASELINE, child, horizon=3)["child"].values["u"].tolist() == [10.0]


# --- afterwards


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        ("hold", [6, 7, 7, 7, 7, 7, 7, 7]),
        ("{u: hold}", [6, 7, 7, 7, 7, 7, 7, 7]),
        ("{u: baseline, hpi: hold}", [6, 7, 5.2, 5.3, 5.3, 5.3, 5.3, 5.3]),
        ("{u: {revert_to: 3, over: 4}}", [6, 7, 6, 5, 4, 3, 3, 3]),
        ("{u: {revert_to: 3, over: 1}}", [6, 7, 3, 3, 3, 3, 3, 3]),
        ("{u: {revert_to: 1, over: 12}}", [6, 7, 6.5, 6, 5.5, 5, 4.5, 4]),
        # the mean of 4.0, 5.0, 5.5, 5.3, 5.2 is 5.0
        ("{u: {revert_to: long_run_mean, over: 4}}", [6, 7, 6.5, 6, 5.5, 5, 5, 5]),
        ("{revert_to: 150, over: 2}", [6, 7, 78.5, 150, 150, 150, 150, 150]),
    ],
)
def test_afterwards(rule, expected, tmp_path):
    path = resolved(tmp_path, BASELINE, scenario(tail=f"afterwards: {rule}"))["stress"]
    np.testing.assert_allclose(path.values["u"], expected, rtol=1e-15)
    assert path.flags["u"].tolist() == [0, 0, 2, 2, 2, 2, 2, 2]


def test_the_long_run_mean_is_that_of_history_up_to_as_of(tmp_path):
    longer = history(MACRO, "2024Q4", u=[4.0, 5.0, 5.5, 5.3, 5.2, 99.0], hpi=[150.0] * 6, policy=[2.0] * 6)
    text = scenario(tail="afterwards: {u: {revert_to: long_run_mean, over: 1}}")
    assert resolved(tmp_path, text, past=longer)["stress"].values["u"][-1] == pytest.approx(5.0, rel=1e-15)


def test_the_long_run_mean_leaves_out_blanks_before_a_variable_starts(tmp_path):
    text = scenario(tail="  policy: {values: [2]}\nafterwards: {policy: {revert_to: long_run_mean, over: 1}}")
    assert resolved(tmp_path, text)["stress"].values["policy"][-1] == pytest.approx(2.75, rel=1e-15)


def test_back_to_a_baseline_that_itself_reverts(tmp_path):
    baseline = BASELINE + "    afterwards: {u: {revert_to: 6.3, over: 2}, hpi: hold}\n"
    path = resolved(tmp_path, baseline, scenario(tail="afterwards: {u: baseline}"))["stress"]
    np.testing.assert_allclose(path.values["u"], [6, 7, 5.2, 5.3, 5.8, 6.3, 6.3, 6.3])


# --- weights, notes, other calendars


def test_weights_are_carried(tmp_path):
    texts = [scenario(f"s{i}", head=f"weight: {w}") for i, w in enumerate((0.1, 0.2, 0.7))]
    assert [p.weight for p in resolved(tmp_path, *texts).values()] == [0.1, 0.2, 0.7]
    assert resolved(tmp_path, BASELINE)["baseline"].weight is None


def test_variables_that_the_study_does_not_declare_are_named_in_the_notes(tmp_path):
    path = resolved(tmp_path, scenario(tail="  gdp_growth: {values: [1]}\n  oil: {values: [60]}"))["stress"]
    assert list(path.values) == ["u", "hpi"]
    assert path.notes["left out"] == "not declared in the study's macro section: gdp_growth, oil"


def test_a_monthly_calendar(tmp_path):
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(macro, "2025-11", MONTH, u=[5.0, 5.0])
    text = "scenario: stress\nstarts: 2026-01\npaths:\n  u: {values: {2026-01: 6, 2026-02: 7}}"
    path = resolved(tmp_path, text, macro=macro, past=past, horizon=4)["stress"]
    assert (path.frequency, path.values["u"].tolist()) == (MONTH, [6.0, 7.0, 7.0, 7.0])


def test_a_quarterly_study(tmp_path):
    path = resolved(tmp_path, BASELINE, as_of="2025Q4", model=QUARTER, horizon=3)["baseline"]
    assert path.values["u"].tolist() == [5.0, 5.1, 5.2]


@pytest.mark.parametrize(("model", "as_of"), [(MONTH, "2025-12"), (QUARTER, "2025Q4")])
@pytest.mark.parametrize("starts", ["2026Q1", "2026-01"])
def test_a_study_without_macro_section_gets_paths_without_values(model, as_of, starts, tmp_path):
    text = scenario(head="weight: 1").replace("starts: 2026Q1", f"starts: {starts}")
    path = resolved(tmp_path, text, macro=None, past=None, as_of=as_of, model=model)["stress"]
    assert (path.frequency, path.start, path.horizon, path.weight) == (
        model,
        parse_period(as_of, model) + 1,
        0,
        1.0,
    )
    assert path.notes["left out"] == "not declared in the study's macro section: u, hpi"
