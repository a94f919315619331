"""What the history of a fit says by calendar period: events, expected events, and the scores of its coefficients."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits

from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import choose_sums
from stresskit.hazard.result import HazardFit
from stresskit.hazard.sums import hazard_data

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class PeriodTally:
    """One fit over the T calendar periods from its first at risk to its last, each array (T,) unless stated.

    first      ordinal of the first period
    at_risk, events, expected
    scores     (T, k) score of the coefficients
    used       coefficients by which a period's own level can be fitted: intercept and macro terms
    levels     (T, q) what these multiply: ones, and the macro features of the period
    """

    cause: str
    first: int
    at_risk: Floats
    events: Floats
    expected: Floats
    scores: Floats
    used: int
    levels: Floats

    @property
    def variance(self) -> Floats:
        """Binomial variance of the events, as if all rows of a period were alike; more alike, it would be smaller."""
        share = np.divide(
            self.expected, self.at_risk, out=np.zeros_like(self.expected), where=self.at_risk > 0.0
        )
        return np.asarray(self.expected * (1.0 - share))


def period_tally(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None) -> PeriodTally:
    """Sums by period of the rows of the fit's cause. Raises what the fit itself raises for columns or features."""
    with threadpool_limits(limits=1, user_api="blas"):
        rows = cause_rows(risk_set, fit.cause, features, fit.design.features)
        sums = choose_sums(hazard_data(fit.design, rows, features, fit.link))
        params = np.asarray(fit.coefficients)
        scores = sums.score_products(params).period_scores
        expected = sums.tally(params).by_period
    at_risk, events = rows.by_period()
    used = int((fit.design.index["feature"] >= 0).sum()) + 1
    levels = _levels(fit, features, rows.first_period, at_risk.size)
    return PeriodTally(fit.cause, rows.first_period, at_risk, events, expected, scores, used, levels)


def _levels(fit: HazardFit, features: FeatureTable | None, first: int, periods: int) -> Floats:
    """(T, q); a feature by level of a loan column gives a column for each level."""
    columns = [np.ones(periods)]
    if features is not None:
        start = first - features.start
        columns += [features.column(n)[start : start + periods] for n in fit.feature_names]
    return np.column_stack(columns)


def period_slopes(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None) -> Floats:
    """(T, k) derivative of a period's expected events by the coefficients, by central differences.

    It is also how a period's score answers to a shock that all its rows share, events being rare.
    """
    with threadpool_limits(limits=1, user_api="blas"):
        rows = cause_rows(risk_set, fit.cause, features, fit.design.features)
        sums = choose_sums(hazard_data(fit.design, rows, features, fit.link))
        params = np.asarray(fit.coefficients)
        sd = np.sqrt(np.nan_to_num(np.diag(np.asarray(fit.covariances.matrices["model_observed"]))))
        out = []
        for j in range(params.size):
            step = np.zeros(params.size)
            step[j] = 1e-3 * sd[j] or 1e-6
            more, less = sums.tally(params + step).by_period, sums.tally(params - step).by_period
            out.append((more - less) / (2.0 * step[j]))
    return np.column_stack(out)


def tallies(
    fits: Mapping[str, HazardFit], risk_set: RiskSet, features: FeatureTable | None
) -> dict[str, PeriodTally]:
    """One for each fit."""
    return {cause: period_tally(fit, risk_set, features) for cause, fit in fits.items()}
