"""Signs that a coefficient is held to: against general optimisers, by the conditions of an optimum, and as reported."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.optimize import Bounds, minimize, nnls

import stresskit as sk
from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.bounds import Optimality, bounded_quadratic, maximise_bounded, optimality
from stresskit.hazard.fit import Backend, fit_hazard
from stresskit.hazard.link import LINKS
from stresskit.hazard.sums import Evaluation
from tests.hazard.hazard_cases import make_spec

Floats = NDArray[np.float64]
SIGN = {"positive": 1.0, "negative": -1.0}
BOTH = pytest.mark.parametrize("link", ["cloglog", "logit"])


class _Rows:
    """A log-likelihood from plain rows, by the link's formulas alone."""

    def __init__(self, x: Floats, y: Floats, link: str) -> None:
        self.x, self.event, self.link = x, y > 0, LINKS[link]

    def evaluate(self, params: Floats) -> Evaluation:
        eta = self.x @ params
        parts = [
            np.where(self.event, a, b)
            for a, b in zip(self.link.event(eta, "observed"), self.link.survive(eta, "observed"), strict=True)
        ]
        return Evaluation(float(parts[0].sum()), self.x.T @ parts[1], self.x.T @ (self.x * parts[2][:, None]))


class _Never:
    def after_step(self, iteration: int, params: Floats, step: Floats, at: Evaluation) -> None: ...

    def singular(self, iteration: int, params: Floats, at: Evaluation) -> None:
        raise AssertionError


def _problem(seed: int, link: str, n: int = 400, k: int = 9) -> tuple[_Rows, Floats]:
    """Correlated columns, effects of both signs, bounds against about half of them."""
    rng = np.random.default_rng(seed)
    common = rng.normal(size=(n, 1))
    x = np.column_stack([np.ones(n), 0.7 * common + rng.normal(size=(n, k - 1))])
    beta = np.concatenate(([-1.2], rng.normal(0.0, 0.4, k - 1)))
    y = (rng.random(n) < LINKS[link].probability(x @ beta)).astype(float)
    return _Rows(x, y, link), np.concatenate(([0.0], rng.choice([-1.0, 0.0, 1.0], k - 1, p=[0.4, 0.2, 0.4])))


def _peer(rows: _Rows, signs: Floats) -> Floats:
    """scipy's L-BFGS-B."""
    bounds = Bounds(np.where(signs > 0, 0.0, -np.inf), np.where(signs < 0, 0.0, np.inf))

    def value(b: Floats) -> tuple[float, Floats]:
        at = rows.evaluate(b)
        return -at.llf, -at.score

    rough = minimize(
        value,
        np.zeros(signs.size),
        jac=True,
        bounds=bounds,
        method="L-BFGS-B",
        options={"ftol": 1e-15, "gtol": 1e-10, "maxiter": 5000},
    )
    return np.asarray(rough.x)


@BOTH
@pytest.mark.parametrize("seed", range(12))
def test_random_problems_against_a_general_optimiser(seed: int, link: str) -> None:
    rows, signs = _problem(seed, link)
    start = np.zeros(signs.size)
    found = maximise_bounded(rows, start, rows.evaluate(start), signs=signs, watch=_Never())
    np.testing.assert_allclose(found.params, _peer(rows, signs), atol=1e-6)
    assert optimality(rows.evaluate(found.params), found.params, signs).holds
    assert (signs * found.params >= 0.0).all()


def test_the_random_problems_have_several_active_bounds() -> None:
    counts = []
    for seed in range(12):
        rows, signs = _problem(seed, "cloglog")
        found = maximise_bounded(rows, np.zeros(9), rows.evaluate(np.zeros(9)), signs=signs, watch=_Never())
        counts.append(int(((signs != 0) & (found.params == 0.0)).sum()))
    assert max(counts) >= 4
    assert sum(c >= 2 for c in counts) >= 6


