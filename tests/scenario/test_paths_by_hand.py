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


def test_the_flags_of_a_shock_are_those_of_what_it_changes(tmp_path):
    """Baseline is stated for four quarters; the shock's own six quarters do not make its fifth a stated one."""
    long = scenario(
        u="{add_to: baseline, values: [1, 1, 1, 1, 1, 1]}", tail="afterwards: {u: {revert_to: 9, over: 1}}"
    )
    path = resolved(tmp_path, BASELINE, long)["stress"]
    assert path.flags["u"].tolist() == [0, 0, 0, 0, 2, 2, 2, 2]
    # baseline + 1 for all six quarters that the shock states, its own afterwards only then
    np.testing.assert_allclose(path.values["u"], [6.0, 6.1, 6.2, 6.3, 6.3, 6.3, 9.0, 9.0])


def test_a_way_back_longer_than_the_baseline_is_finished_before_afterwards(tmp_path):
    text = scenario(
        u="{change_from: baseline, peak_points: 6, at: 2026Q2, back_by: 2027Q2}",
        tail="afterwards: {u: {revert_to: 8, over: 2}}",
    )
    path = resolved(tmp_path, BASELINE, text)["stress"]
    np.testing.assert_allclose(path.values["u"], [8.0, 11.1, 9.7, 8.3, 6.8, 5.3, 6.65, 8.0])


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
