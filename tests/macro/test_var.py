"""Estimation and forecast moments of the VAR against statsmodels and against plain loops; what is refused."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from statsmodels.tsa.api import VAR

from stresskit.core.errors import DataError, NumericError, StresskitError
from stresskit.core.period import format_period
from stresskit.macro.var import (
    VarModel,
    forecast,
    forecast_mean,
    forecast_sd,
    levels,
    standard_residuals,
    working,
)
from stresskit.macro.var_fit import fit_var
from tests.macro.var_world import MIXED, QUARTER, US, draw, fitted, make_history, make_var, sample, us_history

LEVELS = {"a": "level", "b": "level", "c": "level"}


def levels_history(n: int = 150, seed: int = 3) -> Any:
    z = draw(np.random.default_rng(seed), n)
    return make_history(dict(zip("abc", z.T, strict=True)))


def transformed(history: Any, kinds: dict[str, str]) -> np.ndarray:
    """z by pandas-free plain arithmetic, the first row dropped when anything is a change."""
    columns = []
    for name, kind in kinds.items():
        x = history.values[name]
        columns.append(x[1:] if kind == "level" else np.diff(np.log(x) if kind == "log_difference" else x))
    return np.column_stack(columns)


@pytest.mark.parametrize("lags", [1, 3, "aic", "bic"])
def test_estimates_are_those_of_statsmodels(lags: int | str) -> None:
    history = us_history()
    model = fitted(history, variables=US, lags=lags)
    z = transformed(history, US)
    theirs = VAR(z).fit(lags) if isinstance(lags, int) else VAR(z).fit(4, ic=lags)
    assert model.lags == theirs.k_ar
    for ours, other in (
        (model.intercept, theirs.intercept), (model.coefs, theirs.coefs), (model.sigma, theirs.sigma_u), (model.residuals, theirs.resid),
    ):  # fmt: skip
        np.testing.assert_allclose(ours, other, rtol=1e-8, atol=1e-11)
    assert model.root == pytest.approx(1 / np.abs(theirs.roots).min(), rel=1e-9)
    assert format_period(model.first, QUARTER) == format_period(history.start + 1 + model.lags, QUARTER)
    assert format_period(model.last, QUARTER) == "2009Q3"


def test_forecast_is_that_of_statsmodels_when_nothing_is_conditioned() -> None:
    history = levels_history()
    model = fitted(history, variables=LEVELS, lags=2)
    z = np.column_stack([history.values[v] for v in "abc"])
    theirs = VAR(z).fit(2)
    np.testing.assert_allclose(forecast_mean(model, 12), theirs.forecast(z[-2:], 12), rtol=1e-9, atol=1e-11)
    mse = np.array([np.diag(m) for m in theirs.mse(12)])
    np.testing.assert_allclose(forecast_sd(model, 12), np.sqrt(mse), rtol=1e-9)


def plain_moments(model: VarModel, periods: int) -> tuple[np.ndarray, np.ndarray]:
    """Mean and covariance of stacked working values: one column of shocks at a time through the recursion."""
    k, p = model.k, model.lags
    root = np.linalg.cholesky(model.sigma)

    def run(shocks: np.ndarray, *, base: bool) -> np.ndarray:
        rows = [r if base else np.zeros(k) for r in model.recent]
        last, out = (model.anchor if base else np.zeros(k)).copy(), []
        for h in range(periods):
            new = root @ shocks[h] + (model.intercept if base else 0.0)
            for j in range(p):
                new = new + model.coefs[j] @ rows[-1 - j]
            rows.append(new)
            for i, kind in enumerate(model.transforms):
                last[i] = new[i] if kind == "level" else last[i] + new[i]
            out.append(last.copy())
        return np.array(out)

    mean = run(np.zeros((periods, k)), base=True)
    columns = []
    for h in range(periods):
        for i in range(k):
            shocks = np.zeros((periods, k))
            shocks[h, i] = 1.0
            columns.append(run(shocks, base=False).ravel())
    factor = np.array(columns).T
    return mean, factor @ factor.T


def test_stacked_moments_are_those_of_a_plain_loop() -> None:
    model = fitted(sample(), variables=MIXED, lags=2)
    found = forecast(model, 6)
    mean, covariance = plain_moments(model, 6)
    np.testing.assert_allclose(found.mean, mean, rtol=1e-12)
    np.testing.assert_allclose(found.factor @ found.factor.T, covariance, rtol=1e-10, atol=1e-14)
    np.testing.assert_allclose(forecast_sd(model, 6).ravel(), np.sqrt(np.diag(covariance)), rtol=1e-11)
    assert np.array_equal(np.triu(found.factor.reshape(6, 3, 6, 3).sum(axis=(1, 3)), 1), np.zeros((6, 6)))


def test_working_values_and_levels_are_inverse() -> None:
    x = np.array([0.5, 2.0, 7.5])
    for kind in ("level", "difference", "log_difference"):
        np.testing.assert_allclose(levels(working(x, kind), kind), x, rtol=1e-15)


def test_residuals_are_standardised_by_the_unbiased_covariance() -> None:
    """The mean of |u|^2 over the periods of estimation is k (n - k p - 1) / n: an identity of least squares."""
    model = fitted(us_history(), variables=US, lags=2)
    n, k, p = model.nobs, model.k, model.lags
    assert (standard_residuals(model) ** 2).sum() / n == pytest.approx(k * (n - k * p - 1) / n, rel=1e-10)


def test_history_after_the_origin_is_not_seen() -> None:
    history = sample()
    cut = make_history({v: x[:100] for v, x in history.values.items()})
    spec = make_var(variables=MIXED)
    early, whole = fit_var(spec, cut, end=cut.end), fit_var(spec, history, end=cut.end)
    assert np.array_equal(early.coefs, whole.coefs)
    assert np.array_equal(early.anchor, whole.anchor)
    assert early.last == whole.last == history.start + 99


def test_from_and_blank_heads_decide_where_estimation_begins() -> None:
    values = {v: x.copy() for v, x in sample().values.items()}
    values["w"][:20] = np.nan
    late = fitted(make_history(values), variables=MIXED, lags=1)
    assert format_period(late.first, QUARTER) == "1985Q3"  # known from 1985Q1, one change, one lag
    said = fitted(make_history(values), **{"variables": MIXED, "lags": 1, "from": "1990Q1"})
    assert format_period(said.first, QUARTER) == "1990Q3"


def test_a_unit_changes_nothing_but_the_unit() -> None:
    history = sample()
    values = dict(history.values) | {"x": history.values["x"] * 1e6, "w": history.values["w"] * 100}
    one, other = (fitted(h, variables=MIXED, lags=2) for h in (history, make_history(values)))
    np.testing.assert_allclose(standard_residuals(other), standard_residuals(one), rtol=1e-8, atol=1e-10)
    unit = np.array([1e6, 1.0, 1.0])
    np.testing.assert_allclose(other.coefs, one.coefs * unit[:, None] / unit, rtol=1e-7, atol=1e-14)


def refused(history: Any, error: type[StresskitError], *, end: int | None = None, **keys: Any) -> str:
    with pytest.raises(error) as caught:
        fit_var(make_var(**keys), history, end=history.end if end is None else end)
    return str(caught.value)


def test_too_few_periods() -> None:
    assert refused(sample(21), DataError, variables=MIXED) == (
        "macro.var cannot be estimated: 3 variables with 4 lags need at least 23 periods besides the lags, history from "
        "1980Q1 on has 16; supply a longer history, or lower max_lags"
    )
    assert fitted(sample(28), variables=MIXED).nobs >= 23
    assert "or lower lags" in refused(sample(21), DataError, variables=MIXED, lags=3)
    assert "history from 2009Q1 on has 0" in refused(
        sample(), DataError, **{"variables": MIXED, "from": "2009Q1"}
    )


def test_variables_that_are_tied_to_each_other_are_named() -> None:
    values = dict(sample().values)
    values["v"] = 3.0 - 2.0 * values["x"]
    said = refused(
        make_history(values), NumericError, variables={"x": "level", "y": "difference", "v": "level"}
    )
    assert said == (
        "macro.var cannot be estimated: x, v are an exact combination of each other or of the lags (what enters the VAR has "
        "no variance in one direction); leave one of them out"
    )


def test_a_variable_that_repeats_another_one_later_is_named() -> None:
    x = draw(np.random.default_rng(5), 120)[:, 0]
    values = {"x": x[1:], "late": x[:-1]}
    said = refused(make_history(values), NumericError, variables={"x": "level", "late": "level"}, lags=1)
    assert "late is an exact combination" in said


def test_a_variable_that_never_moves_is_named() -> None:
    values = dict(sample().values) | {"k": np.full(120, 2.5)}
    said = refused(make_history(values), NumericError, variables={"x": "level", "k": "level"})
    assert said == (
        "macro.var cannot be estimated: k (level) never moves over the periods used; leave it out, or choose another transform"
    )
    trend = dict(sample().values) | {"k": 2.0 + 0.1 * np.arange(120)}
    assert "k (difference) never moves" in refused(
        make_history(trend), NumericError, variables={"x": "level", "k": "difference"}
    )


def test_roots_that_run_away_are_refused() -> None:
    rng = np.random.default_rng(1)
    t = np.arange(100)
    values = {"boom": 1.05**t * (1 + 0.001 * rng.standard_normal(100)), "x": rng.standard_normal(100)}
    said = refused(make_history(values), NumericError, variables={"boom": "level", "x": "level"}, lags=1)
    assert said.startswith("the VAR under macro.var is not stable: its largest root has modulus 1.0")
    assert "(mostly in boom); declare difference or log_difference" in said


def test_logarithms_need_values_above_zero() -> None:
    values = dict(sample().values)
    values["w"] = values["w"].copy()
    values["w"][[5, 9]] = [-1.0, 0.0]
    assert refused(make_history(values), DataError, variables=MIXED) == (
        "macro.var takes logarithms of w, which is -1 in 1981Q2 (2 values at or below zero); declare w: difference"
    )


def test_history_that_ends_too_early() -> None:
    history = sample()
    assert refused(history, DataError, variables=MIXED, end=history.end + 1) == (
        "macro history runs from 1980Q1 to 2009Q4; macro.var needs it up to 2010Q1"
    )


def test_a_model_of_wrong_shapes_is_refused() -> None:
    model = fitted(sample(), variables=MIXED, lags=1)
    with pytest.raises(ValueError, match=r"VarModel\.sigma has shape"):
        VarModel(
            names=model.names, transforms=model.transforms, frequency=QUARTER, last=model.last, criterion="fixed",
            intercept=model.intercept, coefs=model.coefs, sigma=np.eye(2), recent=model.recent, anchor=model.anchor,
            residuals=model.residuals, root=0.5, floors={},
        )  # fmt: skip
