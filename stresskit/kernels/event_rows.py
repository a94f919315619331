"""Rows with an event under a log hazard: log-likelihood, score and information on the linear predictor.

The formulas of :class:`stresskit.hazard.link.CLogLog`, one row after the other: events are few in every block, so
that a chain of array operations would mostly be calls. P = 1 - e^-x with x = e^eta; tests hold the two together.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean

Floats = NDArray[np.float64]

_LN2 = math.log(2.0)
#: Below this the series' next terms are nothing.
_SERIES = 0.1
#: Beyond this e^-x is 0 to double precision in all that it is added to.
_CERTAIN = 700.0


@compiled
def log_hazard(eta: Floats, weight: Floats, expected: bool) -> tuple[Floats, Floats, Floats]:
    """Weighted (log-likelihood, score, information), each (n,); ``expected`` information or the observed one."""
    n = eta.size
    loglik, score, information = np.empty(n), np.empty(n), np.empty(n)
    for i in range(n):
        loglik[i], score[i], information[i] = one(eta[i], weight[i], expected)
    return loglik, score, information


@lean
def one(eta: float, weight: float, expected: bool) -> tuple[float, float, float]:
    """:func:`log_hazard` of a single row."""
    x = math.exp(eta)
    if x < _SERIES:
        # log((1 - e^-x) / x) and x / (e^x - 1) by their series, to 1e-17
        s = x * x
        loglik = eta - 0.5 * x + s * (1 / 24 + s * (-1 / 2880 + s * (1 / 181440 - s / 9676800)))
        ratio = 1.0 - 0.5 * x + s * (1 / 12 + s * (-1 / 720 + s * (1 / 30240 - s / 1209600)))
    elif x > _CERTAIN:
        return 0.0, 0.0, 0.0
    else:
        ratio = x / math.expm1(x)
        loglik = math.log(-math.expm1(-x)) if x < _LN2 else math.log1p(-math.exp(-x))
    return weight * loglik, weight * ratio, weight * ratio * (x if expected else _excess(x))


@lean
def _excess(x: float) -> float:
    """x / (1 - e^-x) - 1 without cancellation near 0: there x/2 + sum B_2k x^2k / (2k)!."""
    if x >= 0.5:
        return x / -math.expm1(-x) - 1.0
    s = x * x
    high = -1 / 1209600 + s * (1 / 47900160 + s * (-691 / 1307674368000 + s / 74724249600))
    return 0.5 * x + s * (1 / 12 + s * (-1 / 720 + s * (1 / 30240 + s * high)))
