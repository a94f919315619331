"""Exact conditioning: external figures, a Kalman smoother, brute force, and what must hold whatever the numbers."""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from statsmodels.tsa.api import VARMAX

from stresskit.core.period import Frequency
from stresskit.macro.var import Forecast, VarModel, forecast, forecast_mean
from stresskit.scenario.completion import fill, stated_table
from stresskit.scenario.gaussian import basis, condition
from stresskit.scenario.innovations import squared_distances
from stresskit.scenario.plausibility import Distance
from tests.macro.var_world import MIXED, TRUE_A, TRUE_C, TRUE_S, draw, fitted, make_history, sample

DATA = Path(__file__).parents[1] / "data" / "plausibility"
CHECKS: Mapping[str, Any] = json.loads((DATA / "conditioning.json").read_text(encoding="utf-8"))


def plain_model(c: Any, a: Any, s: Any, recent: Any) -> VarModel:
    """A VAR in levels with these parameters."""
    a, recent = np.asarray(a, dtype=float), np.asarray(recent, dtype=float)
    k = a.shape[1]
    names = tuple("abcdefgh"[:k])
    return VarModel(
        names=names, transforms=("level",) * k, frequency=Frequency.QUARTER, last=0, criterion="fixed",
        intercept=np.asarray(c, dtype=float), coefs=a, sigma=np.asarray(s, dtype=float), recent=recent, anchor=recent[-1],
        residuals=np.zeros((0, k)), root=0.5, floors={},
    )  # fmt: skip


def test_the_conditional_path_of_the_check_values() -> None:
    d = CHECKS["var1_conditional"]
    model = plain_model(d["c"], [d["A"]], d["Q"], [d["y0"]])
    found = forecast(model, 4)
    np.testing.assert_allclose(found.mean[:, 1], d["uncond_y2"], rtol=1e-12)
    stated = np.column_stack([d["path"], np.full(4, np.nan)])
    given_path = condition(found, stated)
    np.testing.assert_allclose(given_path.mean[:, 1], d["cond_y2"], rtol=1e-12)
    np.testing.assert_allclose(given_path.sd[:, 1], d["cond_sd"], rtol=1e-12)
    assert np.sqrt(given_path.d2) == pytest.approx(d["maha_path"], rel=1e-12)
    assert given_path.dof == 4


def test_one_period_of_three_variables() -> None:
    """Completion and radius in closed form: the same mean, deviations and correlations in both check values."""
    w, d = CHECKS["worst_case"], CHECKS["conditional_completion"]
    covariance = np.outer(w["sd"], w["sd"]) * np.array(w["corr"])
    found = Forecast(np.array([w["mu"]]), np.linalg.cholesky(covariance))
    done = condition(found, np.array([[d["x1"], np.nan, np.nan]]))
    np.testing.assert_allclose(done.mean[0, 1:], d["mean"], rtol=1e-12)
    np.testing.assert_allclose(done.sd[0, 1:], np.sqrt(np.diag(d["cov"])), rtol=1e-12)
    worst = condition(found, np.array([w["k3_x"]]))
    assert worst.d2 == pytest.approx(3.0**2, rel=1e-10)


def test_tails_are_those_of_printed_chi_square_tables() -> None:
    lines = (DATA / "chi2_quantiles.csv").read_text(encoding="utf-8").splitlines()
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) == 12
    for r in rows:
        for column, share in {
            "q50": 0.5,
            "q90": 0.1,
            "q95": 0.05,
            "q99": 0.01,
            "q995": 0.005,
            "q999": 0.001,
        }.items():
            assert Distance(float(r[column]), int(r["dof"])).tail == pytest.approx(share, rel=1e-9)


