"""The rows of stays one after another, and sums of row values by stay, by cell and by both.

Conventions as in :mod:`stresskit.kernels.cohorts`; stay i has the rows ``place[i]`` .. ``place[i + 1] - 1``,
one for each cell enter + 1 .. enter + its number of rows; ``place`` (n + 1,) int64 starts at 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def places(enter: Ints, last: Ints) -> Ints:
    """(n + 1,) first row of each stay, and the number of rows."""
    out = np.zeros(enter.size + 1, dtype=np.int64)
    np.cumsum(last - enter, out=out[1:])
    return out


@compiled
def products(by_stay: Floats, by_cell: Floats, enter: Ints, base: int, place: Ints) -> Floats:
    """(rows,) value of the stay times value of the cell."""
    out = np.empty(place[-1])
    for i in range(enter.size):
        v, shift = by_stay[i], enter[i] - base + 1 - place[i]
        for row in range(place[i], place[i + 1]):
            out[row] = v * by_cell[row + shift]
    return out


@compiled
def added(by_stay: Floats, by_cell: Floats, enter: Ints, base: int, place: Ints) -> Floats:
    """(rows,) value of the stay plus value of the cell."""
    out = np.empty(place[-1])
    for i in range(enter.size):
        v, shift = by_stay[i], enter[i] - base + 1 - place[i]
        for row in range(place[i], place[i + 1]):
            out[row] = v + by_cell[row + shift]
    return out


@compiled
def per_stay(values: Floats, place: Ints) -> Floats:
    """(n,) sums over the rows of each stay, four partial sums at a time."""
    out = np.empty(place.size - 1)
    for i in range(place.size - 1):
        a, b = place[i], place[i + 1]
        s0, s1, s2, s3 = 0.0, 0.0, 0.0, 0.0
        full = a + (b - a) // 4 * 4
        for row in range(a, full, 4):
            s0 += values[row]
            s1 += values[row + 1]
            s2 += values[row + 2]
            s3 += values[row + 3]
        for row in range(full, b):
            s0 += values[row]
        out[i] = (s0 + s1) + (s2 + s3)
    return out


@compiled
def per_cell(values: Floats, columns: Floats, enter: Ints, base: int, place: Ints, out: Floats) -> None:
    """Adds to out (q, cells) the sums over the rows in each cell of the value times the stay's columns (n, q).

    Four stays that enter together go at a time as far as all of them reach.
    """
    n, q = columns.shape
    i = 0
    while i < n:
        first, group = enter[i] - base + 1, 1
        if i + 3 < n and enter[i + 1] == enter[i] and enter[i + 2] == enter[i] and enter[i + 3] == enter[i]:
            group = 4
            a, b, c, d = place[i], place[i + 1], place[i + 2], place[i + 3]
            size = min(b - a, c - b, d - c, place[i + 4] - d)
            for j in range(q):
                u, v, w, x = columns[i, j], columns[i + 1, j], columns[i + 2, j], columns[i + 3, j]
                if u != 0.0 or v != 0.0 or w != 0.0 or x != 0.0:
                    for step in range(size):
                        out[j, first + step] += (u * values[a + step] + v * values[b + step]) + (
                            w * values[c + step] + x * values[d + step]
                        )
        else:
            size = 0
        for stay in range(i, i + group):
            a, length = place[stay], place[stay + 1] - place[stay]
            if length > size:
                for j in range(q):
                    v = columns[stay, j]
                    if v != 0.0:
                        for step in range(size, length):
                            out[j, first + step] += v * values[a + step]
        i += group


@compiled
def cell_columns(values: Floats, z: Floats, enter: Ints, base: int, place: Ints) -> Floats:
    """(n, q) sums over the rows of each stay of the value times the cell's columns z (cells, q)."""
    q = z.shape[1]
    out = np.zeros((enter.size, q))
    for i in range(enter.size):
        shift = enter[i] - base + 1 - place[i]
        for row in range(place[i], place[i + 1]):
            v = values[row]
            for j in range(q):
                out[i, j] += v * z[row + shift, j]
    return out
