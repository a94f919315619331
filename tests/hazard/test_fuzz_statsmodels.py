"""Random specifications against statsmodels on one row per loan and period; see fuzz_cases.py.

Coefficients, likelihood and both model covariances by statsmodels' GLM, clustered ones by its sandwich code with our
G/(G-1), two-way as Cameron, Gelbach and Miller (2011) add them up, Newey-West by a double loop over periods.
"""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray
from statsmodels.stats.sandwich_covariance import cov_cluster_2groups
from threadpoolctl import threadpool_limits

import stresskit as sk
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import Backend, choose_sums, fit_hazard
from stresskit.hazard.link import LINKS
from stresskit.hazard.moving_sums import MovingSums
from stresskit.hazard.sums import hazard_data
from tests.hazard.fuzz_cases import Case, Oracle, at_risk, draw, oracle, ridge_weights, with_hac_lag
from tests.hazard.hazard_cases import make_spec, simulated_panel

Floats = NDArray[np.float64]
SEEDS = range(12)


class Peer:
    """The estimate and its covariances by statsmodels; under a ridge by Newton's rule on its score and Hessian."""

    def __init__(self, case: Case) -> None:
        # With two threads each the small products of a test wait for one another.
        with threadpool_limits(1, user_api="blas"):
            self._fit(case)

    def _fit(self, case: Case) -> None:
        self.rows = at_risk(case)
        self.made: Oracle = oracle(case, self.rows)
        links = sm.families.links
        self.model = sm.GLM(
            self.rows["event"], self.made.x, freq_weights=self.rows["weight"].to_numpy(), offset=self.made.offset,
            family=sm.families.Binomial(links.CLogLog() if case.spec.link == "cloglog" else links.Logit()),
        )  # fmt: skip
        self.ridge = ridge_weights(case, self.made, self.rows)
        if case.spec.ridge:
            self.params = self._newton()
        else:
            self.result = self.model.fit(tol=1e-11, maxiter=100)
            # The deviance settles before the coefficients do: two more steps make them exact.
            self.params = self._newton(np.asarray(self.result.params), steps=2)
        self.llf = float(self.model.loglike(self.params, scale=1.0))
        self.scores = np.asarray(self.model.score_obs(self.params))
        self.covariances = self._covariances()

    def _newton(self, start: Floats | None = None, steps: int = 60) -> Floats:
        b = np.zeros(self.made.x.shape[1]) if start is None else start
        if start is None:
            plain = self.rows["weight"] @ self.rows["event"] / self.rows["weight"].sum()
            level = self.model.family.link(plain) - float(np.mean(self.made.offset))
            b[[self.made.owner[c] in ("intercept", self.made.carrier) for c in self.made.x]] = level
        for _ in range(steps):
            slope = self.model.score(b, scale=1.0) - self.ridge * b
            b = b + np.linalg.solve(self._information(b, observed=False), slope)
        return np.asarray(b)

    def _information(self, b: Floats, *, observed: bool) -> Floats:
        return np.asarray(np.diag(self.ridge) - self.model.hessian(b, scale=1.0, observed=observed))

    def _covariances(self) -> dict[str, Floats]:
        bread = np.linalg.inv(self._information(self.params, observed=True))
        loan, period = (pd.factorize(self.rows[n], sort=True)[0] for n in ("loan", "period"))
        both, by_loan, by_period = cov_cluster_2groups(
            (self.scores, bread), loan, period, use_correction=False
        )
        g, t, n = loan.max() + 1, period.max() + 1, len(loan)
        by_row = by_loan + by_period - both
        out = {
            "model_observed": bread,
            "model_expected": np.linalg.inv(self._information(self.params, observed=False)),
            "loan": g / (g - 1) * by_loan,
            "period": t / (t - 1) * by_period,
        }
        two_way = out["loan"] + out["period"] - n / (n - 1) * by_row
        out["two_way"] = _without_negative(two_way, np.sqrt(np.diag(out["model_expected"])))
        out["period_hac"] = self.newey_west(int(np.floor(4.0 * (t / 100.0) ** (2.0 / 9.0))))
        return out

    def newey_west(self, lag: int) -> Floats:
        """A double loop over calendar periods, those without rows included as zeros."""
        bread = np.linalg.inv(self._information(self.params, observed=True))
        period = self.rows["period"].to_numpy()
        score = {int(p): self.scores[period == p].sum(axis=0) for p in np.unique(period)}
        middle = np.zeros_like(bread)
        for p, s in score.items():
            for q, z in score.items():
                middle += max(0.0, 1.0 - abs(p - q) / (lag + 1.0)) * np.outer(s, z)
        t = len(score)
        return np.asarray(t / (t - 1) * bread @ middle @ bread)


def _without_negative(matrix: Floats, unit: Floats) -> Floats:
    """The nearest matrix without negative eigenvalues, in units of ``unit``."""
    values, vectors = np.linalg.eigh(matrix / np.outer(unit, unit))
    return np.asarray((vectors * np.maximum(values, 0.0)) @ vectors.T * np.outer(unit, unit))


