"""Growth paths, units, half-lives, reach, hold and what comes afterwards: every expected number worked out by hand.

History of the world (tests/scenario/world.py), 2024Q4 to 2025Q4: u 4.0 5.0 5.5 5.3 5.2 (mean 5.0), hpi 140 142 145 147 150.
Baseline: u 5.0 5.1 5.2 5.3, hpi 151 152 153 154, both held. Eight quarters are projected.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.values import AFTERWARDS, GIVEN
from stresskit.scenario.shapes import grown
from stresskit.scenario.units import RateChange
from tests.macro.world import MONTH, history, section
from tests.scenario.world import BASELINE, refused, resolved, scenario

#: 1.04 to the power 1/4, by two square roots on a pocket calculator.
QUARTER_OF_4 = 1.009853406548


def stress(tmp_path, **paths):
    return resolved(tmp_path, BASELINE, scenario(**paths))["stress"]


def near(found, expected, rtol=1e-12):
    np.testing.assert_allclose(found, expected, rtol=rtol)


# --- growth on history's last value


def test_growth_per_period(tmp_path):
    path = stress(tmp_path, hpi="{growth: [1%, 2%, -3%], rate: per_period}")
    near(path.values["hpi"], [151.5, 154.53, *[149.8941] * 6])
    assert path.flags["hpi"].tolist() == [GIVEN] * 3 + [AFTERWARDS] * 5


def test_four_percent_annualised_is_its_fourth_root_per_quarter(tmp_path):
    path = stress(tmp_path, hpi="{growth: [4%, 4%, 4%, 4%, -8%], rate: annualised}")
    near(path.values["hpi"][0], 150 * QUARTER_OF_4, rtol=1e-11)
    near(path.values["hpi"][3], 156.0)  # four quarters of 4 % a year make 4 %
    near(path.values["hpi"][4], 156.0 * math.sqrt(math.sqrt(0.92)))


def test_year_on_year_growth_builds_on_the_same_quarter_of_the_year_before(tmp_path):
    path = stress(tmp_path, hpi="{growth: [4%, 3%, 2%, 1%, 10%], rate: year_on_year}")
    near(path.values["hpi"][:5], [142 * 1.04, 145 * 1.03, 147 * 1.02, 151.5, 142 * 1.04 * 1.10])
    assert path.values["hpi"][5:].tolist() == [path.values["hpi"][4]] * 3


def test_growth_by_label_and_a_rule_afterwards(tmp_path):
    text = scenario(
        hpi="{growth: {2026Q1: 2%, 2026Q2: -2%}, rate: per_period}",
        tail="afterwards: {hpi: {revert_to: 140, over: 2}}",
    )
    path = resolved(tmp_path, text)["stress"]
    near(path.values["hpi"], [153, 149.94, 144.97, *[140] * 5])


def test_growth_in_a_monthly_calendar_takes_twelfth_roots(tmp_path):
    macro = section({"hpi": "index"}, {"f": {"of": "hpi"}})
    past = history(macro, "2025-01", MONTH, hpi=[100.0] * 12)
    text = "scenario: s\nstarts: 2026-01\npaths:\n  hpi: {growth: [12%, 12%], rate: annualised}"
    path = resolved(tmp_path, text, macro=macro, past=past, horizon=3)["s"]
    near(path.values["hpi"], [100 * 1.12 ** (1 / 12), 100 * 1.12 ** (1 / 6), 100 * 1.12 ** (1 / 6)])


# --- growth on another scenario


def test_growth_on_another_scenario_is_the_distance_to_it(tmp_path):
    path = stress(tmp_path, hpi="{growth: [-2%, -2%], rate: per_period, on: baseline}")
    near(path.values["hpi"], [151 * 0.98, 152 * 0.9604, 153 * 0.9604, *[154 * 0.9604] * 5])
    # the baseline is stated for four quarters
    assert path.flags["hpi"].tolist() == [GIVEN] * 4 + [AFTERWARDS] * 4


def test_annualised_and_yearly_growth_on_another_scenario(tmp_path):
    path = stress(tmp_path, hpi="{growth: [4%], rate: annualised, on: baseline}")
    near(path.values["hpi"][:2], [151 * QUARTER_OF_4, 152 * QUARTER_OF_4], rtol=1e-11)
    path = stress(tmp_path, hpi="{growth: [-2%, -2%, -2%, -2%, -2%], rate: year_on_year, on: baseline}")
    near(path.values["hpi"], [151 * 0.98, 152 * 0.98, 153 * 0.98, 154 * 0.98, *[154 * 0.9604] * 4])


def test_no_growth_on_another_scenario_is_the_other_scenario_to_the_bit(tmp_path):
    both = resolved(tmp_path, BASELINE, scenario(hpi="{growth: [0%, 0%], rate: annualised, on: baseline}"))
    assert both["stress"].values["hpi"].tobytes() == both["baseline"].values["hpi"].tobytes()


rates = st.lists(st.floats(-0.3, 0.3).map(lambda x: round(x, 4)), min_size=1, max_size=9)


@settings(max_examples=60, deadline=None)
@given(rates=rates, kind=st.sampled_from(["per_period", "annualised", "year_on_year"]))
def test_levels_give_back_the_rates_they_were_made_of(rates, kind):
    """By another route: growth is read off the levels as a statistical office publishes it."""
    before = np.array([97.0, 99.0, 98.0, 100.0])
    levels = np.concatenate([before, grown(np.array(rates), kind, before, len(rates))])
    for k, rate in enumerate(rates, start=4):
        quarter = levels[k] / levels[k - 1]
        read = {
            "per_period": quarter - 1,
            "annualised": quarter**4 - 1,
            "year_on_year": levels[k] / levels[k - 4] - 1,
        }
        assert read[kind] == pytest.approx(rate, abs=1e-12)


# --- other units


@pytest.mark.parametrize(
    ("path", "expected"),
    [
        ("{values: [0.06, 0.075], unit: fraction}", [6.0, 7.5]),
        ("{values: [6, 7.5], unit: percent}", [6.0, 7.5]),
        ("{add_to: baseline, values: [0.01, 0.02], unit: fraction}", [6.0, 7.1]),
        ("{change_from: baseline, peak_points: 0.04, at: 2026Q2, unit: fraction}", [7.0, 9.1]),
        ("{reach: 0.072, at: 2026Q2, unit: fraction}", [6.2, 7.2]),
    ],
)
def test_fractions_for_a_variable_in_percent(path, expected, tmp_path):
    near(stress(tmp_path, u=path).values["u"][:2], expected)


def test_percent_for_a_variable_in_fractions(tmp_path):
    macro = section({"u": "fraction"}, {"f": {"of": "u"}})
    past = history(macro, "2025Q4", u=[0.05])
    text = "scenario: s\nstarts: 2026Q1\npaths:\n  u: {values: [6.25], unit: percent}\n"
    text += "afterwards: {u: {revert_to: 5, unit: percent, over: 1}}"
    assert resolved(tmp_path, text, macro=macro, past=past)["s"].values["u"].tolist() == [0.0625, *[0.05] * 7]


def rate_world(rate, values):
    macro = section({"gdp": {"unit": "percent", "place": "step", "rate": rate}}, {"f": {"of": "gdp"}})
    return {"macro": macro, "past": history(macro, "2025Q2", gdp=values)}


def gdp(tmp_path, path, **world):
    text = f"scenario: s\nstarts: 2026Q1\npaths:\n  gdp: {path}\n"
    return resolved(tmp_path, text, **world)["s"].values["gdp"]


def test_annualised_values_for_a_quarterly_growth_rate(tmp_path):
    found = gdp(tmp_path, "{values: [4, -3], rate: annualised}", **rate_world("per_period", [1.0, 1.0, 1.0]))
    near(found[0], 100 * (QUARTER_OF_4 - 1), rtol=1e-9)  # 0.985 %
    near(found[1], 100 * (math.sqrt(math.sqrt(0.97)) - 1))


def test_quarterly_values_for_an_annualised_growth_rate(tmp_path):
    found = gdp(tmp_path, "{values: [1, -1], rate: per_period}", **rate_world("annualised", [1.0, 1.0, 1.0]))
    near(found[:2], [4.060401, 100 * (0.99**4 - 1)])  # 1.01^4 = 1.04060401


def test_year_on_year_values_need_the_three_quarters_before(tmp_path):
    world = rate_world("per_period", [1.0, 2.0, 1.0])
    found = gdp(tmp_path, "{values: [5, 4], rate: year_on_year}", **world)
    first = 1.05 / (1.01 * 1.02 * 1.01)
    near(found[:2], [100 * (first - 1), 100 * (1.04 / (1.02 * 1.01 * first) - 1)])
    same = gdp(
        tmp_path,
        "{values: [5, 4], rate: year_on_year}",
        **rate_world("annualised", [4.060401, 8.243216, 4.060401]),
    )
    near(
        same[:2], [100 * (first**4 - 1), 100 * ((1 + found[1] / 100) ** 4 - 1)]
    )  # the same history, annualised


def test_rates_that_cannot_be_converted(tmp_path):
    def said(rate, path, values=(1.0, 1.0, 1.0)):
        text = f"scenario: s\nstarts: 2026Q1\npaths:\n  gdp: {path}\n"
        return refused(tmp_path, text, **rate_world(rate, list(values)))

    assert said("year_on_year", "{values: [4], rate: annualised}") == (
        "s0.yaml:4:22: paths.gdp.rate: gdp is a year_on_year rate, and annualised rates tell it only together with the growth of "
        "each period of the year before, which history does not hold; give year_on_year values"
    )
    assert said("per_period", "{values: [4], rate: year_on_year}", [np.nan, 1.0, 1.0]) == (
        "s0.yaml:4:22: paths.gdp.rate: to tell per_period growth from year_on_year values the last 3 observed values of gdp are "
        "needed; history has 2"
    )
    assert said("per_period", "{values: [-100], rate: annualised}") == (
        "s0.yaml:4:25: paths.gdp.rate: a fall by 100% or more cannot be converted to another kind of rate"
    )


@settings(max_examples=60, deadline=None)
@given(values=st.lists(st.floats(-20, 20).map(lambda x: round(x, 3)), min_size=1, max_size=8))
def test_year_on_year_there_and_back(values):
    """By another route: levels of the converted rates give the stated growth over four quarters."""
    past = np.array([0.5, -1.0, 2.0])
    found = RateChange("year_on_year", "per_period", 100.0, 4).apply(np.array(values), past)
    levels = np.cumprod(np.concatenate([[1.0], 1 + np.concatenate([past, found]) / 100]))
    np.testing.assert_allclose(100 * (levels[4:] / levels[:-4] - 1), values, atol=1e-10)


# --- peaks, hold, reach


def test_a_peak_that_comes_back_by_half_life(tmp_path):
    path = stress(tmp_path, hpi="{change_from: baseline, peak: -20%, at: 2026Q2, half_life: 2}")
    share = [0.5, 1, 0.5**0.5, 0.5, 0.5**1.5, 0.25, 0.5**2.5, 0.125]
    base = np.array([151, 152, 153, 154, 154, 154, 154, 154])
    near(path.values["hpi"], base * (1 - 0.2 * np.array(share)))


@pytest.mark.parametrize(("half_life", "stated"), [("0.5", 2 + 4), ("1", 2 + 7), ("1.5", 2 + 10)])
def test_a_half_life_counts_as_stated_until_a_hundredth_is_left(half_life, stated, tmp_path):
    """log2(100) = 6.644 half-lives after the peak in row 1, rounded up; the baseline under it is given for four quarters."""
    text = scenario(u=f"{{change_from: baseline, peak_points: 2, at: 2026Q2, half_life: {half_life}}}")
    path = resolved(tmp_path, BASELINE, text, horizon=48)["stress"]
    assert path.stated["u"] == stated
    assert path.flags["u"].tolist() == [GIVEN] * 4 + [AFTERWARDS] * 12


def test_a_peak_as_a_factor_is_allowed_for_a_variable_in_percent(tmp_path):
    path = stress(tmp_path, u="{change_from: baseline, peak_factor: 1.5, at: 2026Q2, back_by: 2026Q4}")
    near(path.values["u"][:5], [5.0 * 1.25, 5.1 * 1.5, 5.2 * 1.25, 5.3, 5.3])
    percent = stress(tmp_path, hpi="{change_from: baseline, peak: -25%, at: 2026Q2}")
    factor = stress(tmp_path, hpi="{change_from: baseline, peak_factor: 0.75, at: 2026Q2}")
    assert percent.values["hpi"].tobytes() == factor.values["hpi"].tobytes()


def test_hold_at_the_last_observed_value(tmp_path):
    text = scenario(u="{hold: history, until: 2026Q3}", tail="afterwards: {u: {revert_to: 6.2, over: 2}}")
    path = resolved(tmp_path, text)["stress"]
    near(path.values["u"], [5.2, 5.2, 5.2, 5.7, 6.2, 6.2, 6.2, 6.2])
    assert path.flags["u"].tolist() == [GIVEN] * 3 + [AFTERWARDS] * 5


def test_reach_a_level_straight_from_history(tmp_path):
    path = stress(tmp_path, u="{reach: 9.2, at: 2026Q4}")
    near(path.values["u"], [6.2, 7.2, 8.2, 9.2, 9.2, 9.2, 9.2, 9.2])
    assert path.flags["u"].tolist() == [GIVEN] * 4 + [AFTERWARDS] * 4
    # the same values when the horizon ends before the level is reached
    short = resolved(tmp_path, scenario(u="{reach: 9.2, at: 2026Q4}"), horizon=6)["stress"]
    assert short.values["u"].tolist() == path.values["u"][:2].tolist()


def test_reach_a_level_and_back_to_another_scenario(tmp_path):
    """The gap to the baseline is 9.2 - 5.1 = 4.1 in 2026Q2 and closes in three quarters."""
    text = scenario(u="{reach: 9.2, at: 2026Q2, back_to: baseline, back_by: 2027Q1}")
    path = resolved(tmp_path, BASELINE, text)["stress"]
    near(path.values["u"], [7.2, 9.2, 5.2 + 4.1 * 2 / 3, 5.3 + 4.1 / 3, 5.3, 5.3, 5.3, 5.3])
    assert path.flags["u"].tolist() == [GIVEN] * 4 + [AFTERWARDS] * 4
    late = scenario(u="{reach: 9.2, at: 2027Q2, back_to: baseline, back_by: 2027Q4}")
    # up to the level it rests on the level and history alone, on the way back on what the baseline's rule holds
    assert resolved(tmp_path, BASELINE, late)["stress"].flags["u"].tolist() == [GIVEN] * 6 + [AFTERWARDS] * 2
    for horizon in (1, 3, 6, 7):
        short = resolved(tmp_path, BASELINE, text, horizon=horizon)["stress"].values["u"]
        assert short.tolist() == path.values["u"][: short.size].tolist()


# --- afterwards


def after(tmp_path, rule, **paths):
    name = "hpi" if "hpi" in paths else "u"
    text = scenario(tail=f"afterwards: {{{name}: {rule}}}", **paths)
    return resolved(tmp_path, BASELINE, text)["stress"]


def test_reverting_by_half_life(tmp_path):
    path = after(tmp_path, "{revert_to: 5, half_life: 2}", u="{values: [7]}")
    near(path.values["u"], [7, *(5 + 2 * 0.5 ** (k / 2) for k in range(1, 8))])
    assert path.values["u"][2] == 6.0
    mean = after(tmp_path, "{revert_to: long_run_mean, half_life: 1}", u="{values: [7]}")
    near(mean.values["u"][:4], [7, 6, 5.5, 5.25])
    assert path.flags["u"].tolist() == [GIVEN] + [AFTERWARDS] * 7


def test_an_index_grows_on(tmp_path):
    path = after(tmp_path, "{grow_by: 4%}", hpi="{values: [150, 160]}")
    near(path.values["hpi"][2], 160 * QUARTER_OF_4, rtol=1e-11)
    near(path.values["hpi"][5], 166.4)  # a year after the last stated value
    assert path.flags["hpi"].tolist() == [GIVEN] * 2 + [AFTERWARDS] * 6


def test_an_index_grows_on_as_in_history(tmp_path):
    """140 to 150 in four quarters: 7.142857 % a year."""
    path = after(tmp_path, "{grow_by: long_run_mean}", hpi="{values: [140]}")
    near(path.values["hpi"][4], 150.0)
    near(path.values["hpi"][1] / path.values["hpi"][0], (15 / 14) ** 0.25)


def test_long_run_growth_needs_two_values_above_zero(tmp_path):
    macro = section({"x": "level"}, {"f": {"of": "x"}})
    past = history(macro, "2025Q3", x=[-1.0, 5.0])
    text = "scenario: s\nstarts: 2026Q1\npaths:\n  x: {values: [5]}\nafterwards: {grow_by: long_run_mean}\n"
    assert refused(tmp_path, text, macro=macro, past=past) == (
        "s0.yaml:5:1: afterwards: the mean growth of x needs two observed values above zero, the first and the last"
    )
    assert refused(tmp_path, text.replace("[5]", "[-5]"), macro=macro, past=past) == (
        "s0.yaml:5:1: afterwards: x is -5 where grow_by takes over, and growth needs a value above zero"
    )


def test_back_to_another_scenario(tmp_path):
    mild = scenario("mild", u="{values: [6, 6, 6, 6, 6, 6, 6, 8]}")
    text = scenario(u="{values: [9, 10]}", tail="afterwards: {u: {back_to: mild, over: 4}}")
    path = resolved(tmp_path, mild, text)["stress"]
    near(path.values["u"], [9, 10, 9, 8, 7, 6, 6, 8])  # a gap of 4 closes by one a quarter
    at_once = resolved(tmp_path, mild, text.replace(", over: 4", ""))["stress"]
    assert at_once.values["u"].tolist() == [9, 10, 6, 6, 6, 6, 6, 8]
    halved = resolved(tmp_path, mild, text.replace("over: 4", "half_life: 1"))["stress"]
    near(halved.values["u"], [9, 10, 8, 7, 6.5, 6.25, 6.125, 8.0625])


def test_back_to_baseline_at_once_is_the_rule_baseline(tmp_path):
    one = after(tmp_path, "baseline", u="{values: [9, 10]}")
    other = after(tmp_path, "{back_to: baseline}", u="{values: [9, 10]}")
    assert one.values["u"].tobytes() == other.values["u"].tobytes()


def test_an_inherited_back_to_cannot_name_the_heir(tmp_path):
    parent = scenario("parent", u="{values: [6]}", tail="afterwards: {u: {back_to: heir}}")
    heir = "scenario: heir\nbased_on: parent\nstarts: 2026Q1\n"
    assert refused(tmp_path, parent, heir) == (
        "s0.yaml:6:18: afterwards.u.back_to: the scenario 'heir' cannot return to itself; name another one"
    )


# --- weights and free fields


def test_a_scenario_outside_the_mean_needs_no_weight(tmp_path):
    texts = [
        scenario("a", head="weight: 0.4"),
        scenario("b", head="weight: 0.6"),
        scenario("c", head="weighted: false"),
    ]
    assert [p.weight for p in resolved(tmp_path, *texts).values()] == [0.4, 0.6, None]
    assert resolved(tmp_path, texts[2])["c"].notes["weighting"] == "outside the mean"


def test_free_fields_come_with_the_path(tmp_path):
    head = "title: Hard times\nseverity: severe\nauthor_role: scenario committee\napproved_on: 2025-11-28\nnotes: {origin: invented}"
    notes = resolved(tmp_path, scenario(head=head))["stress"].notes
    assert list(notes.items()) == [
        ("title", "Hard times"), ("severity", "severe"), ("author role", "scenario committee"),
        ("approved on", "2025-11-28"), ("origin", "invented"),
    ]  # fmt: skip
