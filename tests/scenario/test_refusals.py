"""Every refusal of scenario text, word for word, with its place."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.core.errors import DataError, UsageError
from stresskit.core.period import parse_period
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from tests.macro.world import MONTH, QUARTER, history, section
from tests.scenario.world import BASELINE, HISTORY, MACRO, refused, resolved, scenario, write

BARE = "scenario: {}\nstarts: 2026Q1\n"


# --- one path


@pytest.mark.parametrize(
    ("u", "message"),
    [
        ("{values: []}", "s1.yaml:4:7: paths.u.values: values is empty; state at least the value of 2026Q1"),
        (
            "{add_to: baseline, values: {}}",
            "s1.yaml:4:25: paths.u.values: values is empty; state at least the value of 2026Q1",
        ),
        (
            "{values: {2026Q2: 1}}",
            "s1.yaml:4:7: paths.u.values: values by period must run without holes from 2026Q1; expected 2026Q1, found 2026Q2",
        ),
        (
            "{values: {2026Q1: 1, 2026Q2: 2, 2026Q4: 3}}",
            "s1.yaml:4:7: paths.u.values: values by period must run without holes from 2026Q1; expected 2026Q3, found 2026Q4",
        ),
        (
            "{values: {2025Q4: 1, 2026Q1: 2}}",
            "s1.yaml:4:7: paths.u.values: values by period must run without holes from 2026Q1; expected 2026Q1, found 2025Q4",
        ),
        (
            "{values: {2026Q1: 1, 2026-02: 2}}",
            "s1.yaml:4:27: paths.u.values.2026-02: '2026-02' names a period that is already stated "
            "(2026-02 lies in 2026Q1: the macro table is quarterly)",
        ),
        (
            "{add_to: baselin, values: [1]}",
            "s1.yaml:4:7: paths.u.add_to: there is no scenario 'baselin'; the study has baseline, stress; did you mean 'baseline'?",
        ),
        (
            "{multiply: xyz, values: [1]}",
            "s1.yaml:4:7: paths.u.multiply: there is no scenario 'xyz'; the study has baseline, stress",
        ),
        ("{add_to: stress, values: [1]}", "s1.yaml:4:3: paths.u: u is defined in a circle: stress -> stress"),
        (
            "{change_from: baseline, peak_points: 1, at: 2025Q3}",
            "s1.yaml:4:46: paths.u.at: the peak in 2025Q3 lies before the first period, 2026Q1",
        ),
        (
            "{change_from: baseline, peak_points: 1, at: 2026Q3, back_by: 2026Q3}",
            "s1.yaml:4:58: paths.u.back_by: back_by 2026Q3 must come after the peak in 2026Q3",
        ),
        (
            "{change_from: baseline, peak_points: 1, at: 2026Q3, back_by: 2026Q1}",
            "s1.yaml:4:58: paths.u.back_by: back_by 2026Q1 must come after the peak in 2026Q3",
        ),
        (
            "{change_from: baseline, peak: 4%, at: 2026Q3}",
            "s1.yaml:4:30: paths.u.peak: u is in percent, where a change by +4% of its value is easily taken for +4 percentage points; "
            "use peak_points (an amount in the variable's unit), or multiply",
        ),
        (
            "{multiply: baseline, values: [1, 1.7e308]}",
            "s1.yaml:4:3: paths.u: u is too large to compute in 2026Q2",
        ),
        (
            "{change_from: baseline, peak_points: 1.7e308, at: 2026Q1}",
            None,  # 1.7e308 + 5 is still a number
        ),
    ],
)
def test_paths(u, message, tmp_path):
    if message is None:
        assert np.isfinite(resolved(tmp_path, BASELINE, scenario(u=u))["stress"].values["u"]).all()
    else:
        assert refused(tmp_path, BASELINE, scenario(u=u)) == message


@pytest.mark.parametrize(
    ("baseline", "shock", "tail", "period"),
    [
        ("[1.7e308]", "{add_to: baseline, values: [1, 1.7e308]}", "", "2026Q2"),
        ("[1.7e308]", "{change_from: baseline, peak_points: 1.7e308, at: 2026Q4}", "", "2026Q1"),
        ("[1]", "{values: [-1.7e308]}", "afterwards: {u: {revert_to: 1.7e308, over: 9}}", "2026Q2"),
    ],
)
def test_numbers_too_large_to_compute(baseline, shock, tail, period, tmp_path):
    texts = [scenario("baseline", u=f"{{values: {baseline}}}"), scenario(u=shock, tail=tail)]
    assert refused(tmp_path, *texts) == f"s1.yaml:4:3: paths.u: u is too large to compute in {period}"


def test_a_shock_on_a_scenario_that_lacks_the_variable(tmp_path):
    text = scenario(tail="  policy: {add_to: baseline, values: [1]}")
    assert refused(tmp_path, BASELINE, text) == (
        "s1.yaml:6:12: paths.policy.add_to: scenario 'baseline' gives no path of 'policy' to start from; "
        "state it there, or give values here"
    )


def test_a_circle_over_several_scenarios_is_named(tmp_path):
    a, b, c = (
        scenario(x, u=f"{{add_to: {y}, values: [1]}}") for x, y in (("a", "b"), ("b", "c"), ("c", "a"))
    )  # fmt: skip
    assert refused(tmp_path, a, b, c) == "s0.yaml:4:3: paths.u: u is defined in a circle: a -> b -> c -> a"
    outside = scenario("outside", u="{add_to: a, values: [1]}")
    assert (
        refused(tmp_path, outside, a, b, c)
        == "s1.yaml:4:3: paths.u: u is defined in a circle: a -> b -> c -> a"
    )


def test_a_circle_through_afterwards(tmp_path):
    baseline = scenario("baseline", u="{add_to: stress, values: [1]}")
    assert refused(tmp_path, baseline, scenario(tail="afterwards: {u: baseline}")) == (
        "s0.yaml:4:3: paths.u: u is defined in a circle: baseline -> stress -> baseline"
    )


def test_a_circle_names_only_the_scenarios_in_it(tmp_path):
    baseline = scenario("baseline", u="{add_to: stress, values: [1]}")
    aside = scenario("aside")
    text = scenario(u="{add_to: aside, values: [1]}", tail="afterwards: {u: baseline}")
    assert refused(tmp_path, text, aside, baseline) == (
        "s0.yaml:4:3: paths.u: u is defined in a circle: stress -> baseline -> stress"
    )


# --- names and inheritance


def test_a_name_used_twice(tmp_path):
    assert refused(tmp_path, BASELINE, BASELINE) == (
        "s1.yaml:1:1: scenario: scenario 'baseline' is there twice; give each its own name"
    )


def test_based_on_a_scenario_that_is_not_there(tmp_path):
    assert refused(tmp_path, BASELINE, BARE.format("stress") + "based_on: base_line\n") == (
        "s1.yaml:3:1: based_on: there is no scenario 'base_line'; the study has baseline, stress; did you mean 'baseline'?"
    )


@pytest.mark.parametrize("macro", [True, False])
def test_based_on_in_a_circle(macro, tmp_path):
    texts = [BARE.format(x) + f"based_on: {y}\n" for x, y in (("a", "b"), ("b", "c"), ("c", "b"))]
    more = {} if macro else {"macro": None, "past": None}
    assert (
        refused(tmp_path, *texts, **more)
        == "s0.yaml:3:1: based_on: based_on goes in a circle: a -> b -> c -> b"
    )
    assert refused(tmp_path, BARE.format("self") + "based_on: self\n", **more) == (
        "s0.yaml:3:1: based_on: based_on goes in a circle: self -> self"
    )


# --- what a study needs


def test_a_variable_that_features_need_is_missing(tmp_path):
    text = BARE.format("stress") + "paths:\n  u: {values: [5]}\n"
    assert refused(tmp_path, text) == (
        "s0.yaml:3:1: paths: scenario 'stress' gives no path of 'hpi', which feature hpi_growth needs; "
        "state it under paths, or name a scenario that states it in based_on"
    )
    text = BARE.format("stress") + "paths:\n  hpi: {values: [5]}\n"
    assert "gives no path of 'u', which features u_change, u_level need; state it" in refused(tmp_path, text)


def test_a_missing_variable_that_looks_like_a_misspelt_one(tmp_path):
    text = BARE.format("stress") + "paths:\n  u: {values: [5]}\n  hp_i: {values: [150]}\n"
    assert refused(tmp_path, text) == (
        "s0.yaml:3:1: paths: scenario 'stress' gives no path of 'hpi' (it states 'hp_i', which the study does not declare), "
        "which feature hpi_growth needs; state it under paths, or name a scenario that states it in based_on"
    )


def test_a_scenario_without_any_path(tmp_path):
    assert refused(tmp_path, BARE.format("stress")).startswith(
        "s0.yaml:1:1: scenario: scenario 'stress' gives no path of 'u'"
    )


@pytest.mark.parametrize("starts", ["2026Q2", "2025Q4", "2026-04", "2027Q1"])
def test_a_scenario_that_starts_in_another_period(starts, tmp_path):
    said = {"2026-04": "2026Q2"}.get(starts, starts)
    stale = "stale vintage: " if starts == "2025Q4" else ""
    assert refused(tmp_path, BASELINE.replace("2026Q1", starts)) == (
        f"s0.yaml:2:1: starts: {stale}scenario 'baseline' starts in {said}, but the first period after as_of 2025-12 is 2026Q1; "
        "restate it from 2026Q1, or move as_of"
    )


@pytest.mark.parametrize(
    ("starts", "said", "expected"), [("2026Q2", "2026Q2", "2026Q1"), ("2026-02", "2026-02", "2026-01")]
)
def test_a_wrong_start_without_a_macro_section(starts, said, expected, tmp_path):
    text = scenario().replace("2026Q1", starts)
    assert refused(tmp_path, text, macro=None, past=None) == (
        f"s0.yaml:2:1: starts: scenario 'stress' starts in {said}, but the first period after as_of 2025-12 is {expected}; "
        f"restate it from {expected}, or move as_of"
    )


@pytest.mark.parametrize("as_of", ["2026-03", "2024-09"])
def test_a_history_that_does_not_reach_as_of(as_of, tmp_path):
    needed = {"2026-03": "2026Q1", "2024-09": "2024Q3"}[as_of]
    assert refused(tmp_path, BASELINE, as_of=as_of, error=DataError) == (
        f"macro history runs from 2024Q4 to 2025Q4; as_of {as_of} needs it up to {needed}: "
        "supply the missing periods, or move as_of"
    )


def test_a_value_that_growth_cannot_take(tmp_path):
    text = scenario(hpi="{values: [150, 20, 0, -5]}")
    assert refused(tmp_path, text) == (
        "s0.yaml:3:1: paths: scenario 'stress': hpi is 0 in 2026Q3, and hpi_growth takes growth of it, which needs values above zero"
    )
    # nothing takes growth of unemployment, and a policy rate may be below zero
    ok = resolved(tmp_path, scenario(u="{values: [0]}", tail="  policy: {values: [-0.5]}"))["stress"]
    assert (ok.values["u"][0], ok.values["policy"][0]) == (0.0, -0.5)


# --- weights


def test_weights_on_some_scenarios_only(tmp_path):
    texts = [scenario("a"), scenario("b", head="weight: 0.5"), scenario("c", head="weight: 0.5")]
    expected = "s0.yaml:1:1: scenario: scenario 'a' has no weight, but 'b' has; give every scenario a weight, or none (or say weighted: false where one stands outside the mean)"
    assert refused(tmp_path, *texts) == expected
    assert refused(tmp_path, *texts, macro=None, past=None) == expected


@pytest.mark.parametrize(
    ("weights", "total"), [((0.6, 0.3), "0.9"), ((0.6, 0.4, 0.00000001), "1.00000001"), ((0.0, 0.0), "0")]
)
def test_weights_that_do_not_sum_to_one(weights, total, tmp_path):
    texts = [scenario(f"s{i}", head=f"weight: {w:.10f}") for i, w in enumerate(weights)]
    listed = ", ".join(f"s{i} {w:g}" for i, w in enumerate(weights))
    assert refused(tmp_path, *texts) == (
        f"s{len(weights) - 1}.yaml:3:1: weight: the scenarios' weights sum to {total}, not 1: {listed}"
    )


def test_weights_may_miss_one_by_rounding(tmp_path):
    texts = [scenario(f"s{i}", head="weight: 0.3333333333") for i in range(3)]
    assert len(resolved(tmp_path, *texts)) == 3


# --- afterwards


@pytest.mark.parametrize(
    ("texts", "message"),
    [
        (
            [scenario(tail="afterwards: {u: baseline}")],
            "s0.yaml:6:14: afterwards.u: baseline means the scenario called 'baseline', and the study has none (it has stress); "
            "add it, or use hold, revert_to or back_to",
        ),
        (
            [scenario("baseline", tail="afterwards: baseline")],
            "s0.yaml:6:1: afterwards: the scenario 'baseline' cannot return to itself; use hold or revert_to",
        ),
        (
            [BASELINE, scenario(tail="  policy: {values: [2]}\nafterwards: {policy: baseline}")],
            "s1.yaml:7:14: afterwards.policy: scenario 'baseline' gives no path of 'policy' to start from; "
            "state it there, or give values here",
        ),
        (
            [scenario(tail="afterwards: {hp: hold}")],
            "s0.yaml:6:14: afterwards.hp: there is no variable 'hp'; there are u, hpi, policy; did you mean 'hpi'?",
        ),
        (
            [scenario(tail="afterwards: {revert_to: long_run_mean, over: 8}")],
            "s0.yaml:6:1: afterwards: hpi is an index, and the mean of an index over history is no level to return to; "
            "give one rule per variable, for this one {grow_by: long_run_mean}, hold, baseline or a number",
        ),
        (
            [scenario(tail="afterwards:\n  hpi: {revert_to: long_run_mean, over: 8}")],
            "s0.yaml:7:3: afterwards.hpi: hpi is an index, and the mean of an index over history is no level to return to; "
            "give one rule per variable, for this one {grow_by: long_run_mean}, hold, baseline or a number",
        ),
    ],
)
def test_afterwards(texts, message, tmp_path):
    assert refused(tmp_path, *texts) == message


@pytest.mark.parametrize("horizon", [3, 60])
def test_a_rule_is_checked_whether_the_horizon_reaches_it_or_not(horizon, tmp_path):
    assert "cannot return to itself" in refused(
        tmp_path, scenario("baseline", tail="afterwards: baseline"), horizon=horizon
    )
    assert "is an index" in refused(
        tmp_path, scenario(tail="afterwards: {revert_to: long_run_mean, over: 8}"), horizon=horizon
    )


def test_a_mean_of_nothing(tmp_path):
    late = history(MACRO, "2025Q3", u=[5, 5, 5], hpi=[150, 150, 150], policy=[np.nan, np.nan, 2.5])
    text = scenario(tail="  policy: {values: [2]}\nafterwards: {policy: {revert_to: long_run_mean, over: 8}}")
    assert refused(tmp_path, text, past=late) == (
        "s0.yaml:7:14: afterwards.policy: policy has no observed value up to as_of to take a mean of"
    )


# --- calls


def test_calls_that_make_no_sense(tmp_path):
    loaded = [load_scenario(write(tmp_path, "s", BASELINE))]
    as_of = parse_period("2025-12", MONTH)
    with pytest.raises(UsageError, match="a projection needs at least one period, not 0"):
        resolve(loaded, MACRO, HISTORY, as_of=as_of, model=MONTH, horizon=0)
    for macro, past in ((MACRO, None), (None, HISTORY)):
        with pytest.raises(
            UsageError, match="scenarios need both the macro section and its history, or neither"
        ):
            resolve(loaded, macro, past, as_of=as_of, model=MONTH, horizon=5)
    monthly = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(monthly, "2025-11", MONTH, u=[5.0, 5.0])
    with pytest.raises(DataError, match="the macro table is monthly and the study is quarterly"):
        resolve(loaded, monthly, past, as_of=as_of // 3, model=QUARTER, horizon=5)
