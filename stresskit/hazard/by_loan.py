"""Expected events of each stay and their variance from running sums, without a row."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.tracks import Tracks
from stresskit.kernels.cohorts import running

Floats = NDArray[np.float64]

#: Terms of the power series are added until they are below this share of the first.
SERIES_ERROR = 1e-16


def by_series(exp_s: Floats, exp_z: Floats, tracks: Tracks, top: float) -> tuple[Floats, Floats]:
    """(expected (m,), variance (m,)) of stays under cloglog from running sums of powers of the hazard L = e^s e^z <= top <= 1.

    sum(1 - e^-L) = sum_n -(-1)^n/n! S_n and sum(e^-L (1 - e^-L)) = sum_n (-1)^n (1 - 2^n)/n! S_n with S_n the sum of L^n
    over the stay: e^(n s) times a difference of running sums of e^(n z).
    """
    expected, variance = np.zeros_like(exp_s), np.zeros_like(exp_s)
    loan, cell = np.ones_like(exp_s), np.ones_like(exp_z)
    n = 0
    while n == 0 or (2.0 * top) ** n / math.factorial(n) > SERIES_ERROR * top:
        n += 1
        loan, cell = loan * exp_s, cell * exp_z
        c = running(cell, tracks.starts)
        power = loan * (c[tracks.leave] - c[tracks.enter])
        factor = (-1.0) ** n / math.factorial(n)
        expected -= factor * power
        variance += factor * (1.0 - 2.0**n) * power
    return expected, variance
