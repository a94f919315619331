"""Running sums along cohorts: what stays take from cells, and what cells take from stays, without rows.

Cells lie track after track, ages ascending; a track is one cohort (of one group of loans). The first
cell of a track is a boundary: nothing happens in it, it stands for "before the first age at risk".
A stay covers the cells enter + 1 .. last of its track, so a sum over a stay is C[last] - C[enter]
with C the running sum along the track, and the mass at risk in a cell is the mass of the stays that
leave at or after it less the mass of those that enter at or after it.

Conventions: n stays, ``enter`` and ``last`` (n,) int64 cells, counted from ``base``; q columns; arrays are
C-contiguous float64; ``starts`` (tracks + 1,) first cells of the tracks, counted from 0.
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
def running(values: Floats, starts: Ints) -> Floats:
    """(cells, q) cumulative sums of ``values`` along every track."""
    out = np.empty_like(values)
    q = values.shape[1]
    for t in range(starts.size - 1):
        for c in range(starts[t], starts[t + 1]):
            for j in range(q):
                before = 0.0 if c == starts[t] else out[c - 1, j]
                out[c, j] = before + values[c, j]
    return out


@compiled
def at_risk(leaving: Floats, starts: Ints) -> None:
    """In place: masses that leave less those that enter (cells, q) become the mass at risk; 0 in boundary cells."""
    q = leaving.shape[1]
    for t in range(starts.size - 1):
        for c in range(starts[t + 1] - 2, starts[t], -1):
            for j in range(q):
                leaving[c, j] += leaving[c + 1, j]
        for j in range(q):
            leaving[starts[t], j] = 0.0


@compiled
def spread(
    mass: Floats, dense: Floats, codes: Codes, size: int, enter: Ints, last: Ints, base: int, boundary: Flags
) -> Floats:
    """(cells, size) sum of mass * columns of the stays that leave each cell less those that enter it.

    dense (n, d) are the columns 0 .. d - 1; ``codes`` (n, c) say which further columns of a stay are 1.
    boundary (cells,); what enters there is left out, no sum ever reads it.
    """
    out = np.zeros((boundary.size, size))
    d, coded = dense.shape[1], codes.shape[1]
    for i in range(mass.size):
        m, a, b = mass[i], enter[i] - base, last[i] - base
        for j in range(d):
            out[b, j] += m * dense[i, j]
        for j in range(coded):
            out[b, codes[i, j]] += m
        if not boundary[a]:
            for j in range(d):
                out[a, j] -= m * dense[i, j]
            for j in range(coded):
                out[a, codes[i, j]] -= m
    return out


@compiled
def combined(dense: Floats, codes: Codes, weights: Floats, add: Floats, out: Floats) -> None:
    """Writes to out (n,) the sum of ``add`` and of the columns of each stay times ``weights`` (size,)."""
    d, coded = dense.shape[1], codes.shape[1]
    for i in range(out.size):
        total = 0.0
        for j in range(d):
            total += dense[i, j] * weights[j]
        for c in range(coded):
            total += weights[codes[i, c]]
        out[i] = total + add[i]


@compiled
def level_products(dense: Floats, codes: Codes, weights: Floats, size: int) -> tuple[Floats, Floats]:
    """((size, size), (n, d)) weighted sums of products of the coded columns with all, and the weighted dense columns.

    dense (n, d), the first column ones. Coded columns stand in rows; products of two of them in both places.
    """
    out, weighted = np.zeros((size, size)), np.empty_like(dense)
    d, coded = dense.shape[1], codes.shape[1]
    for i in range(dense.shape[0]):
        w = weights[i]
        for j in range(d):
            weighted[i, j] = w * dense[i, j]
        for c in range(coded):
            row = codes[i, c]
            for j in range(d):
                out[row, j] += w * dense[i, j]
            for other in range(c):
                out[row, codes[i, other]] += w
    for row in range(size):
        for j in range(d, row):
            out[j, row] = out[row, j]
        if row >= d:
            out[row, row] = out[row, 0]
    return out, weighted


@compiled
def differences(mass: Floats, table: Floats, enter: Ints, last: Ints, base: int) -> Floats:
    """(n, q) mass * (table[last] - table[enter]) with running sums ``table`` (cells, q)."""
    out = np.empty((mass.size, table.shape[1]))
    q = table.shape[1]
    for i in range(mass.size):
        m, a, b = mass[i], enter[i] - base, last[i] - base
        for j in range(q):
            out[i, j] = m * (table[b, j] - table[a, j])
    return out


@compiled
def by_label(label: Ints, values: Floats, size: int) -> Floats:
    """(size, q) sums of the rows of ``values`` (n, q) of each label, added in the order given."""
    out = np.zeros((size, values.shape[1]))
    q = values.shape[1]
    for i in range(label.size):
        g = label[i]
        for j in range(q):
            out[g, j] += values[i, j]
    return out
