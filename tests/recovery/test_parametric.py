"""Weibull and log-logistic recovery times against R, Cox against the discrete fit."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from lifelines import LogLogisticFitter, WeibullFitter
from scipy.optimize import minimize

from stresskit.core.errors import NumericError, UsageError
from stresskit.hazard.fit import fit_hazard
from stresskit.recovery.curves import recovery_curve
from stresskit.recovery.parametric import cox_table, grouped_units, parametric_curve
from stresskit.recovery.regression import risk_set_of
from stresskit.spec.terms import HazardSpec
from tests.recovery.test_curves import _as_workouts
from tests.recovery.world import draw, workouts

DATA = Path(__file__).parent.parent / "data" / "curves"

#: R 4.2.2, survival 3.5-3: survreg(Surv(time, status) ~ 1) on the lung data without incomplete rows (lung227.csv), days:
#: intercept mu and scale s; Weibull S(t) = exp(-(t / e^mu)^(1/s)), log-logistic S(t) = 1 / (1 + (t / e^mu)^(1/s)).
SURVREG = {
    "weibull": (6.039166169006802, 0.756008464655889),
    "loglogistic": (5.717423487526987, 0.576964455896025),
}


def lung() -> tuple[np.ndarray, np.ndarray]:
    table = pd.read_csv(DATA / "lung227.csv")
    return table["time"].to_numpy(dtype=int), (table["event"] == 1).to_numpy()


@pytest.mark.parametrize("family", ["weibull", "loglogistic"])
def test_days_grouped_by_day_give_the_published_fit(family: str) -> None:
    """The library's exact fit is R's to 1e-5; ours, which knows days only as (t - 1, t], is the exact fit half a day later."""
    time, event = lung()
    mu, s = SURVREG[family]
    exact = (WeibullFitter if family == "weibull" else LogLogisticFitter)().fit(time, event)
    assert np.log(exact.lambda_ if family == "weibull" else exact.alpha_) == pytest.approx(mu, abs=1e-5)
    assert 1.0 / (exact.rho_ if family == "weibull" else exact.beta_) == pytest.approx(s, abs=1e-5)
    ours = parametric_curve(_as_workouts(time, event), family)
    ratio = (np.arange(ours.unresolved.size) / np.exp(mu)) ** (1.0 / s)
    want = np.exp(-ratio) if family == "weibull" else 1.0 / (1.0 + ratio)
    np.testing.assert_allclose(ours.unresolved, want, atol=3e-3)


@pytest.mark.parametrize("family", ["weibull", "loglogistic"])
def test_grouped_money_is_fitted_by_its_own_likelihood(family: str) -> None:
    """Coarse workout periods and amounts for weights: against a direct maximisation of the grouped likelihood."""
    w = draw(np.random.default_rng(2), 500, end=12, window=20, dead=0.1).known
    lower, upper, weight = grouped_units(w)

    def survival(t: np.ndarray, log_scale: float, log_shape: float) -> np.ndarray:
        ratio = (t / np.exp(log_scale)) ** np.exp(log_shape)
        return np.exp(-ratio) if family == "weibull" else 1.0 / (1.0 + ratio)

    def loss(x: np.ndarray) -> float:
        after = np.where(np.isfinite(upper), survival(np.where(np.isfinite(upper), upper, 1.0), *x), 0.0)
        return -float(weight @ np.log(survival(lower, *x) - after))

    best = minimize(
        loss, [2.0, 0.0], method="Nelder-Mead", options={"xatol": 1e-9, "fatol": 1e-10, "maxiter": 4000}
    )
    ours = parametric_curve(w, family)
    assert np.log(ours.scale) == pytest.approx(best.x[0], abs=2e-4)
    assert np.log(ours.shape) == pytest.approx(best.x[1], abs=2e-4)
    np.testing.assert_allclose(ours.unresolved, survival(np.arange(13.0), *best.x), atol=1e-4)
    assert abs(ours.lgd - recovery_curve(w).lgd) < 0.05


def test_cox_and_the_discrete_fit_agree_where_periods_are_short() -> None:
    """Coefficient of security: Cox with Efron ties on amounts, and the cloglog fit with a level per workout period."""
    rng = np.random.default_rng(6)
    rows = []
    for i in range(300):
        secured = "yes" if i % 2 else "no"
        time = int(np.ceil(rng.exponential(25.0 if secured == "yes" else 50.0)))
        amount, observed = float(rng.lognormal(5.0, 0.5)), int(rng.integers(10, 61))
        hit = {"flows": {time: amount}, "kind": "full", "closed": time} if time <= observed else {}
        rows.append({"amount": amount, "observed": observed, "static": {"secured": secured}, **hit})
    w = workouts(rows, end=60)
    table = cox_table(w, ("secured",)).set_index("term")
    plain = HazardSpec.model_validate(
        {"terms": ({"age": "quadratic"}, {"loan": "secured", "as": "category", "reference": "no"})}
    )
    fit = fit_hazard(plain, risk_set_of(w), cause="recovered")
    name = table.index[0]
    sign = 1.0 if name == "secured[yes]" else -1.0
    assert sign * table["coef"].iloc[0] == pytest.approx(
        fit.params["secured[yes]"], abs=0.5 * table["se"].iloc[0]
    )
    assert table["se"].iloc[0] == pytest.approx(float(np.sqrt(np.diag(fit.cov_params("loan")))[-1]), rel=0.3)


def test_what_cannot_be_fitted_is_said() -> None:
    bare = workouts([{"amount": 1.0, "observed": 3}], end=3)
    with pytest.raises(NumericError, match="nothing has been recovered"):
        parametric_curve(bare, "weibull")
    with pytest.raises(UsageError, match="family is weibull or loglogistic"):
        parametric_curve(bare, "gamma")
    with pytest.raises(UsageError, match="no case column 'rating'"):
        cox_table(bare, ("rating",))
