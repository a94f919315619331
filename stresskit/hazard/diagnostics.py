"""Observed against fitted, by age and by calendar period."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats
from threadpoolctl import threadpool_limits

from stresskit.core.period import format_period
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.fit import choose_sums
from stresskit.hazard.result import HazardFit
from stresskit.hazard.sums import Tally, hazard_data

Floats = NDArray[np.float64]


def hazard_by_age(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None) -> pd.DataFrame:
    """cause, age, at_risk, events, observed, lower, upper, fitted: one row per age with rows at risk.

    observed  events / at_risk, with its 95 % Jeffreys interval (Brown, Cai and DasGupta 2001, Statistical
              Science 16): quantiles of Beta(events + 1/2, at_risk - events + 1/2), 0 and 1 at the edges
    fitted    expected events / at_risk: the model averaged over the loans that were there, not the
              hazard of an average loan
    """
    rows, tally = _expected(fit, risk_set, features)
    at_risk, events = rows.by_age()
    age = np.flatnonzero(at_risk > 0)
    n, d = at_risk[age], events[age]
    lower, upper = jeffreys(d, n)
    return pd.DataFrame(
        {
            "cause": fit.cause,
            "age": age,
            "at_risk": n,
            "events": d,
            "observed": d / n,
            "lower": lower,
            "upper": upper,
            "fitted": tally.by_age[age] / n,
        }
    )


def actual_expected(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None) -> pd.DataFrame:
    """cause, period, at_risk, events, expected: one row per calendar period with rows at risk."""
    rows, tally = _expected(fit, risk_set, features)
    at_risk, events = rows.by_period()
    at = np.flatnonzero(at_risk > 0)
    return pd.DataFrame(
        {
            "cause": fit.cause,
            "period": [format_period(rows.first_period + int(p), risk_set.frequency) for p in at],
            "at_risk": at_risk[at],
            "events": events[at],
            "expected": tally.by_period[at],
        }
    )


def jeffreys(events: Floats, trials: Floats, level: float = 0.95) -> tuple[Floats, Floats]:
    """Jeffreys interval of a binomial share; lower is 0 without events, upper 1 without survivors."""
    tail = (1.0 - level) / 2.0
    low = stats.beta.ppf(tail, events + 0.5, trials - events + 0.5)
    high = stats.beta.ppf(1.0 - tail, events + 0.5, trials - events + 0.5)
    return np.where(events <= 0.0, 0.0, low), np.where(events >= trials, 1.0, high)


def _expected(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None) -> tuple[CauseRows, Tally]:
    rows = cause_rows(risk_set, fit.cause, features, fit.design.features)
    with threadpool_limits(limits=1, user_api="blas"):
        return rows, choose_sums(hazard_data(fit.design, rows, features, fit.link)).tally(fit.coefficients)
