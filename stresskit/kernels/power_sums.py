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
    """(r, n) sums over the rows of each stay of the polynomials ``coefficients`` (r, d); 0 where not small."""
    kinds, degree = coefficients.shape
    out = np.zeros((kinds, exp_s.size))
    for i in range(exp_s.size):
        if small[i]:
            a, b, x, p = enter[i] - base, last[i] - base, exp_s[i], 1.0
            for j in range(degree):
                p *= x
                here = p * (sums[b, j] - sums[a, j])
                for r in range(kinds):
                    out[r, i] += coefficients[r, j] * here
    return out


@compiled
def leaving(
    exp_s: Floats, weight: Floats, small: Flags, dense: Floats, codes: Codes, shape: tuple[int, int, int],
    enter: Ints, last: Ints, base: int, boundary: Flags,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Weighted powers of e^s of the small stays that leave each cell less those that enter it.

    Returns (cells, d) alone and (cells, f, q) times the q columns that ``dense`` and ``codes`` hold as in
    :func:`stresskit.kernels.cohorts.spread`; shape = (d, f, q).
    """
    degree, together, size = shape
    alone, joint = np.zeros((boundary.size, degree)), np.zeros((boundary.size, together, size))
    for i in range(exp_s.size):
        if small[i]:
            a, b = enter[i] - base, last[i] - base
            _add(alone, joint, b, weight[i], exp_s[i], dense[i], codes[i])
            if not boundary[a]:
                _add(alone, joint, a, -weight[i], exp_s[i], dense[i], codes[i])
    return alone, joint


@compiled
def _add(
    alone: Floats, joint: Floats, cell: int, weight: float, x: float, dense: Floats, codes: Codes
) -> None:
    p = weight
    for j in range(alone.shape[1]):
        p *= x
        alone[cell, j] += p
    p = weight
    for f in range(joint.shape[1]):
        p *= x
        for j in range(dense.size):
            joint[cell, f, j] += p * dense[j]
        for j in range(codes.size):
            joint[cell, f, codes[j]] += p


@compiled
def at_risk(
    alone: Floats, joint: Floats, power: Floats, starts: Ints, coefficients: Floats, together: Floats
) -> tuple[Floats, Floats]:
    """Sums over the stays at risk in each cell from :func:`leaving`, whose arrays are used up.

    coefficients (r, d), together (f,)
    Returns (r, cells) of the polynomials alone, and (cells, q) of ``together`` times the columns.
    """
    kinds, degree = coefficients.shape
    cells, f_size, q = joint.shape
    out, cross = np.zeros((kinds, cells)), np.zeros((cells, q))
    for t in range(starts.size - 1):
        for c in range(starts[t + 1] - 1, starts[t], -1):
            if c + 1 < starts[t + 1]:
                for j in range(degree):
                    alone[c, j] += alone[c + 1, j]
                for f in range(f_size):
                    for j in range(q):
                        joint[c, f, j] += joint[c + 1, f, j]
            for j in range(degree):
                here = alone[c, j] * power[c, j]
                for r in range(kinds):
                    out[r, c] += coefficients[r, j] * here
            for f in range(f_size):
                factor = together[f] * power[c, f]
                for j in range(q):
                    cross[c, j] += factor * joint[c, f, j]
    return out, cross


@compiled
def joint_of_stays(exp_s: Floats, table: Floats, small: Flags, enter: Ints, last: Ints, base: int) -> Floats:
    """(n, q) sums over each stay of a polynomial times cell columns; 0 where not small.

    table  (cells, f, q) running sums of c_f (e^z)^f times the cell columns
    """
    _, f_size, q = table.shape
    out = np.zeros((exp_s.size, q))
    for i in range(exp_s.size):
        if small[i]:
            a, b, x, p = enter[i] - base, last[i] - base, exp_s[i], 1.0
            for f in range(f_size):
                p *= x
                for j in range(q):
                    out[i, j] += p * (table[b, f, j] - table[a, f, j])
    return out
