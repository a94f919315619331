"""missing: conditional in scenario text: what is filled, from what, until when, and what is refused."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import TextError
from stresskit.core.period import Frequency
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, MacroHistory, ScenarioPath
from stresskit.demo.bank import demo_economy
from stresskit.macro.var import VarModel, forecast_mean
from stresskit.macro.var_fit import fit_var
from stresskit.scenario.completion import fill
from stresskit.scenario.plausibility import assess_paths
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario, load_study
from tests.macro.var_world import QUARTER, draw, make_var
from tests.macro.world import history, section
from tests.scenario.world import write
from tests.shared_inputs import REPOSITORY

MACRO = section(
    {"u": "percent", "hpi": "index", "rate": "percent", "oil": "level"},
    {"u_change": {"of": "u", "transform": "difference"}, "hpi_growth": {"of": "hpi", "transform": "growth"}},
)
Z = draw(np.random.default_rng(4), 120)
PAST = history(
    MACRO,
    "1996Q1",
    u=list(5.0 + 0.25 * Z[:, 0]),
    hpi=list(100 * np.exp(0.01 * np.cumsum(Z[:, 1]))),
    rate=list(1.0 + 0.1 * np.cumsum(Z[:, 2] - Z[:, 2].mean())),
    oil=list(50.0 + Z[:, 0]),
)
SPEC = make_var(
    variables={"u": "level", "hpi": "log_difference", "rate": "difference"}, lags=1, floors={"rate": 0.0}
)
VAR = fit_var(SPEC, PAST, end=PAST.end)


def resolved(
    folder: Path, *texts: str, var: VarModel | None = VAR, horizon: int = 40, past: MacroHistory = PAST
) -> Mapping[str, ScenarioPath]:
    loaded = [load_scenario(write(folder, f"s{i}", text)) for i, text in enumerate(texts)]
    paths = resolve(loaded, MACRO, past, as_of=past.end, model=QUARTER, horizon=horizon, var=var)
    return {p.name: p for p in paths}


def refused(folder: Path, *texts: str, **more: Any) -> str:
    with pytest.raises(TextError) as caught:
        resolved(folder, *texts, **more)
    return str(caught.value).replace(f"{folder}/", "")


def stress(
    paths: str = "u: {values: [5.5, 6.0, 6.5, 6.5, 6.0]}", tail: str = "", name: str = "stress"
) -> str:
    return "\n".join(
        [
            f"scenario: {name}",
            "starts: 2026Q1",
            "missing: conditional",
            "paths:",
            f"  {paths}",
            *tail.splitlines(),
        ]
    )


U = np.array([5.5, 6.0, 6.5, 6.5, 6.0])


def test_left_out_variables_are_filled_and_every_value_says_how_it_came(tmp_path: Path) -> None:
    path = resolved(tmp_path, stress())["stress"]
    assert list(path.values) == ["u", "hpi", "rate"]  # oil is not in the VAR and no feature reads it
    expected = fill(VAR, {"u": U})
    for v in ("hpi", "rate"):
        np.testing.assert_array_equal(path.values[v][:5], expected[v].values)
        assert list(path.flags[v]) == [FILLED] * 5 + [AFTERWARDS] * 35
        assert (path.values[v][5:] == path.values[v][4]).all()
    np.testing.assert_array_equal(path.values["u"][:5], U)
    assert list(path.flags["u"]) == [GIVEN] * 5 + [AFTERWARDS] * 35


def test_afterwards_rules_hold_after_the_last_stated_period(tmp_path: Path) -> None:
    tail = "afterwards: {rate: {revert_to: 3.0, over: 4}, u: hold}"
    path = resolved(tmp_path, stress(tail=tail))["stress"]
    last = path.values["rate"][4]
    np.testing.assert_allclose(
        path.values["rate"][5:9], last + (3.0 - last) * np.array([0.25, 0.5, 0.75, 1.0])
    )
    assert (path.values["rate"][9:] == 3.0).all()


def test_a_shorter_variable_is_a_condition_as_far_as_it_is_stated(tmp_path: Path) -> None:
    path = resolved(tmp_path, stress("u: {values: [5.5, 6.0, 6.5, 6.5, 6.0]}\n  hpi: {values: [120, 118]}"))[
        "stress"
    ]
    expected = fill(VAR, {"u": U, "hpi": np.array([120.0, 118.0])})
    assert set(expected) == {"rate"}
    np.testing.assert_array_equal(path.values["rate"][:5], expected["rate"].values)
    assert list(path.flags["hpi"][:4]) == [GIVEN, GIVEN, AFTERWARDS, AFTERWARDS]
    held = fill(VAR, {"u": U, "hpi": np.array([120.0, 118.0, 118.0, 118.0, 118.0])})
    assert not np.allclose(held["rate"].values, expected["rate"].values)


def test_values_below_a_floor_are_put_there(tmp_path: Path) -> None:
    low = stress("u: {values: [1, 1, 1, 1]}\n  hpi: {values: [80, 100, 110, 120]}")
    path = resolved(tmp_path, low)["stress"]
    given = {"u": np.full(4, 1.0), "hpi": np.array([80.0, 100.0, 110.0, 120.0])}
    with_floor = fill(VAR, given)["rate"]
    free = fill(fit_var(SPEC.model_copy(update={"floors": {}}), PAST, end=PAST.end), given)["rate"]
    assert (free.values < 0).any()
    np.testing.assert_array_equal(with_floor.at_floor, free.values < 0)
    np.testing.assert_array_equal(with_floor.values, np.maximum(free.values, 0.0))
    assert (with_floor.low >= 0).all()
    np.testing.assert_array_equal(path.values["rate"][:4], with_floor.values)


def test_with_everything_stated_nothing_is_filled(tmp_path: Path) -> None:
    text = stress("u: {values: [5.5]}\n  hpi: {values: [120]}\n  rate: {values: [1.5]}")
    asked = resolved(tmp_path, text)["stress"]
    plain = resolved(tmp_path, text.replace("missing: conditional", "missing: error"), var=None)["stress"]
    for v in ("u", "hpi", "rate"):
        assert np.array_equal(asked.values[v], plain.values[v])
        assert np.array_equal(asked.flags[v], plain.flags[v])


def test_the_request_is_inherited_and_what_is_filled_follows_ones_own_statements(tmp_path: Path) -> None:
    child = "scenario: worse\nbased_on: stress\nstarts: 2026Q1\npaths:\n  u: {add_to: stress, values: [1.0], then: hold}"
    paths = resolved(tmp_path, stress(), child, horizon=8)
    worse = paths["worse"]
    np.testing.assert_array_equal(
        worse.values["hpi"], fill(VAR, {"u": worse.values["u"][:5]})["hpi"].values[[0, 1, 2, 3, 4, 4, 4, 4]]
    )
    assert not np.allclose(worse.values["hpi"][:5], paths["stress"].values["hpi"][:5])
    other = child.replace("paths:", "missing: error\npaths:")
    assert "gives no path of 'hpi'" in refused(tmp_path, stress(), other)


def test_a_shock_on_a_filled_path(tmp_path: Path) -> None:
    child = "scenario: dearer\nbased_on: stress\nstarts: 2026Q1\npaths:\n  hpi: {multiply: stress, values: [1.0, 0.9], then: hold}"
    paths = resolved(tmp_path, stress(), child, horizon=8)
    filled, shocked = paths["stress"], paths["dearer"]
    np.testing.assert_allclose(shocked.values["hpi"], filled.values["hpi"] * np.array([1.0] + [0.9] * 7))
    assert list(shocked.flags["hpi"]) == [FILLED] * 5 + [AFTERWARDS] * 3
    # what it says of hpi is no forecast of the VAR any more: it is judged, and has no band
    assert shocked.stated == {"u": 5, "hpi": 5, "rate": 0}
    judged = assess_paths(VAR, [shocked])[0]
    assert judged.whole.distance.dof == 10
    assert set(judged.filled) == {"rate"}
    assert list(shocked.flags["rate"])[:5] == [FILLED] * 5


#: One statement per kind of path, and what it makes of the level in quarters 1 to 5 (history ends in HPI, U).
KINDS = {
    "hpi: {growth: [-4%, -4%, -2%], rate: per_period}": (
        "hpi",
        lambda h, u: h * np.cumprod([0.96, 0.96, 0.98]),
    ),
    "u: {hold: history, until: 2026Q3}": ("u", lambda h, u: np.full(3, u)),
    "u: {reach: 8.0, at: 2026Q4}": ("u", lambda h, u: u + (8.0 - u) * np.array([0.25, 0.5, 0.75, 1.0])),
}


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_path_is_a_condition_up_to_its_end(kind: str, tmp_path: Path) -> None:
    variable, by_hand = KINDS[kind]
    path = resolved(tmp_path, stress(kind))["stress"]
    stated = by_hand(PAST.values["hpi"][-1], PAST.values["u"][-1])
    n = stated.size
    np.testing.assert_allclose(path.values[variable][:n], stated, rtol=1e-13)
    assert path.stated[variable] == n
    for v, filled in fill(VAR, {variable: path.values[variable][:n]}).items():
        np.testing.assert_array_equal(path.values[v][:n], filled.values)
        assert list(path.flags[v]) == [FILLED] * n + [AFTERWARDS] * (40 - n)


@pytest.mark.parametrize(
    ("statement", "rows"),
    [
        ("hpi: {growth: [-3%, -3%], rate: per_period, on: stress}", 5),
        ("hpi: {change_from: stress, peak: -20%, at: 2026Q2, half_life: 0.5}", 6),
        ("hpi: {change_from: stress, peak: -20%, at: 2026Q2, back_by: 2026Q4}", 5),
        ("rate: {reach: 3.0, at: 2026Q2, back_to: stress, back_by: 2026Q4}", 5),
    ],
)
def test_a_change_to_a_filled_path_is_a_condition_for_the_rest(
    statement: str, rows: int, tmp_path: Path
) -> None:
    """Filled anew are the variables that nobody states, given u and what is said of the filled one."""
    child = f"scenario: child\nbased_on: stress\nstarts: 2026Q1\npaths:\n  {statement}"
    paths = resolved(tmp_path, stress(), child)
    child_path, variable = paths["child"], statement.split(":")[0]
    other = {"hpi": "rate", "rate": "hpi"}[variable]
    assert child_path.stated == {"u": 5, variable: rows, other: 0}
    given = {"u": U, variable: child_path.values[variable][:rows]}
    np.testing.assert_array_equal(child_path.values[other][:rows], fill(VAR, given)[other].values)
    # nothing is better than what it rests on: stress is filled for five quarters
    early = GIVEN if "reach" in statement else FILLED
    assert list(child_path.flags[variable]) == [early] * 2 + [FILLED] * 3 + [AFTERWARDS] * 35
    assert list(child_path.flags[other]) == [FILLED] * 5 + [AFTERWARDS] * 35
    judged = assess_paths(VAR, [child_path])[0]
    assert judged.whole.distance.dof == 5 + rows
    assert set(judged.filled) == {other}


def test_a_change_stated_beyond_its_base_is_a_condition_and_what_is_filled_there_is_afterwards(
    tmp_path: Path,
) -> None:
    base = "scenario: baseline\nstarts: 2026Q1\npaths:\n  u: {values: [5.0, 5.0]}\n  hpi: {values: [100, 100]}\n  rate: {values: [1, 1]}"
    text = stress("u: {change_from: baseline, peak_points: 3, at: 2026Q4, back_by: 2027Q2}")
    path = resolved(tmp_path, base, text)["stress"]
    u = np.array([5.75, 6.5, 7.25, 8.0, 6.5, 5.0])
    np.testing.assert_allclose(path.values["u"][:6], u)
    assert list(path.flags["u"]) == [GIVEN] * 2 + [AFTERWARDS] * 38
    np.testing.assert_array_equal(
        path.values["hpi"][:6], fill(VAR, {"u": path.values["u"][:6]})["hpi"].values
    )
    assert list(path.flags["hpi"]) == [FILLED] * 2 + [AFTERWARDS] * 38
    # the peak lies where the baseline only holds: it is judged all the same
    assert assess_paths(VAR, [path])[0].whole.distance.dof == 6


def test_without_a_var_conditional_is_refused_at_its_place(tmp_path: Path) -> None:
    assert refused(tmp_path, stress(), var=None) == (
        "s0.yaml:3:1: missing: conditional fills variables by a VAR, and the study declares none; add macro.var to it, or "
        "state every variable"
    )


def test_nothing_to_fill_from(tmp_path: Path) -> None:
    assert refused(tmp_path, stress("oil: {values: [60]}")) == (
        "s0.yaml:3:1: missing: scenario 'stress' states no variable of macro.var (u, hpi, rate), so there is nothing to fill "
        "the others from; state at least one"
    )


def test_a_variable_that_the_var_does_not_have_is_still_missing(tmp_path: Path) -> None:
    var = fit_var(make_var(variables={"u": "level", "rate": "difference"}, lags=1), PAST, end=PAST.end)
    said = refused(tmp_path, stress(), var=var)
    assert (
        "scenario 'stress' gives no path of 'hpi', which feature hpi_growth needs; the VAR has only u, rate: add it to macro.var, or "
        in said
    )


def test_what_is_made_from_itself(tmp_path: Path) -> None:
    one = stress("u: {values: [5]}\n  hpi: {multiply: two, values: [1.0]}", name="one")
    two = stress("u: {add_to: one, values: [0.1]}\n  rate: {add_to: one, values: [0.1]}", name="two")
    assert (
        refused(tmp_path, one, two) == "s0.yaml:6:3: paths.hpi: hpi is defined in a circle: one -> two -> one"
    )
    one = stress("hpi: {multiply: two, values: [1.0]}\n  rate: {values: [1.0]}", name="one")
    two = stress("u: {add_to: one, values: [0.1]}", name="two")
    assert refused(tmp_path, one, two) == (
        "s0.yaml:3:1: missing: what 'one' leaves out is filled from values that are themselves made from it"
    )


def test_a_logarithm_needs_values_above_zero_whether_filled_from_or_judged(tmp_path: Path) -> None:
    text = stress("u: {values: [5, 5]}\n  rate: {values: [1, 1]}\n  hpi: {values: [100, -1]}")
    assert refused(tmp_path, text) == (
        "s0.yaml:7:3: paths.hpi: hpi is -1 in 2026Q2, and macro.var takes its logarithm, which needs values above zero"
    )


def test_a_table_may_be_completed(tmp_path: Path) -> None:
    (tmp_path / "t.csv").write_text("q,jobless\n2026Q1,5.5\n2026Q2,6.0\n2026Q3,6.5\n2026Q4,6.5\n2027Q1,6.0\n")
    text = "scenario: t\ntable: t.csv\nperiod: q\nvariables: {u: jobless}\nmissing: conditional"
    path = resolved(tmp_path, text)["t"]
    np.testing.assert_array_equal(path.values["rate"][:5], fill(VAR, {"u": U})["rate"].values)


def test_a_study_with_a_var_leaves_complete_paths_as_they_are(tmp_path: Path) -> None:
    text = stress("u: {values: [5.5]}\n  hpi: {change_from: base, peak: -10%, at: 2027Q1}").replace(
        "missing: conditional\n", ""
    )
    base = "scenario: base\nstarts: 2026Q1\npaths:\n  u: {values: [5]}\n  hpi: {values: [120]}"
    with_var, without = (resolved(tmp_path, text, base, var=v) for v in (VAR, None))
    for name in ("stress", "base"):
        for v in ("u", "hpi"):
            assert np.array_equal(with_var[name].values[v], without[name].values[v])
            assert np.array_equal(with_var[name].flags[v], without[name].flags[v])


def test_the_job_losses_of_a_library_scenario_alone_are_completed_as_the_demo_history_ties_them(
    tmp_path: Path,
) -> None:
    """Falling house prices and a cut of the policy rate go with job losses in the demo's history; d2 cannot rise by filling."""
    economy = demo_economy()
    past = MacroHistory(QUARTER, economy.start, economy.values, dict.fromkeys(economy.values, "level"), {})
    study = load_study(REPOSITORY / "stresskit" / "demo" / "study.yaml").model
    assert study.macro is not None
    assert study.macro.var is not None
    var = fit_var(study.macro.var, past, end=past.end)
    files = [REPOSITORY / "scenarios" / f"{name}.yaml" for name in ("baseline", "deep_recession", "rates_up")]
    text = "scenario: jobs\nstarts: 2026Q1\nweight: 0\nmissing: conditional\npaths:\n  unemployment_rate: {add_to: deep_recession, values: [0]}"
    loaded = [load_scenario(f) for f in (*files, write(tmp_path, "jobs", text))]
    paths = {
        p.name: p
        for p in resolve(
            loaded, study.macro, past, as_of=past.end * 3 + 2, model=Frequency.MONTH, horizon=72, var=var
        )
    }
    jobs, whole = paths["jobs"], paths["deep_recession"]
    np.testing.assert_array_equal(jobs.values["unemployment_rate"], whole.values["unemployment_rate"])
    free = forecast_mean(var, 6)
    assert jobs.values["policy_rate"][5] < free[5, var.names.index("policy_rate")]
    assert jobs.values["house_price_index"][5] < np.exp(free[5, var.names.index("house_price_index")])
    alone, together = assess_paths(var, [jobs, whole])
    assert set(alone.filled) == {"house_price_index", "policy_rate"}
    assert alone.whole.distance.d2 < together.whole.distance.d2
