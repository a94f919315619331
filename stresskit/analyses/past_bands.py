"""The model's own band around the defaults it expected of a past book, given who was still there."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.bands.coefficients import coefficient_spread
from stresskit.analyses.bands.predictive import predictive_draws
from stresskit.analyses.bands.shocks import PeriodShocks, period_shocks
from stresskit.analyses.bands.tallies import PeriodTally, period_slopes, period_tally
from stresskit.analyses.past import Past
from stresskit.analyses.said import Given
from stresskit.core.errors import NumericError
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]

#: Probability inside a band.
LEVEL = 0.9


@dataclass(frozen=True, slots=True, eq=False)
class PastBand:
    """Bands that hold LEVEL of what may come when the model is right.

    by_period  (2, H) of a period's defaults
    total      (2,) of their sum
    shock_sd   standard deviation of the log shock that loans of a period share, as the fit's own periods show it
    """

    by_period: Floats
    total: Floats
    shock_sd: float

    def inside(self, came: Floats) -> NDArray[np.bool_]:
        """(H,) whether what came lies in the band of its period."""
        return np.asarray((self.by_period[0] <= came) & (came <= self.by_period[1]))


def past_band(past: Past, said: Given) -> PastBand:
    """The bands of :mod:`stresskit.analyses.bands`, for counts: chance, shocks of periods with their memory, coefficients.

    All three are estimated on what was known at the cut-off. Seeded: the same past gives the same band.
    """
    fit, cause = past.fits["default"], "default"
    risk_set = past.setting.data.loans.risk_set
    found = {cause: period_tally(fit, risk_set, past.known)}
    shocks = _shocks(found)
    slopes = None if shocks is None else {cause: period_slopes(fit, risk_set, past.known)}
    expected = said.expected.sum(axis=0)
    jacobian = np.zeros((past.steps, fit.design.k)) if said.jacobian is None else said.jacobian
    drawn = predictive_draws(
        expected,
        shocks=shocks,
        slopes=np.divide(
            jacobian, expected[:, None], out=np.zeros_like(jacobian), where=expected[:, None] > 0.0
        ),
        factor=_factor({cause: fit}, found, shocks, slopes),
        at_risk=said.at_risk.sum(axis=0),
    )
    ends = [0.5 - LEVEL / 2.0, 0.5 + LEVEL / 2.0]
    return PastBand(
        np.quantile(drawn, ends, axis=0),
        np.quantile(drawn.sum(axis=1), ends),
        0.0 if shocks is None else float(shocks.sd[0]),
    )


def _shocks(found: Mapping[str, PeriodTally]) -> PeriodShocks | None:
    """None where the periods are too few to tell shocks from chance: the band then holds chance and coefficients alone."""
    try:
        return period_shocks(found)
    except NumericError:
        return None


def _factor(
    fits: Mapping[str, HazardFit],
    found: Mapping[str, PeriodTally],
    shocks: PeriodShocks | None,
    slopes: Mapping[str, Floats] | None,
) -> Floats:
    """Factor of the coefficients' covariance: clustered by period, or model-based where periods are too few for that."""
    try:
        return coefficient_spread(fits, found, shocks=shocks, slopes=slopes).factor
    except NumericError:
        return coefficient_spread(fits, found, "model").factor
