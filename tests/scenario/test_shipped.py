"""The scenarios that come with stresskit: they load, resolve, join the demo's history and say what they are for."""

from __future__ import annotations

import math

import numpy as np
import pytest

from stresskit.core.period import parse_period
from stresskit.core.values import AFTERWARDS, GIVEN
from stresskit.macro.features import build_features
from stresskit.scenario.checks import path_findings
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from stresskit.spec.scenario import AddTo, MultiplyBy, PeakAndBack
from tests.macro.world import MONTH, QUARTER, history, section
from tests.shared_inputs import REPOSITORY

NAMES = ("baseline", "deep_recession", "rates_up")
MACRO = section(
    {"unemployment_rate": "percent", "house_price_index": "index", "policy_rate": "percent"},
    {
        "unemployment_change": {"of": "unemployment_rate", "transform": "difference", "over": 4, "lag": 1},
        "house_price_growth": {"of": "house_price_index", "transform": "log_growth", "over": 4, "lag": 1},
        "policy_rate_change": {"of": "policy_rate", "transform": "difference", "over": 4, "lag": 1},
    },
)
#: Ten years that end where the shipped scenarios start: 5.0, 150, 2.5.
QUARTERS = np.arange(40)
PAST = history(
    MACRO,
    "2016Q1",
    unemployment_rate=6.0 - np.cos(QUARTERS / 39 * 4 * math.pi),
    house_price_index=150.0 * 1.005 ** (QUARTERS - 39) * (1 + 0.04 * np.sin((QUARTERS - 39) / 3)),
    policy_rate=2.5 + np.sin(QUARTERS / 39 * 2 * math.pi),
)


@pytest.fixture(scope="module")
def loaded():
    return [load_scenario(REPOSITORY / "scenarios" / f"{name}.yaml") for name in NAMES]


@pytest.fixture(scope="module")
def paths(loaded):
    resolved = resolve(loaded, MACRO, PAST, as_of=parse_period("2025-12", MONTH), model=MONTH, horizon=120)
    return {p.name: p for p in resolved}


def test_names_weights_and_words(loaded, paths):
    assert tuple(paths) == NAMES
    assert [p.weight for p in paths.values()] == [0.6, 0.25, 0.15]
    for path in paths.values():
        assert {"title", "purpose", "origin"} <= set(path.notes)
    kinds = {type(spec) for item in loaded for spec in item.model.paths.values()}
    assert {AddTo, MultiplyBy, PeakAndBack} <= kinds


def test_every_scenario_joins_the_demo_history_without_a_jump(paths):
    last = {"unemployment_rate": 5.0, "house_price_index": 150.0, "policy_rate": 2.5}
    for variable, value in last.items():
        assert PAST.values[variable][-1] == pytest.approx(value)
    for path in paths.values():
        assert path.start == parse_period("2026Q1", QUARTER)
        assert abs(path.values["unemployment_rate"][0] - 5.0) <= 0.8
        assert abs(path.values["house_price_index"][0] / 150.0 - 1.0) <= 0.04
        assert abs(path.values["policy_rate"][0] - 2.5) <= 0.5
    jumps = [s for s in path_findings([paths["baseline"]], PAST) if "jumps" in s]
    assert jumps == []


def test_the_stress_is_what_the_file_says(paths):
    base, deep, rates = (paths[n].values for n in NAMES)
    peak = parse_period("2027Q2", QUARTER) - paths["baseline"].start
    unemployment = deep["unemployment_rate"] - base["unemployment_rate"]
    assert (int(np.argmax(unemployment)), float(unemployment.max())) == (peak, pytest.approx(4.5))
    prices = deep["house_price_index"] / base["house_price_index"] - 1.0
    assert (int(np.argmin(prices)), float(prices.min())) == (peak, pytest.approx(-0.24))
    back = parse_period("2031Q4", QUARTER) - paths["baseline"].start
    assert prices[back:].tolist() == [0.0] * (40 - back)
    assert (deep["policy_rate"] - base["policy_rate"])[:3].tolist() == [-0.5, -1.0, -1.5]
    # zero once the list of thirteen has ended
    assert deep["policy_rate"][13:].tobytes() == base["policy_rate"][13:].tobytes()
    # straight back to the baseline, and with it from there on
    for unemployment in (deep["unemployment_rate"], rates["unemployment_rate"]):
        assert unemployment[19:].tobytes() == base["unemployment_rate"][19:].tobytes()
    assert (rates["policy_rate"] - base["policy_rate"])[5:20].tolist() == [2.5] * 15
    assert rates["policy_rate"].max() == 5.0
    assert rates["policy_rate"][-1] == 3.5
    assert (rates["house_price_index"] / base["house_price_index"])[-1] == pytest.approx(0.90)


def test_every_value_is_possible(paths):
    for path in paths.values():
        assert path.horizon == 40
        for values in path.values.values():
            assert np.isfinite(values).all()
            assert (values > 0).all()
        for variable, flags in path.flags.items():
            # five years; the way back of house prices in the deep recession is stated for one more, on the baseline's rule
            n = 24 if (path.name, variable) == ("deep_recession", "house_price_index") else 20
            assert path.stated[variable] == n
            assert flags.tolist() == [GIVEN] * 20 + [AFTERWARDS] * 20


def test_features_have_a_value_in_every_projected_month(paths):
    start = parse_period("2026-01", MONTH)
    for path in paths.values():
        table = build_features(MACRO, PAST, model=MONTH, start=start, end=start + 119, path=path)
        assert np.isfinite(table.values).all()