def deviations(fit: sk.HazardFit, peer: Peer) -> dict[str, float]:
    """Largest of each: coefficients in standard errors, likelihood relative, covariances in their own errors."""
    labels = list(peer.made.x)
    error = np.sqrt(np.diag(peer.covariances["model_expected"]))
    out = {
        "coefficients": float(np.abs((fit.params[labels].to_numpy() - peer.params) / error).max()),
        "likelihood": abs(fit.llf / peer.llf - 1.0),
    }
    for kind, wanted in peer.covariances.items():
        ours = fit.cov_params(kind).loc[labels, labels].to_numpy()  # type: ignore[arg-type]
        own = np.sqrt(np.diag(wanted))
        out[kind] = float((np.abs(ours - wanted) / np.outer(own, own)).max())
    return out


MET = {
    "cloglog", "logit", "default", "payoff", "ones", "counts", "fractions that change", "late entry", "gaps",
    "holes in the macro data", "no intercept", "no age", "age spline", "age steps", "age linear", "age log", "age quadratic",
    "loan none", "loan standardise", "loan log", "macro none", "macro standardise", "keyed", "offset", "moving drift",
    "moving use", "moving state", "category product", "category region", "category state", "age x category", "age x macro",
    "age x number", "category x category", "category x macro", "category x number", "macro x number", "macro x macro",
    "category x macro x number", "use in a product", "state in a product", "prices in a product", "ridge", "ridge on age",
}  # fmt: skip


def test_the_seeds_meet_every_kind_of_term() -> None:
    assert set().union(*(draw(seed).features_met() for seed in SEEDS)) >= MET


# Of weighted scores statsmodels only warns that it has tested few; they are also checked from its pieces above.
@pytest.mark.filterwarnings("ignore:cov_type not fully supported with freq_weights")
@pytest.mark.parametrize("seed", SEEDS)
def test_a_random_hazard_is_that_of_statsmodels(seed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    case = draw(seed)
    peer = Peer(case)
    # so that books as small as these go through the sums of large ones
    monkeypatch.setattr("stresskit.hazard.factored.LARGEST_SHARE", 1.0)
    for backend in ("rows", "auto"):
        fit = _fit(case, backend=backend, threads=1 + seed % 2, block_rows=700)
        found = deviations(fit, peer)
        assert found.pop("likelihood") < 1e-9, backend
        assert max(found.values()) < 1e-6, (backend, found)
        rows = peer.rows
        facts = fit.facts.n_rows, fit.n_loans, fit.n_periods
        assert facts == (len(rows), rows["loan"].nunique(), rows["period"].nunique())
        assert fit.nobs == pytest.approx(rows["weight"].sum(), rel=1e-12)
        assert fit.n_events == pytest.approx(float(rows["weight"] @ rows["event"]), rel=1e-12)
    if not case.spec.ridge:
        _close_to_statsmodels_own(fit, peer)
    lag = 1 + seed
    stated = _fit(dataclasses.replace(case, spec=with_hac_lag(case.spec, lag)), backend="auto")
    labels, wanted = list(peer.made.x), peer.newey_west(lag)
    own = np.sqrt(np.diag(wanted))
    ours = stated.cov_params("period_hac").loc[labels, labels].to_numpy()
    assert float((np.abs(ours - wanted) / np.outer(own, own)).max()) < 1e-6


def _fit(case: Case, **more: Any) -> sk.HazardFit:
    return fit_hazard(case.spec, case.risk_set, case.features, cause=case.cause, **more)


def _close_to_statsmodels_own(fit: sk.HazardFit, peer: Peer) -> None:
    """Its cov_type="cluster" with its own factor G/(G-1) (n-1)/(n-k), and its standard errors as they come."""
    n, k = peer.made.x.shape
    labels = list(peer.made.x)
    errors = fit.standard_errors("model_expected")[labels]
    np.testing.assert_allclose(errors, peer.result.bse, rtol=1e-6)
    for kind in ("loan", "period"):
        groups = pd.factorize(peer.rows[kind])[0]
        again = peer.model.fit(
            start_params=peer.params, tol=1e-11, maxiter=100, cov_type="cluster", cov_kwds={"groups": groups}
        )
        wanted = np.asarray(again.bse) * np.sqrt((n - k) / (n - 1))
        np.testing.assert_allclose(fit.standard_errors(kind)[labels], wanted, rtol=1e-6)  # type: ignore[arg-type]


# ---- what such draws have found


def test_an_offset_that_moves_is_met_by_the_sums_that_are_chosen() -> None:
    """It is no column, and a design without moving columns once went to sums that know no moving offset."""
    risk_set, features = simulated_panel(loans=4000, months=24, seed=3)
    drift = np.random.default_rng(1).normal(0.0, 0.5, risk_set.n_rows)
    moving = dataclasses.replace(risk_set, moving={"drift": drift})
    spec = make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, {"offset": "drift"})
    plain, auto = (fit_hazard(spec, moving, features, backend=b) for b in ("rows", "auto"))
    data = hazard_data(plain.design, cause_rows(moving, "default"), features, LINKS["cloglog"])
    assert isinstance(choose_sums(data), MovingSums)
    assert auto.llf == pytest.approx(plain.llf, rel=1e-12)
    np.testing.assert_allclose(auto.params, plain.params, rtol=1e-7)
    without = fit_hazard(make_spec(*spec.terms[:-1]), moving, features)
    assert abs(without.llf - plain.llf) > 1.0