def smoothed(model: VarModel, past: np.ndarray, stated: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mean and sd of the future by statsmodels' state space: the future is missing where nothing is stated."""
    k, p = model.k, model.lags
    machine = VARMAX(np.vstack([past, stated]), order=(p, 0), trend="c", enforce_stationarity=False)
    root = np.linalg.cholesky(model.sigma)
    values = {}
    for i in range(k):
        values[f"intercept.y{i + 1}"] = model.intercept[i]
        for j in range(k):
            for lag in range(p):
                values[f"L{lag + 1}.y{j + 1}.y{i + 1}"] = model.coefs[lag, i, j]
            if j < i:
                values[f"sqrt.cov.y{j + 1}.y{i + 1}"] = root[i, j]
        values[f"sqrt.var.y{i + 1}"] = root[i, i]
    result = machine.smooth([values[name] for name in machine.param_names])
    h = stated.shape[0]
    mean = result.smoothed_state[:k, -h:].T
    variance = np.array(
        [np.diag(result.smoothed_state_cov[:k, :k, t]) for t in range(past.shape[0], past.shape[0] + h)]
    )
    return mean, np.sqrt(np.maximum(variance, 0.0))


@pytest.mark.parametrize("pattern", ["one variable", "holes", "last period only", "nothing"])
def test_a_kalman_smoother_gives_the_same(pattern: str) -> None:
    """To 1e-8, in a VAR(2) of three variables over ten periods, with the parameters fixed in both."""
    rng = np.random.default_rng(11)
    past = draw(rng, 40)
    model = plain_model(TRUE_C, TRUE_A, TRUE_S, past[-2:])
    future = forecast_mean(model, 10) + 2.0 * rng.standard_normal((10, 3))
    known = {
        "one variable": np.tile([True, False, False], (10, 1)),
        "holes": rng.random((10, 3)) < 0.4,
        "last period only": np.arange(10)[:, None] == np.array([[9, -1, 9]]),
        "nothing": np.zeros((10, 3), dtype=bool),
    }[pattern]
    stated = np.where(known, future, np.nan)
    done = condition(forecast(model, 10), stated)
    mean, sd = smoothed(model, past, stated)
    np.testing.assert_allclose(done.mean, mean, rtol=1e-8, atol=1e-8)
    # a variance of zero is known to the smoother up to rounding, so its root is only good to 1e-7
    np.testing.assert_allclose(done.sd, sd, rtol=1e-8, atol=1e-6)
    np.testing.assert_allclose(done.sd**2, sd**2, rtol=1e-8, atol=1e-8)


def brute(found: Forecast, stated: np.ndarray) -> tuple[np.ndarray, np.ndarray, float]:
    """The textbook formula with covariance matrices and an inverse."""
    v = found.factor @ found.factor.T
    s = np.flatnonzero(np.isfinite(stated.ravel()))
    gap = stated.ravel()[s] - found.mean.ravel()[s]
    inverse = np.linalg.inv(v[np.ix_(s, s)])
    mean = found.mean.ravel() + v[:, s] @ inverse @ gap
    left = v - v[:, s] @ inverse @ v[s]
    return (
        mean.reshape(stated.shape),
        np.sqrt(np.maximum(np.diag(left), 0)).reshape(stated.shape),
        float(gap @ inverse @ gap),
    )


patterns = st.lists(st.booleans(), min_size=18, max_size=18)


@settings(max_examples=40, deadline=None)
@given(patterns, st.integers(0, 10_000))
def test_any_pattern_agrees_with_the_textbook(pattern: list[bool], seed: int) -> None:
    model = fitted(sample(), variables=MIXED, lags=2)
    found = forecast(model, 6)
    u = np.random.default_rng(seed).standard_normal(18)
    path = found.mean + (found.factor @ u).reshape(6, 3)
    known = np.array(pattern).reshape(6, 3)
    done = condition(found, np.where(known, path, np.nan))
    assert np.array_equal(done.mean[known], path[known])
    assert (done.sd[known] == 0).all()
    if known.any():
        mean, sd, d2 = brute(found, np.where(known, path, np.nan))
        np.testing.assert_allclose(done.mean, mean, rtol=1e-9, atol=1e-9)
        np.testing.assert_allclose(done.sd**2, sd**2, rtol=1e-7, atol=1e-9)
        assert done.d2 == pytest.approx(d2, rel=1e-7)
    # never further than all of the path, and all of it is |u|^2
    assert done.d2 <= u @ u * (1 + 1e-9)
    assert condition(found, path).d2 == pytest.approx(u @ u, rel=1e-8)


def test_the_forecast_itself_is_at_distance_zero() -> None:
    model = fitted(sample(), variables=MIXED, lags=2)
    found = forecast(model, 8)
    assert condition(found, found.mean).d2 == 0.0
    part = np.where(np.array([True, False, True]), found.mean, np.nan)
    done = condition(found, part)
    assert done.d2 == 0.0
    np.testing.assert_array_equal(done.mean, found.mean)
    free = condition(found, np.full((8, 3), np.nan))
    assert free.d2 == 0.0
    assert free.dof == 0
    np.testing.assert_array_equal(free.mean, found.mean)


def test_filling_adds_nothing_to_the_distance() -> None:
    model = fitted(sample(), variables=MIXED, lags=2)
    found = forecast(model, 8)
    stated = np.full((8, 3), np.nan)
    stated[:, 0] = found.mean[:, 0] + np.linspace(0.5, 2.0, 8)
    done = condition(found, stated)
    assert condition(found, done.mean).d2 == pytest.approx(done.d2, rel=1e-10)


def test_a_variable_with_all_values_stated_comes_back_as_stated() -> None:
    model = fitted(sample(), variables=MIXED, lags=1)
    levels = {"x": np.array([0.1, 0.2]), "y": np.array([9.0, 8.5]), "w": np.array([1.01, 1.02])}
    assert fill(model, levels) == {}
    table = stated_table(model, levels)
    np.testing.assert_array_equal(condition(forecast(model, 2), table).mean, table)


def test_units_and_order_change_nothing() -> None:
    history = sample()
    x = np.array([0.5, 1.5, 2.0, 1.0])
    model = fitted(history, variables=MIXED, lags=2)
    one = fill(model, {"x": x})
    turned = fitted(history, variables=dict(reversed(MIXED.items())), lags=2)
    other = fill(turned, {"x": x})
    scaled = make_history(
        dict(history.values) | {"x": 1000 * history.values["x"], "w": 0.01 * history.values["w"]}
    )
    third = fill(fitted(scaled, variables=MIXED, lags=2), {"x": 1000 * x})
    for name, unit in (("y", 1.0), ("w", 0.01)):
        for part in ("values", "low", "high"):
            expected = getattr(one[name], part)
            np.testing.assert_allclose(getattr(other[name], part), expected, rtol=1e-10)
            np.testing.assert_allclose(getattr(third[name], part), unit * expected, rtol=1e-9)
    d2 = [
        condition(forecast(m, 4), stated_table(m, {"x": s * x})).d2
        for m, s in ((model, 1), (turned, 1), (fitted(scaled, variables=MIXED, lags=2), 1000))
    ]
    assert d2[1:] == pytest.approx([d2[0]] * 2, rel=1e-10)


def test_paths_of_a_known_var_have_chi_square_distances() -> None:
    """20,000 paths drawn from the VAR by its recursion; every tail within 4 Monte Carlo errors, Kolmogorov distance too."""
    rng = np.random.default_rng(5)
    model = plain_model(TRUE_C, TRUE_A, TRUE_S, [[0.3, 0.1, -0.2], [0.5, 0.0, 0.4]])
    found = forecast(model, 8)
    known = np.zeros((8, 3), dtype=bool)
    known[:, 0], known[:4, 2] = True, True
    made = basis(found, known)
    root = np.linalg.cholesky(TRUE_S)
    n = 20_000
    rows = [np.tile(r, (n, 1)) for r in model.recent]
    for _ in range(8):
        rows.append(
            TRUE_C + rows[-1] @ TRUE_A[0].T + rows[-2] @ TRUE_A[1].T + rng.standard_normal((n, 3)) @ root.T
        )
    paths = np.stack(rows[2:], axis=1)
    d2 = np.array([w @ w for w in (made.deviation(found, path) for path in paths)])
    tails = np.array([Distance(float(x), 12).tail for x in d2])
    for share in (0.5, 0.1, 0.05, 0.01, 0.001):
        assert (tails < share).mean() == pytest.approx(share, abs=4 * np.sqrt(share * (1 - share) / n))
    assert stats.kstest(tails, "uniform").pvalue > 1e-3
    whole = basis(found, np.ones((8, 3), dtype=bool))
    all_d2 = np.array([w @ w for w in (whole.deviation(found, path) for path in paths[:4000])])
    assert stats.kstest(all_d2, stats.chi2(24).cdf).pvalue > 1e-3


def test_bands_hold_the_share_they_say() -> None:
    """Paths drawn from the VAR that happen to be given: filled bands of 80% cover 80% within 4 Monte Carlo errors."""
    model = replace(fitted(sample(), variables=MIXED, lags=1), band=0.8)
    found = forecast(model, 5)
    rng = np.random.default_rng(9)
    inside = []
    for _ in range(2000):
        path = found.mean + (found.factor @ rng.standard_normal(15)).reshape(5, 3)
        done = fill(model, {"x": path[:, 0]})["w"]
        inside.append((done.low[-1] <= np.exp(path[-1, 2])) & (np.exp(path[-1, 2]) <= done.high[-1]))
    assert np.mean(inside) == pytest.approx(0.8, abs=4 * np.sqrt(0.16 / 2000))


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 10_000),
    periods=st.integers(1, 9),
    share=st.sampled_from([0.2, 0.5, 0.9, 1.0]),
    lags=st.integers(1, 3),
)
def test_period_by_period_and_at_once_are_the_same_distance(
    seed: int, periods: int, share: float, lags: int
) -> None:
    """By the covariance of everything stated, formed and inverted, against the filter; any pattern of holes, mixed transforms."""
    rng = np.random.default_rng(seed)
    k = 3
    model = VarModel(
        names=("a", "b", "c"), transforms=("level", "difference", "log_difference"), frequency=Frequency.QUARTER, last=0,
        criterion="fixed", intercept=rng.normal(size=k), coefs=rng.uniform(-0.25, 0.25, (lags, k, k)),
        sigma=np.cov(rng.normal(size=(k, 12))), recent=rng.normal(size=(lags, k)), anchor=rng.normal(size=k),
        residuals=np.zeros((0, k)), root=0.5, floors={},
    )  # fmt: skip
    found = forecast(model, periods)
    known = rng.random((periods, k)) < share
    gaps = rng.normal(size=(periods, k, 4))
    got = squared_distances(model, np.where(known[:, :, None], gaps, np.nan), known)
    rows = np.flatnonzero(known.ravel())
    covariance = (found.factor @ found.factor.T)[np.ix_(rows, rows)]
    flat = gaps.reshape(-1, 4)[rows]
    np.testing.assert_allclose(
        got, (flat * np.linalg.solve(covariance, flat)).sum(axis=0), rtol=1e-7, atol=1e-12
    )
    if rows.size:
        stated = np.where(known, found.mean + gaps[:, :, 0], np.nan)
        assert condition(found, stated).d2 == pytest.approx(got[0], rel=1e-9)


def test_ten_years_of_months_of_six_variables_keep_their_digits() -> None:
    """720 stated values: the filter against one factorisation of all of them."""
    rng = np.random.default_rng(7)
    k, periods = 6, 120
    names = tuple("abcdef")
    model = VarModel(
        names=names, transforms=("difference",) * k, frequency=Frequency.MONTH, last=0, criterion="fixed",
        intercept=np.zeros(k), coefs=rng.uniform(-0.1, 0.1, (2, k, k)), sigma=np.cov(rng.normal(size=(k, 40))),
        recent=np.zeros((2, k)), anchor=np.zeros(k), residuals=np.zeros((0, k)), root=0.5, floors={},
    )  # fmt: skip
    found = forecast(model, periods)
    known = np.zeros((periods, k), dtype=bool)
    known[:, :3] = True
    known[:50, 4] = True
    stated = np.where(known, found.mean + np.cumsum(rng.normal(size=(periods, k)), axis=0), np.nan)
    got = squared_distances(model, (stated - found.mean)[:, :, None], known)[0]
    assert got == pytest.approx(condition(found, stated).d2, rel=1e-10)
