"""Responses to macro features against predictions of the same fit and errors by hand."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.values import FeatureTable, Portfolio, RiskSet
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.macro_response import macro_response
from stresskit.runs.responses import COLUMNS, response_table
from tests.hazard.hazard_cases import make_spec
from tests.hazard.keyed_cases import regional_panel

Panel = tuple[RiskSet, FeatureTable]
TERMS = (
    {"age": "spline", "knots": 3},
    {"loan": "ltv", "transform": "standardise"},
    {"loan": "product", "as": "category"},
    {"macro": "rate", "transform": "standardise"},
    {"macro": "gap"},
    {"interaction": ("product", "gap")},
    {"interaction": ("ltv", "rate")},
)
AT = {"rate": 0.3, "gap": -0.2}
VALUES = np.array([-1.0, -0.2, 0.4, 1.5])


@pytest.fixture(scope="module", params=["cloglog", "logit"])
def fitted(request: pytest.FixtureRequest, panel: Panel) -> tuple[sk.HazardFit, RiskSet]:
    return fit_hazard(make_spec(*TERMS, link=request.param), *panel), panel[0]


def eta(fit: sk.HazardFit, risk_set: RiskSet, **features: float) -> np.ndarray:
    """Linear predictor of every loan at age 7, back from the probability that is predicted."""
    frame = pd.DataFrame(dict(risk_set.static)).assign(age=7, **{**AT, **features})
    p = fit.predict(frame).to_numpy()
    out: np.ndarray = np.log(-np.log1p(-p)) if fit.spec.link == "cloglog" else np.log(p / (1 - p))
    return out


@pytest.mark.parametrize("feature", ["rate", "gap"])
def test_mean_and_spread_over_loans_are_those_of_the_predictions(
    fitted: tuple[sk.HazardFit, RiskSet], feature: str
) -> None:
    fit, risk_set = fitted
    u = fit.loan_part(risk_set.static, risk_set.n_loans).U
    found = macro_response(fit, feature, VALUES, at=AT, age=7, loans=u)
    for k, value in enumerate(VALUES):
        gap = eta(fit, risk_set, **{feature: value}) - eta(fit, risk_set)
        assert found.mean[k] == pytest.approx(gap.mean(), abs=1e-9)
        assert found.least[k] == pytest.approx(gap.min(), abs=1e-9)
        assert found.most[k] == pytest.approx(gap.max(), abs=1e-9)
    if feature == "gap":
        assert found.mean[1] == found.se[1] == 0.0
    assert found.most[-1] > found.least[-1]


def test_the_error_is_that_of_the_sum_of_coefficients_that_the_average_loan_reads(
    fitted: tuple[sk.HazardFit, RiskSet],
) -> None:
    fit, risk_set = fitted
    u = fit.loan_part(risk_set.static, risk_set.n_loans).U
    found = macro_response(fit, "gap", VALUES, at=AT, age=7, loans=u)
    covariance = fit.cov_params()
    weights = pd.Series(0.0, covariance.index)
    weights["gap"] = 1.0
    for label in covariance.index:
        if label.endswith(":gap"):
            level = label.split("[")[1].split("]")[0]
            weights[label] = float((risk_set.static["product"] == level).mean())
    assert (weights > 0).sum() == 3
    error = float(np.sqrt(weights @ covariance @ weights))
    np.testing.assert_allclose(found.se, np.abs(VALUES - AT["gap"]) * error, rtol=1e-9)


def test_the_order_of_loans_moves_no_bit(fitted: tuple[sk.HazardFit, RiskSet]) -> None:
    fit, risk_set = fitted
    u = fit.loan_part(risk_set.static, risk_set.n_loans).U
    turned = u[np.random.default_rng(4).permutation(u.shape[0])]
    one, two = (macro_response(fit, "rate", VALUES, at=AT, age=7, loans=x) for x in (u, turned))
    for name in ("mean", "se", "least", "most"):
        np.testing.assert_array_equal(getattr(one, name), getattr(two, name))


def test_a_feature_of_a_region_is_averaged_over_the_loans_of_that_region() -> None:
    risk_set, features = regional_panel("cloglog")
    spec = make_spec(
        {"age": "linear"},
        {"loan": "product", "as": "category"},
        {"macro": "prices"},
        {"interaction": ("product", "prices")},
    )
    fit = fit_hazard(spec, risk_set, features)
    at = dict.fromkeys(fit.feature_names, 0.1)
    u = fit.loan_part(risk_set.static, risk_set.n_loans).U
    mine = risk_set.static["region"] == "south"
    column = next(n for n in fit.feature_names if "south" in n)
    found = macro_response(fit, column, np.array([1.1]), at=at, age=3, loans=u)
    slopes = dict.fromkeys(np.unique(risk_set.static["product"]), fit.params["prices"])
    for label in fit.params.index:
        if label.startswith("product[") and label.endswith(":prices"):
            slopes[label.split("[")[1].split("]")[0]] += fit.params[label]
    expected = np.array([slopes[p] for p in risk_set.static["product"][mine]])
    assert found.mean[0] == pytest.approx(expected.mean(), rel=1e-9)
    assert (found.least[0], found.most[0]) == pytest.approx((expected.min(), expected.max()), rel=1e-9)


def test_the_table_covers_range_reference_and_scenarios(fitted: tuple[sk.HazardFit, RiskSet]) -> None:
    fit, risk_set = fitted
    n = risk_set.n_loans
    portfolio = Portfolio(
        frequency=risk_set.frequency, as_of=500, loan_ids=np.array([f"L{k:06d}" for k in range(n)], dtype=object),
        age=np.full(n, 7), remaining=np.full(n, 5), balance=np.ones(n), rate=np.zeros(n), static=dict(risk_set.static),
    )  # fmt: skip
    rows = [("history", name, "2000-01", AT[name]) for name in AT] + [
        ("slump", "gap", "2000-02", 99.0),
        ("slump", "rate", "2000-02", 0.0),
    ]
    frame = pd.DataFrame(rows, columns=["scenario", "feature", "period", "value"])
    table = response_table({"default": fit}, portfolio, frame, of_loans=frozenset({"default"}))
    assert tuple(table.columns) == COLUMNS
    for name, mine in table.groupby("feature"):
        low, high = fit.feature_ranges[str(name)]
        assert {low, high, AT[str(name)]} <= set(mine["value"])
        assert mine["value"].is_monotonic_increasing
        at_reference = mine[mine["value"] == AT[str(name)]].iloc[0]
        assert at_reference[["factor", "lower", "upper", "least", "most"]].tolist() == [1.0] * 5
    assert table.loc[table["feature"] == "gap", "value"].max() == 99.0
    assert ((table["lower"] <= table["factor"]) & (table["factor"] <= table["upper"])).all()
    # a case of other causes has no loans of the book: the reference levels are taken
    other = response_table({"default": fit}, portfolio, frame, of_loans=frozenset())
    slope = float(fit.params["gap"])
    far = other[(other["feature"] == "gap") & (other["value"] == 99.0)].iloc[0]
    assert far["factor"] == pytest.approx(np.exp(slope * (99.0 - AT["gap"])), rel=1e-9)
    assert set(other["over"]) == {"reference"}


def test_without_macro_features_the_table_is_empty(panel: Panel) -> None:
    fit = fit_hazard(make_spec({"age": "linear"}), panel[0], None)
    frame = pd.DataFrame({"scenario": [], "feature": [], "period": [], "value": []})
    portfolio = Portfolio(
        frequency=panel[0].frequency, as_of=500, loan_ids=np.array(["a"], dtype=object), age=np.array([1]),
        remaining=np.array([5]), balance=np.ones(1), rate=np.zeros(1), static={},
    )  # fmt: skip
    table = response_table({"default": fit}, portfolio, frame, of_loans=frozenset({"default"}))
    assert list(table.columns) == list(COLUMNS)
    assert table.empty
