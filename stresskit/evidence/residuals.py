"""Are a fit's calendar-period residuals free of memory? An omitted macro term leaves them autocorrelated."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats
from statsmodels.stats.diagnostic import acorr_ljungbox
from statsmodels.tsa.stattools import acf

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.groups import Grouped, by_period, period_columns, shock_variance, tally
from stresskit.evidence.rows import FitRows, fit_rows
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]

LAGS = 12
#: Fewer periods than this say nothing about memory.
FEWEST_PERIODS = 16


def residual_autocorrelation(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None, *, lags: int = LAGS
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """(residuals by period, autocorrelation by lag).

    residuals  cause, period, events, expected, residual, deviance_residual
               residual: (events - expected) / sd, sd with the binomial variance and the periods' shocks
               NaN where the fit leaves nothing to chance, which ends a run
               deviance_residual: signed root of 2 (d log(d/e) - (d - e)), of the period's count
    memory     cause, lag, autocorrelation, of_deviance, band, ljung_box, p_value, periods
               of_deviance: the same of the deviance residuals, which know no shocks; the test is on the others
               band: 1.96 / sqrt(periods), both sides; ljung_box: of lags 1 .. lag (Ljung and Box 1978,
               Biometrika 65), chi-square with lag degrees of freedom, none taken off because the
               terms of a fit are not lagged residuals

    The longest unbroken run of periods is used. Raises NumericError for fewer than FEWEST_PERIODS.
    """
    rows = fit_rows(fit, risk_set, features)
    period = tally(rows, [by_period(rows)]).groups["period"]
    return residual_tables(rows, period, shock_variance(period, period_columns(rows)), lags=lags)


def residual_tables(
    rows: FitRows, period: Grouped, shock: float, *, lags: int = LAGS
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """The tables of :func:`residual_autocorrelation` from the sums by period."""
    d, e = period.events, period.expected
    z = np.full(d.size, np.nan)
    np.divide(d - e, np.sqrt(period.variance + shock * e**2), out=z, where=~period.certain)
    with np.errstate(divide="ignore", invalid="ignore"):
        deviance = 2.0 * (np.where(d > 0.0, d * np.log(d / e), 0.0) - (d - e))
    residuals = pd.DataFrame(
        {
            "cause": rows.fit.cause,
            "period": list(period.labels),
            "events": d,
            "expected": e,
            "residual": z,
            "deviance_residual": np.where(
                period.certain, np.nan, np.sign(d - e) * np.sqrt(np.maximum(deviance, 0.0))
            ),
        }
    )
    known = np.flatnonzero(~period.certain)
    places = np.flatnonzero(rows.rows.by_period()[0] > 0.0)
    at = known[longest_run(places[known])]
    z = z[at]
    if z.size and not np.ptp(z) > 0.0:
        raise NumericError("the residuals of calendar periods do not vary, so they have no autocorrelation")
    if z.size < FEWEST_PERIODS:
        raise NumericError(
            f"{z.size} calendar periods in a row are too few to judge memory in residuals; {FEWEST_PERIODS} are needed"
        )
    use = min(lags, z.size // 3)
    test = acorr_ljungbox(z, lags=list(range(1, use + 1)))
    memory = pd.DataFrame(
        {
            "cause": rows.fit.cause,
            "lag": np.arange(1, use + 1),
            "autocorrelation": acf(z, nlags=use, fft=False)[1:],
            "of_deviance": acf(residuals["deviance_residual"].to_numpy()[at], nlags=use, fft=False)[1:],
            "band": stats.norm.ppf(0.975) / np.sqrt(z.size),
            "ljung_box": test["lb_stat"].to_numpy(),
            "p_value": test["lb_pvalue"].to_numpy(),
            "periods": z.size,
        }
    )
    return residuals, memory


def longest_run(places: NDArray[np.intp]) -> slice:
    """Part of ``places`` (rising) that is the longest run of consecutive numbers."""
    cuts = np.concatenate(([0], np.flatnonzero(np.diff(places) != 1) + 1, [places.size]))
    at = int(np.argmax(np.diff(cuts)))
    return slice(int(cuts[at]), int(cuts[at + 1]))