@pytest.mark.parametrize("seed", range(6))
def test_an_interior_point_solver_agrees(seed: int) -> None:
    rows, signs = _problem(seed + 100, "logit", n=250, k=6)
    bounds = Bounds(np.where(signs > 0, 0.0, -np.inf), np.where(signs < 0, 0.0, np.inf))
    peer = minimize(
        lambda b: -rows.evaluate(b).llf, 0.1 * signs, jac=lambda b: -rows.evaluate(b).score,
        hess=lambda b: rows.evaluate(b).information, bounds=bounds, method="trust-constr",
        options={"gtol": 1e-11, "xtol": 1e-14, "barrier_tol": 1e-12, "maxiter": 3000},
    )  # fmt: skip
    found = maximise_bounded(rows, np.zeros(6), rows.evaluate(np.zeros(6)), signs=signs, watch=_Never())
    np.testing.assert_allclose(found.params, peer.x, atol=1e-6)
    assert found.at.llf >= -peer.fun - 1e-9


@pytest.mark.parametrize("seed", range(30))
def test_the_quadratic_step_against_non_negative_least_squares(seed: int) -> None:
    rng = np.random.default_rng(seed)
    k = int(rng.integers(1, 14))
    a, b = rng.normal(size=(k + 5, k)) * 10.0 ** rng.uniform(-3, 3, k), rng.normal(size=k + 5)
    found = bounded_quadratic(a.T @ a, a.T @ b, np.ones(k), np.zeros(k))
    scale = np.linalg.norm(a, axis=0)
    np.testing.assert_allclose(found * scale, nnls(a, b)[0] * scale, atol=1e-9)


def test_any_start_gives_the_same_answer() -> None:
    rows, signs = _problem(3, "cloglog")
    rng = np.random.default_rng(0)
    found = [
        maximise_bounded(rows, s, rows.evaluate(s), signs=signs, watch=_Never()).params
        for s in (np.zeros(9), np.where(signs == 0, 0.2, signs * rng.random(9)))
    ]
    np.testing.assert_allclose(found[0], found[1], atol=1e-9)


def test_the_conditions_tell_a_wrong_point() -> None:
    rows, signs = _problem(1, "logit")
    right = maximise_bounded(
        rows, np.zeros(9), rows.evaluate(np.zeros(9)), signs=signs, watch=_Never()
    ).params
    inside = int(np.flatnonzero((signs != 0) & (right != 0))[0])
    moved = right.copy()
    moved[inside] = 0.0
    assert optimality(rows.evaluate(moved), moved, signs).slope_bound > 1e-3
    moved[inside] = -signs[inside] * 1e-6
    assert optimality(rows.evaluate(moved), moved, signs).infeasible == 1
    assert optimality(rows.evaluate(right + 1e-3), right + 1e-3, signs).slope_free > 1e-3


# ---- through the fit


@pytest.fixture(scope="module")
def wide(panel: tuple[RiskSet, FeatureTable]) -> tuple[RiskSet, FeatureTable]:
    risk_set, features = panel
    rng = np.random.default_rng(5)
    more = {f"x{j}": rng.normal(size=risk_set.n_loans) for j in range(3)}
    return dataclasses.replace(risk_set, static={**risk_set.static, **more}), features


def _terms(**bounds: str | None) -> list[dict[str, object]]:
    terms: list[dict[str, object]] = [
        {"age": "linear"},
        {"loan": "product", "as": "category"},
        {"macro": "gap"},
    ]
    terms += [{"loan": name, "bound": bounds.get(name)} for name in ("ltv", "x0", "x1", "x2")]
    return [*terms, {"macro": "rate", "bound": bounds.get("rate"), "transform": "standardise"}]


@BOTH
@pytest.mark.parametrize("backend", ["rows", "factored"])
def test_active_bounds_are_the_fit_without_those_terms(
    wide: tuple[RiskSet, FeatureTable], link: str, backend: Backend
) -> None:
    risk_set, features = wide
    more = {"link": link, "covariance": "model"}
    free = fit_hazard(make_spec(*_terms(), **more), risk_set, features, backend=backend)
    against = {name: "negative" if free.params[name] > 0 else "positive" for name in ("x0", "x1", "rate")}
    fit = fit_hazard(
        make_spec(*_terms(ltv="positive", **against), **more), risk_set, features, backend=backend
    )
    assert set(fit.at_bound) == set(against)
    assert (fit.params[list(against)] == 0.0).all()
    table = fit.coefficient_table().set_index("term")
    np.testing.assert_array_equal(table["coef_free"], free.params)
    assert list(table.index[table["at_bound"]]) == list(fit.at_bound)
    assert (
        table.loc[list(against), ["se", "statistic", "p_value", "lower", "upper", "se_loan", "se_period"]]
        .isna()
        .all()
        .all()
    )
    without = fit_hazard(
        make_spec(*(t for t in _terms() if t.get("loan", t.get("macro")) not in against), **more),
        risk_set,
        features,
    )
    kept = list(without.params.index)
    np.testing.assert_allclose(fit.params[kept], without.params, rtol=1e-7, atol=1e-9)
    for kind in ("model_expected", "model_observed", "loan", "period"):
        np.testing.assert_allclose(
            fit.cov_params(kind).loc[kept, kept], without.cov_params(kind), rtol=1e-6, atol=1e-12
        )
    assert fit.llf == pytest.approx(without.llf, rel=1e-12)
    assert fit.aic == pytest.approx(without.aic, rel=1e-12)
    assert free.llf > fit.llf


