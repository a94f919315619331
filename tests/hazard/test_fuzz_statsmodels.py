"""Random specifications against statsmodels on one row per loan and period; see fuzz_cases.py.

Coefficients, likelihood and both model covariances by statsmodels' GLM, clustered ones by its sandwich code with our
G/(G-1), two-way as Cameron, Gelbach and Miller (2011) add them up, Newey-West by a double loop over periods.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray
from statsmodels.stats.sandwich_covariance import cov_cluster, cov_cluster_2groups

import stresskit as sk
from stresskit.hazard.fit import fit_hazard
from tests.hazard.fuzz_cases import Case, Oracle, at_risk, draw, oracle, ridge_weights, with_hac_lag

Floats = NDArray[np.float64]
SEEDS = range(12)


class Peer:
    """The estimate and its covariances by statsmodels; under a ridge by Newton's rule on its score and Hessian."""

    def __init__(self, case: Case) -> None:
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
            self.result = self.model.fit(tol=1e-13, maxiter=200)
            # Deviance settles before the coefficients do: one more step, of order 1e-9 errors, makes them exact.
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
