"""Sums over stays, and over the stays at risk in a cell, of polynomials in x = e^s e^z.

Conventions as in :mod:`stresskit.kernels.cohorts`; d powers x, x^2, ... of which the first f also go
together with columns. A stay is carried by powers while its largest x is at most ``limit``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
Codes = NDArray[np.int32]


@compiled
def tables(exp_z: Floats, degree: int, starts: Ints, top: float) -> tuple[Floats, Floats, Floats]:
    """(cells, d) powers of min(e^z, top), (cells, d) their running sums along tracks, (tracks,) largest e^z."""
    power, sums = np.empty((exp_z.size, degree)), np.empty((exp_z.size, degree))
    largest = np.zeros(starts.size - 1)
    for t in range(starts.size - 1):
        high = 0.0
        for c in range(starts[t], starts[t + 1]):
            z = exp_z[c]
            if not z <= high:
                high = z
            p, z = 1.0, min(z, top)
            for j in range(degree):
                p *= z
                power[c, j] = p
                sums[c, j] = p if c == starts[t] else sums[c - 1, j] + p
        largest[t] = high
    return power, sums, largest


@compiled
def of_stays(
    exp_s: Floats, sums: Floats, small: Flags, enter: Ints, last: Ints, base: int, coefficients: Floats
) -> Floats:
    """(3, n) sums over the rows of each stay of the polynomials ``coefficients`` (3, d); 0 where not small."""
    degree = coefficients.shape[1]
    out = np.zeros((3, exp_s.size))
    for i in range(exp_s.size):
        if small[i]:
            a, b, x, j = enter[i] - base, last[i] - base, exp_s[i], degree - 1
            first, second, third = 0.0, 0.0, 0.0
            while j >= 0:
                here = sums[b, j] - sums[a, j]
                first = x * (first + coefficients[0, j] * here)
                second = x * (second + coefficients[1, j] * here)
                third = x * (third + coefficients[2, j] * here)
                j -= 1
            out[0, i], out[1, i], out[2, i] = first, second, third
    return out