@pytest.mark.parametrize("transform", ["none", "standardise"])
def test_periods_without_rows_are_none_whatever_the_weights(transform: str) -> None:
    """Running sums of 0.1, 0.3 ... come back to 1e-14, not to 0, in a month that a hole in the macro data empties."""
    risk_set, features = simulated_panel(months=36, seed=6)
    values = features.values.copy()
    values[20:22, features.names.index("rate")] = np.nan
    holed = dataclasses.replace(features, values=values)
    uneven = np.random.default_rng(2).uniform(0.1, 2.0, risk_set.weight.size)
    weighted = dataclasses.replace(risk_set, weight=uneven)
    rows = cause_rows(weighted, "default", holed, ("rate",))
    at_risk = rows.by_period()[0]
    empty = np.zeros(at_risk.size, dtype=bool)
    empty[[features.start + i - rows.first_period for i in (20, 21)]] = True
    np.testing.assert_array_equal(at_risk == 0.0, empty)
    np.testing.assert_array_equal(rows.periods_seen(), ~empty)
    fit = fit_hazard(make_spec({"loan": "ltv"}, {"macro": "rate", "transform": transform}), weighted, holed)
    assert fit.n_periods == 34
    assert fit.bse.notna().all()


@pytest.mark.parametrize("backend", ["rows", "factored"])
def test_the_ridge_weighs_columns_behind_an_offset(backend: Backend) -> None:
    """Its variances come from a design without offsets, and categories are known by their place in the list."""
    risk_set, features = simulated_panel(seed=7)
    static = {**risk_set.static, "shift": np.random.default_rng(4).normal(0.0, 0.3, risk_set.n_loans)}
    terms = ({"loan": "ltv"}, {"loan": "product", "as": "category", "reference": "fixed"})
    spec = make_spec({"offset": "shift"}, *terms, ridge=5.0)
    fit = fit_hazard(spec, dataclasses.replace(risk_set, static=static), features, backend=backend)
    length = np.where(risk_set.stay_cause == 2, -1, 0) + risk_set.stay_exit - risk_set.stay_entry
    loan = np.repeat(risk_set.stay_loan, length)
    variance = {"ltv": static["ltv"][loan].var()}
    variance |= {f"product[{v}]": (static["product"][loan] == v).var() for v in ("floating", "other")}
    wanted = [0.0, *(5.0 * variance[label] for label in fit.params.index[1:])]
    np.testing.assert_allclose(fit.estimation.weights, wanted, rtol=1e-9)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_a_design_of_loan_columns_alone_with_loans_that_come_back(link: str) -> None:
    """No intercept, no age, no macro feature: no column of cells, which the scores of several stays must bear."""
    risk_set, _ = simulated_panel(seed=8, link=link)
    parts = [risk_set.stay_exit - risk_set.stay_entry > 4, np.ones(risk_set.stay_loan.size, dtype=bool)]
    stay = np.concatenate([np.flatnonzero(p) for p in parts])
    first = np.arange(stay.size) < parts[0].sum()
    order = np.lexsort((~first, stay))
    stay, first = stay[order], first[order]
    twice = parts[0][stay]
    middle = risk_set.stay_entry[stay] + 2
    again = dataclasses.replace(
        risk_set,
        stay_loan=risk_set.stay_loan[stay], stay_origin=risk_set.stay_origin[stay], weight=risk_set.weight[stay],
        stay_entry=np.where(twice & ~first, middle + 1, risk_set.stay_entry[stay]),
        stay_exit=np.where(first, middle, risk_set.stay_exit[stay]),
        stay_cause=np.where(first, 0, risk_set.stay_cause[stay]),
    )  # fmt: skip
    terms = ({"loan": "product", "as": "category"}, {"loan": "ltv"})
    spec = make_spec(*terms, intercept=False, link=link, covariance="two_way")
    rows, factored = (fit_hazard(spec, again, backend=b) for b in ("rows", "factored"))
    assert factored.llf == pytest.approx(rows.llf, rel=1e-11)
    for kind in ("loan", "period", "two_way", "model_expected"):
        np.testing.assert_allclose(factored.cov_params(kind), rows.cov_params(kind), rtol=1e-7, atol=1e-12)
