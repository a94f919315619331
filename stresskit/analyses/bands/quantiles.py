"""Quantiles of draws and how far they may be off because draws are finitely many.

The p-quantile of the distribution lies between the order statistics r and s of n draws with the probability that a
binomial (n, p) count lies in r .. s - 1, whatever the distribution (David & Nagaraja 2003, Order Statistics, 7.1). The
Monte Carlo error stated is half the distance between the two of a 95 % interval over 1.96.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import stats

Floats = NDArray[np.float64]


def quantile(draws: Floats, p: float) -> Floats:
    """(..,) p-quantile along the first axis, median-unbiased (Hyndman & Fan 1996, American Statistician 50, type 8)."""
    return np.asarray(np.quantile(draws, p, axis=0, method="median_unbiased"))


def order_interval(n: int, p: float, confidence: float = 0.95) -> tuple[int, int]:
    """Ranks (from 1) r <= s of the order statistics between which the p-quantile lies with that confidence at least.

    Held within 1 .. n: with few draws the interval cannot be had and is then too short.
    """
    tail = (1.0 - confidence) / 2.0
    low = int(stats.binom.ppf(tail, n, p))
    high = int(stats.binom.ppf(1.0 - tail, n, p)) + 1
    return max(low, 1), min(max(high, 1), n)


def monte_carlo_error(draws: Floats, p: float) -> Floats:
    """(..,) standard error of the p-quantile along the first axis, as the module says."""
    low, high = order_interval(draws.shape[0], p)
    ordered = np.sort(draws, axis=0)
    return np.asarray((ordered[high - 1] - ordered[low - 1]) / (2.0 * stats.norm.ppf(0.975)))
