"""The model's own band around the defaults it expected of a past book, given who was still there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from stresskit.analyses.past import Past
from stresskit.analyses.said import Given
from stresskit.evidence.groups import by_period, period_columns, shock_variance, tally
from stresskit.evidence.rows import fit_rows

Floats = NDArray[np.float64]

#: Probability inside a band.
LEVEL = 0.9


@dataclass(frozen=True, slots=True, eq=False)
class PastBand:
    """Bands that hold LEVEL of what may come when the model is right.

    by_period  (2, H) of a period's defaults
    total      (2,) of their sum
    shock_sd   relative standard deviation of the shock that loans of a period share, as the fit's own periods show it
    """

    by_period: Floats
    total: Floats
    shock_sd: float

    def inside(self, came: Floats) -> NDArray[np.bool_]:
        """(H,) whether what came lies in the band of its period."""
        return np.asarray((self.by_period[0] <= came) & (came <= self.by_period[1]))


def past_band(past: Past, said: Given) -> PastBand:
    """Normal bands of three parts: chance (binomial), the shock of a period, and the error of the coefficients.

    The shock's variance is that of the periods the fit was made on (Breslow 1984), and shocks are taken as independent
    between periods, so the band of the sum is too narrow where they last. Errors of coefficients by the delta method,
    clustered by period.
    """
    fit = past.fits["default"]
    own = fit_rows(fit, past.setting.data.loans.risk_set, past.known)
    shock = shock_variance(tally(own, [by_period(own)]).groups["period"], period_columns(own))
    expected = said.expected.sum(axis=0)
    jacobian = np.zeros((past.steps, fit.design.k)) if said.jacobian is None else said.jacobian
    covariance = fit.cov_params("period").to_numpy()
    if not np.isfinite(covariance).all():
        covariance = fit.cov_params("model_observed").to_numpy()
    chance = said.variance + shock * expected**2
    error = np.einsum("hk,kl,hl->h", jacobian, covariance, jacobian)
    whole = jacobian.sum(axis=0)
    z = float(stats.norm.ppf(0.5 + LEVEL / 2.0))
    half = z * np.sqrt(chance + error)
    total = z * float(np.sqrt(chance.sum() + whole @ covariance @ whole))
    middle = float(expected.sum())
    return PastBand(
        np.stack([np.maximum(expected - half, 0.0), expected + half]),
        np.array([max(middle - total, 0.0), middle + total]),
        float(np.sqrt(shock)),
    )
