"""Predictive bands of event counts: chance, shocks of periods, and coefficients that are estimates.

For whoever compares counts that came with those a model expected (a backtest, a monitoring report).
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.bands.shocks import PeriodShocks
from stresskit.core.errors import UsageError

Floats = NDArray[np.float64]


def predictive_quantiles(
    expected: Floats,
    probabilities: Sequence[float] = (0.05, 0.5, 0.95),
    *,
    shocks: PeriodShocks | None = None,
    cause: str = "default",
    slopes: Floats | None = None,
    factor: Floats | None = None,
    at_risk: Floats | None = None,
    draws: int = 4000,
    seed: int = 0,
) -> Floats:
    """(P, .., H) quantiles of the numbers of events that may come where a model expects ``expected`` (.., H).

    The last axis is calendar periods, one after the other: a shock of a period is common to all that stands before it
    (segments, ages). Ask for sums (a year, the whole book) by :func:`predictive_draws`, of which quantiles of sums are taken.

    shocks   as :func:`stresskit.analyses.bands.shocks.period_shocks` finds them; None: periods differ by chance alone
    slopes   (.., H, k) derivative of ln expected by the coefficients, with factor (k, m): covariance = factor @ factor.T
    at_risk  (.., H) numbers at risk, to the nearest whole one: counts are then binomial instead of Poisson
    Seeded: the same call gives the same numbers.
    """
    found = predictive_draws(
        expected,
        shocks=shocks,
        cause=cause,
        slopes=slopes,
        factor=factor,
        at_risk=at_risk,
        draws=draws,
        seed=seed,
    )
    return np.asarray(np.quantile(found, list(probabilities), axis=0))


def predictive_draws(
    expected: Floats,
    *,
    shocks: PeriodShocks | None = None,
    cause: str = "default",
    slopes: Floats | None = None,
    factor: Floats | None = None,
    at_risk: Floats | None = None,
    draws: int = 4000,
    seed: int = 0,
) -> Floats:
    """(draws, .., H) counts; arguments as :func:`predictive_quantiles`.

    Raises UsageError for counts expected that are no numbers, and for slopes without factor.
    """
    mean = np.asarray(expected, dtype=np.float64)
    if not np.isfinite(mean).all() or (mean < 0.0).any():
        raise UsageError("expected counts must be finite and not negative")
    if (slopes is None) != (factor is None):
        raise UsageError(
            "slopes and factor belong together: how expected counts move with coefficients, and how those vary"
        )
    rng = np.random.default_rng([seed, 5])
    steps = mean.shape[-1]
    log_rate = np.zeros((draws, *mean.shape))
    if shocks is not None:
        if cause not in shocks.causes:
            raise UsageError(f"no shocks of {cause!r}; there are those of {', '.join(shocks.causes)}")
        u = shocks.paths(rng.standard_normal((draws, steps, len(shocks.causes))))[
            :, shocks.causes.index(cause)
        ]
        log_rate += u.reshape(draws, *([1] * (mean.ndim - 1)), steps)
    if slopes is not None and factor is not None:
        move = np.einsum("km,dm->dk", factor, rng.standard_normal((draws, factor.shape[1])))
        log_rate += np.einsum("...k,dk->d...", slopes, move)
    rate = mean * np.exp(log_rate)
    if at_risk is None:
        return rng.poisson(rate).astype(np.float64)
    there = np.asarray(at_risk, dtype=np.float64)
    # Where counts of loans are not whole the nearest number is drawn from, of the same mean; some are there, so at least one.
    number = np.where(there > 0.0, np.maximum(np.round(there), 1.0), 0.0)
    share = np.divide(rate, number, out=np.zeros_like(rate), where=number > 0.0)
    return rng.binomial(number.astype(np.int64), np.clip(share, 0.0, 1.0)).astype(np.float64)