def test_bounds_that_hold_anyway_change_no_bit(wide: tuple[RiskSet, FeatureTable]) -> None:
    risk_set, features = wide
    free = fit_hazard(make_spec(*_terms()), risk_set, features)
    along = {
        name: "positive" if free.params[name] > 0 else "negative"
        for name in ("ltv", "x0", "x1", "x2", "rate")
    }
    fit = fit_hazard(make_spec(*_terms(**along)), risk_set, features)
    np.testing.assert_array_equal(fit.params, free.params)
    np.testing.assert_array_equal(fit.cov_params(), free.cov_params())
    assert fit.at_bound == ()
    assert fit.aic == free.aic


def test_what_the_reader_is_told(wide: tuple[RiskSet, FeatureTable]) -> None:
    risk_set, features = wide
    fit = fit_hazard(make_spec(*_terms(ltv="negative")), risk_set, features)
    text = fit.summary()
    assert any(line.split() == ["ltv", "0", "at", "bound"] for line in text.splitlines())
    assert "Held at the bound 0, no standard error: ltv (free fit: " in text
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.estimation == fit.estimation
    pd.testing.assert_frame_equal(again.coefficient_table(), fit.coefficient_table())


def test_expected_signs_and_bounds_are_told_apart(wide: tuple[RiskSet, FeatureTable]) -> None:
    risk_set, features = wide
    fit = fit_hazard(
        make_spec({"loan": "ltv", "bound": "negative", "expect": "negative"}), risk_set, features
    )
    row = fit.coefficient_table().set_index("term").loc["ltv"]
    assert row["at_bound"]
    assert row["sign_ok"] is None


@pytest.mark.parametrize(
    ("term", "more", "words"),
    [
        ({"loan": "product", "as": "category", "bound": "positive"}, {}, "bound belongs to as: number"),
        (
            {"loan": "ltv", "bound": "positive", "expect": "negative"},
            {},
            "bound is positive, but expect is negative",
        ),
        (
            {"macro": "rate", "bound": "negative", "expect": "positive"},
            {},
            "bound is negative, but expect is positive",
        ),
        (
            {"loan": "ltv", "bound": "positive"},
            {"bias_reduction": "firth"},
            r"firth cannot be had with bounds \(ltv\)",
        ),
    ],
)
def test_bounds_that_make_no_sense(term: dict[str, object], more: dict[str, str], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        make_spec(term, **more)


def test_a_direction_without_a_maximum_is_refused_with_bounds_too() -> None:
    frame = pd.DataFrame(
        {"loan": range(60), "age": 1, "x": np.linspace(-1, 1, 60), "z": np.tile([0.0, 1.0, 0.5], 20)}
    )
    frame["event"] = (frame["x"] > 0.2).astype(int)
    risk_set = sk.risk_set_from_rows(frame, loan="loan", age="age", event="event", static=["x", "z"])
    with pytest.raises(NumericError, match="separation"):
        fit_hazard(
            make_spec({"loan": "x", "bound": "positive"}, {"loan": "z", "bound": "positive"}), risk_set
        )


def test_a_slope_that_is_no_number_meets_no_condition() -> None:
    assert Optimality(0, 0.0, 0.0).holds
    assert not Optimality(0, 0.0, float("nan")).holds
    assert not Optimality(0, float("nan"), 0.0).holds
