"""Ridge: against direct maximisation, by its algebra, as part of the model; levels without events kept finite by it."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Callable
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.optimize import minimize

import stresskit as sk
from stresskit.core.errors import NumericError, TextError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import Backend, choose_sums, fit_hazard
from stresskit.hazard.learn import learn_design
from stresskit.hazard.link import LINKS
from stresskit.hazard.penalty import column_variances, effective_parameters
from stresskit.hazard.sums import hazard_data
from tests.hazard.hazard_cases import make_spec, simulated_panel

Floats = NDArray[np.float64]
Panel = tuple[RiskSet, FeatureTable]
BOTH = pytest.mark.parametrize("link", ["cloglog", "logit"])
TERMS = (
    {"age": "quadratic"},
    {"loan": "ltv"},
    {"loan": "product", "as": "category"},
    {"macro": "rate"},
    {"interaction": ("product", "rate")},
)


@pytest.fixture(scope="module")
def small() -> Panel:
    risk_set, features = simulated_panel(loans=250, months=30, seed=4)
    rng = np.random.default_rng(8)
    static = {**risk_set.static, "shift": rng.normal(0, 0.3, risk_set.n_loans)}
    return dataclasses.replace(risk_set, static=static), features


def _plain_rows(risk_set: RiskSet, features: FeatureTable) -> pd.DataFrame:
    """One row per loan and month at risk of default, built by a loop over stays."""
    out = []
    for s in range(risk_set.stay_loan.size):
        i, cause = int(risk_set.stay_loan[s]), int(risk_set.stay_cause[s])
        for age in range(int(risk_set.stay_entry[s]) + 1, int(risk_set.stay_exit[s]) + 1):
            last = age == risk_set.stay_exit[s]
            if last and cause == 2:
                continue
            at = int(risk_set.stay_origin[s]) + age - features.start
            out.append(
                {name: column[i] for name, column in risk_set.static.items()}
                | {
                    "age": age,
                    "rate": features.column("rate")[at],
                    "event": int(last and cause == 1),
                    "weight": risk_set.weight[s],
                }
            )
    return pd.DataFrame(out)


def _plain_design(rows: pd.DataFrame, labels: list[str]) -> Floats:
    made = {
        "intercept": np.ones(len(rows)),
        "age[linear]": rows["age"],
        "age[square]": rows["age"] ** 2,
        "ltv": rows["ltv"],
        "rate": rows["rate"],
    }
    for level in ("floating", "other"):
        made[f"product[{level}]"] = rows["product"] == level
        made[f"product[{level}]:rate"] = (rows["product"] == level) * rows["rate"]
    return np.column_stack([np.asarray(made[label], dtype=float) for label in labels])


@BOTH
@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("age_too", [False, True])
def test_against_direct_maximisation(small: Panel, link: str, backend: Backend, age_too: bool) -> None:
    risk_set, features = small
    spec = make_spec(*TERMS, {"offset": "shift"}, link=link, ridge=7.5, ridge_age=age_too)
    fit = fit_hazard(spec, risk_set, features, backend=backend)
    rows = _plain_rows(risk_set, features)
    labels = list(fit.params.index)
    x, event = _plain_design(rows, labels), rows["event"].to_numpy() == 1
    free = ["intercept"] if age_too else ["intercept", "age[linear]", "age[square]"]
    weights = np.array([0.0 if label in free else 7.5 for label in labels]) * x.var(axis=0)
    unit = 1.0 / np.maximum(x.std(axis=0), 0.1)

    def value(scaled: Floats) -> float:
        b = scaled * unit
        p = LINKS[link].probability(x @ b + rows["shift"].to_numpy())
        return -float(np.log(np.where(event, p, 1.0 - p)).sum()) + 0.5 * float(weights @ b**2)

    peer = minimize(
        value, fit.params.to_numpy() / unit * 0.9, method="BFGS", options={"gtol": 1e-6, "maxiter": 2000}
    )
    assert value(fit.params.to_numpy() / unit) <= peer.fun + 1e-9
    np.testing.assert_allclose(fit.params / unit, peer.x, atol=2e-4)
    np.testing.assert_allclose(fit.estimation.weights, weights, rtol=1e-9, atol=1e-12)
    assert fit.estimation.penalty == pytest.approx(
        -0.5 * float(weights @ fit.params.to_numpy() ** 2), rel=1e-9
    )
    assert -value(fit.params.to_numpy() / unit) == pytest.approx(fit.llf + fit.estimation.penalty, rel=1e-10)


@BOTH
def test_the_inverse_of_the_penalised_information_is_the_covariance(small: Panel, link: str) -> None:
    risk_set, features = small
    spec = make_spec(*TERMS, link=link, ridge=20.0, covariance="model")
    fit = fit_hazard(spec, risk_set, features)
    rows = _plain_rows(risk_set, features)
    x, b, event = (
        _plain_design(rows, list(fit.params.index)),
        fit.params.to_numpy(),
        rows["event"].to_numpy() == 1,
    )
    weights = np.diag(fit.estimation.weights)
    parts = {}
    for kind in ("observed", "expected"):
        pair = LINKS[link].event(x @ b, kind), LINKS[link].survive(x @ b, kind)
        parts[kind] = x.T @ (x * np.where(event, pair[0][2], pair[1][2])[:, None])
        np.testing.assert_allclose(
            fit.cov_params(f"model_{kind}"), np.linalg.inv(parts[kind] + weights), rtol=1e-6, atol=1e-11
        )
    observed = parts["observed"]
    direct = np.trace(np.linalg.solve(observed + weights, observed))
    assert fit.estimation.effective == pytest.approx(direct, rel=1e-7)
    assert fit.aic == pytest.approx(-2 * fit.llf + 2 * direct, rel=1e-9)
    assert 3.0 < direct < fit.design.k - 0.1


def test_no_ridge_changes_no_bit(panel: Panel) -> None:
    risk_set, features = panel
    one = fit_hazard(make_spec(*TERMS), risk_set, features)
    other = fit_hazard(make_spec(*TERMS, ridge=0.0), risk_set, features)
    assert one.to_json() == other.to_json()
    assert "estimation" not in one.to_json()
    assert "estimator:" not in one.summary()


def test_units_of_a_column_do_not_matter(small: Panel) -> None:
    risk_set, features = small
    scaled = dataclasses.replace(
        risk_set, static={**risk_set.static, "ltv": 1000.0 * risk_set.static["ltv"] - 3.0}
    )
    one, other = (fit_hazard(make_spec(*TERMS, ridge=30.0), r, features) for r in (risk_set, scaled))
    assert other.params["ltv"] * 1000.0 == pytest.approx(one.params["ltv"], rel=1e-6)
    assert other.llf == pytest.approx(one.llf, rel=1e-11)


def test_a_growing_ridge_takes_coefficients_to_zero_and_leaves_the_baseline(small: Panel) -> None:
    risk_set, features = small
    sizes = []
    for ridge in (0.0, 1.0, 100.0, 1e6):
        fit = fit_hazard(make_spec(*TERMS, ridge=ridge), risk_set, features)
        held = [c for c in fit.params.index if c != "intercept" and not c.startswith("age")]
        sizes.append(float(np.abs(fit.params[held]).max()))
    assert sizes == sorted(sizes, reverse=True)
    assert sizes[-1] < 1e-3
    alone = fit_hazard(make_spec({"age": "quadratic"}), risk_set, features)
    np.testing.assert_allclose(fit.params[list(alone.params.index)], alone.params, rtol=2e-3)
    assert fit.estimation.effective == pytest.approx(3.0, abs=1e-2)


@pytest.mark.parametrize("backend", ["rows", "factored"])
def test_variances_are_those_of_the_rows(small: Panel, backend: Backend) -> None:
    risk_set, features = small
    weighted = dataclasses.replace(
        risk_set, weight=np.random.default_rng(1).uniform(0.5, 3.0, risk_set.weight.size)
    )
    spec = make_spec(*TERMS, {"offset": "shift"})
    rows = cause_rows(weighted, "default", features, ("rate",))
    design = learn_design(spec, rows, features)
    data = hazard_data(design, rows, features, LINKS["cloglog"])
    found = column_variances(data, lambda d: choose_sums(d, backend=backend))
    plain = _plain_rows(weighted, features)
    x, w = _plain_design(plain, list(design.labels)), plain["weight"].to_numpy()
    mean = np.average(x, axis=0, weights=w)
    np.testing.assert_allclose(found, np.average((x - mean) ** 2, axis=0, weights=w), rtol=1e-9, atol=1e-12)


def test_effective_parameters_by_hand() -> None:
    """One coefficient of information 3 under a weight of 1: 3/4; a free one beside it counts in full."""
    information, weights = np.diag([4.0, 10.0]), np.array([1.0, 0.0])
    assert effective_parameters(information, weights, np.array([True, True])) == pytest.approx(1.75)
    assert effective_parameters(information, weights, np.array([True, False])) == pytest.approx(0.75)


def test_summary_and_saved_model_tell_it(small: Panel) -> None:
    risk_set, features = small
    fit = fit_hazard(make_spec(*TERMS, ridge=2.0), risk_set, features)
    assert "estimator:            ridge, 2 on 6 standardised coefficients" in fit.summary()
    assert f"effective number of coefficients {fit.estimation.effective:.2f} of 9" in fit.summary()
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.estimation == fit.estimation
    assert again.aic == fit.aic


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda e: e | {"weights": [1.0]}, "weights has 1 values for 9 coefficients"),
        (lambda e: e | {"strength": 1.0}, "unknown keys strength"),
        (lambda e: e | {"method": "lasso"}, "method is 'lasso'"),
        (lambda e: e | {"penalty": "much"}, "penalty holds 'much', expected a number"),
        (lambda e: e | {"at_bound": ["x"]}, "at_bound names x"),
        (lambda e: [e], "expected an object"),
    ],
)
def test_a_damaged_record_is_refused(small: Panel, change: Callable[[Any], Any], words: str) -> None:
    risk_set, features = small
    document = json.loads(fit_hazard(make_spec(*TERMS, ridge=2.0), risk_set, features).to_json())
    document["estimation"] = change(document["estimation"])
    with pytest.raises(TextError, match=words):
        sk.HazardFit.from_json(json.dumps(document))


# ---- levels without events


def _separated(n: int = 600) -> RiskSet:
    rng = np.random.default_rng(2)
    frame = pd.DataFrame(
        {
            "loan": np.arange(n), "age": rng.integers(1, 7, n), "x": rng.normal(size=n),
            "grade": rng.choice(["a", "b", "c"], n, p=[0.5, 0.2, 0.3]), "event": (rng.random(n) < 0.2).astype(int),
        }
    )  # fmt: skip
    frame.loc[frame["grade"] == "b", "event"] = 0
    frame.loc[frame["age"] == 4, "event"] = 0
    return sk.risk_set_from_rows(frame, loan="loan", age="age", event="event", static=["x", "grade"])


GRADE = {"loan": "grade", "as": "category"}


def test_a_ridge_keeps_a_level_without_events_finite() -> None:
    fit = fit_hazard(make_spec({"loan": "x"}, GRADE, ridge=1.0, when_separated="ridge"), _separated())
    assert -12.0 < fit.params["grade[b]"] < -1.0
    assert fit.estimation.separated[0].startswith("grade[b]: ")
    assert "kept finite by the estimator: grade[b]: " in fit.summary()


def test_a_stated_ridge_alone_does_not_accept_a_level_without_events() -> None:
    with pytest.raises(NumericError, match=r"grade\[b\].*when_separated"):
        fit_hazard(make_spec({"loan": "x"}, GRADE, ridge=1.0), _separated())


def test_a_ridge_that_is_not_on_the_baseline_cannot_carry_a_step() -> None:
    terms = ({"age": "steps"}, {"loan": "x"})
    with pytest.raises(NumericError, match=r"age\[4\]") as caught:
        fit_hazard(make_spec(*terms, ridge=1.0, when_separated="ridge"), _separated())
    assert "grade" not in str(caught.value)
    fit = fit_hazard(make_spec(*terms, ridge=1.0, ridge_age=True, when_separated="ridge"), _separated())
    assert np.isfinite(fit.params["age[4]"])


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({"when_separated": "ridge"}, "needs a ridge above 0"),
        ({"ridge_age": True}, "ridge_age needs a ridge above 0"),
        ({"ridge": 1.0, "ridge_age": True, "intercept": False}, "ridge_age needs an intercept"),
        ({"ridge": 1.0, "bias_reduction": "firth"}, "two penalties"),
        ({"ridge": 1.0, "when_separated": "firth"}, "two penalties"),
        ({"ridge": -1.0}, "greater than or equal to 0"),
        ({"ridge": float("inf")}, "finite"),
    ],
)
def test_options_that_make_no_sense(more: dict[str, object], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        make_spec({"age": "steps"}, **more)
