"""Standard errors against statsmodels on expanded data, and what they cover."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

import stresskit as sk
from stresskit.core.errors import UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.fit import fit_hazard
from tests.hazard.hazard_cases import feature_table, make_spec

Panel = tuple[RiskSet, FeatureTable]


def _expanded(risk_set: RiskSet, features: FeatureTable) -> pd.DataFrame:
    """Rows at risk of default as any GLM program would be given them."""
    length = risk_set.stay_exit - risk_set.stay_entry
    stay = np.repeat(np.arange(length.size), length)
    age = np.concatenate(
        [np.arange(a + 1, b + 1) for a, b in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    period = risk_set.stay_origin[stay] + age
    last = age == risk_set.stay_exit[stay]
    frame = pd.DataFrame(
        {
            "loan": risk_set.stay_loan[stay],
            "age": age,
            "period": period,
            "cause": np.where(last, risk_set.stay_cause[stay], 0),
            "weight": risk_set.weight[stay],
            **{k: v[risk_set.stay_loan[stay]] for k, v in risk_set.static.items()},
            **{name: features.column(name)[period - features.start] for name in features.names},
        }
    )
    return frame[frame["cause"] != 2].reset_index(drop=True)


@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_statsmodels_agrees_on_weights_offset_and_clusters(panel: Panel, link: str, backend: str) -> None:
    """statsmodels GLM; its factor (n-1)/(n-k) * G/(G-1) is replaced by our G/(G-1)."""
    risk_set, features = panel
    rng = np.random.default_rng(3)
    risk_set = dataclasses.replace(
        risk_set,
        weight=rng.integers(1, 3, risk_set.weight.size).astype(float),
        static={**risk_set.static, "shift": rng.normal(0, 0.4, risk_set.n_loans)},
    )
    spec = make_spec(
        {"age": "quadratic"}, {"loan": "ltv"}, {"loan": "product", "as": "category", "reference": "fixed"},
        {"macro": "rate"}, {"interaction": ("product", "rate")}, {"offset": "shift"}, link=link,
    )  # fmt: skip
    fit = fit_hazard(spec, risk_set, features, backend=backend)
    rows = _expanded(risk_set, features)
    x = pd.DataFrame(
        {"intercept": 1.0, "age[linear]": rows["age"], "age[square]": rows["age"] ** 2.0, "ltv": rows["ltv"]}
    )
    for level in ("floating", "other"):
        x[f"product[{level}]"] = (rows["product"] == level).astype(float)
    x["rate"] = rows["rate"]
    for level in ("floating", "other"):
        x[f"product[{level}]:rate"] = x[f"product[{level}]"] * rows["rate"]
    family = sm.families.Binomial(
        sm.families.links.CLogLog() if link == "cloglog" else sm.families.links.Logit()
    )
    model = sm.GLM(
        (rows["cause"] == 1).astype(float),
        x,
        family=family,
        offset=rows["shift"],
        freq_weights=rows["weight"],
    )
    plain = model.fit(tol=1e-12, maxiter=100)
    np.testing.assert_allclose(fit.params[x.columns], plain.params, rtol=1e-6, atol=1e-8)
    np.testing.assert_allclose(fit.standard_errors("model_expected")[x.columns], plain.bse, rtol=1e-6)
    assert fit.llf == pytest.approx(plain.llf, rel=1e-9)
    hessian = model.hessian(plain.params, observed=True)
    np.testing.assert_allclose(
        fit.standard_errors("model_observed")[x.columns], np.sqrt(np.diag(np.linalg.inv(-hessian))), rtol=1e-6
    )
    for kind, groups in (("loan", rows["loan"]), ("period", rows["period"])):
        bread = np.linalg.inv(-hessian)
        scores = pd.DataFrame(model.score_obs(plain.params)).groupby(groups.to_numpy()).sum().to_numpy()
        g = scores.shape[0]
        expected = g / (g - 1) * bread @ scores.T @ scores @ bread
        ours = fit.cov_params(kind).loc[x.columns, x.columns].to_numpy()
        np.testing.assert_allclose(ours, expected, rtol=1e-6, atol=1e-6 * np.abs(expected).max())


def test_statsmodels_cluster_option_gives_our_errors(panel: Panel) -> None:
    """Logit: expected and observed information are one, so cov_type="cluster" compares directly."""
    risk_set, features = panel
    fit = fit_hazard(
        make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, link="logit"), risk_set, features
    )
    rows = _expanded(risk_set, features)
    x = sm.add_constant(rows[["age", "ltv", "rate"]])
    for kind in ("loan", "period"):
        plain = sm.GLM((rows["cause"] == 1).astype(float), x, family=sm.families.Binomial()).fit(
            tol=1e-12, maxiter=100, cov_type="cluster",
            cov_kwds={"groups": rows[kind].to_numpy(), "use_correction": False},
        )  # fmt: skip
        g = rows[kind].nunique()
        np.testing.assert_allclose(fit.standard_errors(kind), plain.bse * np.sqrt(g / (g - 1)), rtol=1e-6)


def test_intervals_and_p_values_use_the_stated_distribution(panel: Panel) -> None:
    risk_set, features = panel
    fit = fit_hazard(make_spec({"age": "linear"}, {"macro": "rate"}), risk_set, features)
    assert fit.covariance_kind == "period"
    assert fit.df == fit.n_periods - 1 == 47
    t = stats.t(fit.df)
    interval = fit.conf_int(alpha=0.1)
    np.testing.assert_allclose(interval["upper"] - fit.params, t.ppf(0.95) * fit.bse, rtol=1e-12)
    np.testing.assert_allclose(fit.pvalues, 2 * t.sf(np.abs(fit.params / fit.bse)), rtol=1e-12)
    normal = fit.conf_int(kind="loan")
    np.testing.assert_allclose(
        normal["upper"] - fit.params, 1.959963984540054 * fit.standard_errors("loan"), rtol=1e-9
    )
    np.testing.assert_array_equal(fit.cov_params("model"), fit.cov_params("model_expected"))
    with pytest.raises(UsageError, match="model_observed"):
        fit.cov_params("robust")
    with pytest.raises(UsageError, match="alpha"):
        fit.conf_int(alpha=95)


def test_one_period_leaves_its_clustered_errors_empty_and_says_so() -> None:
    rng = np.random.default_rng(0)
    rows = pd.DataFrame(
        {"loan": np.arange(500), "age": 3, "x": rng.normal(size=500), "event": rng.random(500) < 0.2}
    )
    risk_set = sk.risk_set_from_rows(rows, loan="loan", age="age", event="event", static=["x"])
    fit = fit_hazard(make_spec({"loan": "x"}), risk_set)
    assert fit.n_periods == 1
    assert fit.bse.isna().all()
    assert fit.pvalues.isna().all()
    assert fit.standard_errors("loan").notna().all()
    assert "1 period" in fit.summary()
    assert sk.HazardFit.from_json(fit.to_json()).to_json() == fit.to_json()


@pytest.mark.slow
def test_period_clustered_intervals_cover_when_months_carry_shocks_and_naive_ones_do_not() -> None:
    """PITFALLS: independent standard errors on macro terms.

    100 months, 40,000 loans at risk in each, an unexplained monthly shock of sd 0.15 on the log hazard.
    400 draws: the Monte Carlo error of a 95 % coverage is 1.1 points.
    """
    draws, months, at_risk, beta = 400, 100, 40_000.0, 0.3
    rng = np.random.default_rng(2026)
    covered = {"period": 0, "model_expected": 0}
    ids = np.array([f"{i:04d}" for i in range(2 * months)], dtype=object)
    for _ in range(draws):
        macro = rng.normal(size=months)
        p = -np.expm1(-np.exp(-4.5 + beta * macro + rng.normal(0.0, 0.15, months)))
        events = np.maximum(rng.binomial(int(at_risk), p), 1).astype(float)
        period = np.repeat(np.arange(months), 2)
        risk_set = RiskSet(
            Frequency.MONTH, ("default",), ids, {}, np.arange(2 * months), period - 1, np.zeros(2 * months, dtype=np.int64),
            np.ones(2 * months, dtype=np.int64), np.tile([0, 1], months), np.column_stack([at_risk - events, events]).ravel(),
        )  # fmt: skip
        fit = fit_hazard(make_spec({"macro": "m"}), risk_set, feature_table(0, m=macro))
        for kind in covered:
            lower, upper = fit.conf_int(kind=kind).loc["m"]
            covered[kind] += int(lower <= beta <= upper)
    assert 0.915 < covered["period"] / draws < 0.985
    assert covered["model_expected"] / draws < 0.6
