"""Sums over the stays at risk in each cell, by one walk along every track from its last cell to its first.

Conventions as in :mod:`stresskit.kernels.cohorts`. Stays lie in ascending order of ``last``, so those that leave a
cell are met as the walk comes to it; the few that enter later than their track begins are met through ``late``,
their places in ascending order of ``enter``. What the walk carries along fits into the first-level cache, and no
cell holds more than its result.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Places = NDArray[np.int32]
Flags = NDArray[np.bool_]
Codes = NDArray[np.int32]


@compiled
def late_entries(enter: Ints, base: int, boundary: Flags) -> Places:
    """Places of the stays that enter in a cell that is no boundary, in ascending order of that cell."""
    count = np.zeros(boundary.size + 1, dtype=np.int32)
    for i in range(enter.size):
        if not boundary[enter[i] - base]:
            count[enter[i] - base + 1] += 1
    for c in range(boundary.size):
        count[c + 1] += count[c]
    out = np.empty(count[-1], dtype=np.int32)
    for i in range(enter.size):
        c = enter[i] - base
        if not boundary[c]:
            out[count[c]] = i
            count[c] += 1
    return out


@compiled
def hazards(
    mass: Floats, exp_z: Floats, dense: Floats, codes: Codes, size: int, enter: Ints, last: Ints, base: int,
    late: Places, starts: Ints,
) -> tuple[Floats, Floats, Floats]:  # fmt: skip
    """Of stays with hazard mass * e^z in each cell: what score and information are made of.

    dense (n, d) are the columns 0 .. d - 1, the first one ones; ``codes`` (n, c) say which further columns are 1.
    Returns (n,) the hazard of each stay, (size, size) its sums times products of two columns, and (cells, size) the
    hazard in each cell times columns.
    """
    n, d = dense.shape
    coded, cells = codes.shape[1], exp_z.size
    c, hazard = np.empty(cells), np.empty(n)
    products, cross, run = np.zeros((size, size)), np.empty((cells, size)), np.empty(size)
    for t in range(starts.size - 1):
        total = 0.0
        for cell in range(starts[t], starts[t + 1]):
            total += exp_z[cell]
            c[cell] = total
    p, e = n - 1, late.size - 1
    for t in range(starts.size - 2, -1, -1):
        run[:] = 0.0
        for cell in range(starts[t + 1] - 1, starts[t] - 1, -1):
            while p >= 0 and last[p] - base == cell:
                m = mass[p]
                h = m * (c[cell] - c[enter[p] - base])
                hazard[p] = h
                for j in range(d):
                    run[j] += m * dense[p, j]
                    w = h * dense[p, j]
                    for k in range(j + 1):
                        products[j, k] += w * dense[p, k]
                for q in range(coded):
                    row = codes[p, q]
                    run[row] += m
                    for j in range(d):
                        products[row, j] += h * dense[p, j]
                    for other in range(q):
                        products[row, codes[p, other]] += h
                p -= 1
            while e >= 0 and enter[late[e]] - base == cell:
                i = late[e]
                for j in range(d):
                    run[j] -= mass[i] * dense[i, j]
                for q in range(coded):
                    run[codes[i, q]] -= mass[i]
                e -= 1
            if cell == starts[t]:
                cross[cell, :] = 0.0
            else:
                for j in range(size):
                    cross[cell, j] = exp_z[cell] * run[j]
    return hazard, products, cross


@compiled
def squares(
    score: Floats, information: Floats, dense: Floats, codes: Codes, size: int
) -> tuple[Floats, Floats]:
    """(size,) sums of ``score`` (n,) times columns, (size, size) of ``information`` (n,) times products of two.

    Products below the diagonal only, see :func:`mirrored`.
    """
    n, d = dense.shape
    coded = codes.shape[1]
    total, products = np.zeros(size), np.zeros((size, size))
    for i in range(n):
        h = information[i]
        for j in range(d):
            total[j] += score[i] * dense[i, j]
            w = h * dense[i, j]
            for k in range(j + 1):
                products[j, k] += w * dense[i, k]
        for q in range(coded):
            row = codes[i, q]
            total[row] += score[i]
            for j in range(d):
                products[row, j] += h * dense[i, j]
            for other in range(q):
                products[row, codes[i, other]] += h
    return total, products


@compiled
def events(
    stay: Ints, cell: Ints, score: Floats, information: Floats, dense: Floats, codes: Codes,
    total: Floats, products: Floats, by_cell: Floats, cross: Floats,
) -> None:  # fmt: skip
    """Adds single rows, one in a cell of each of some stays, to sums as those of :func:`squares` and :func:`hazards`.

    by_cell (cells,) of the score, cross (cells, size) of the information times columns
    """
    d, coded = dense.shape[1], codes.shape[1]
    for e in range(stay.size):
        i, c, s, h = stay[e], cell[e], score[e], information[e]
        by_cell[c] += s
        for j in range(d):
            x = dense[i, j]
            total[j] += s * x
            cross[c, j] += h * x
            for k in range(j + 1):
                products[j, k] += h * x * dense[i, k]
        for q in range(coded):
            row = codes[i, q]
            total[row] += s
            cross[c, row] += h
            for j in range(d):
                products[row, j] += h * dense[i, j]
            for other in range(q):
                products[row, codes[i, other]] += h


@compiled
def events_by_cell(stay: Ints, cell: Ints, score: Floats, dense: Floats, codes: Codes, cross: Floats) -> None:
    """Adds the score of single rows times columns to ``cross`` (cells, size)."""
    for e in range(stay.size):
        i, c, s = stay[e], cell[e], score[e]
        for j in range(dense.shape[1]):
            cross[c, j] += s * dense[i, j]
        for q in range(codes.shape[1]):
            cross[c, codes[i, q]] += s


@compiled
def mirrored(products: Floats, d: int) -> None:
    """In place: sums of products of two columns known below the diagonal, on both sides.

    Columns from d on are levels: 0 or 1, so one of them times itself is itself.
    """
    for row in range(products.shape[0]):
        if row >= d:
            products[row, row] = products[row, 0]
        for j in range(row):
            products[j, row] = products[row, j]


@compiled
def coded_products(h: Floats, columns: Floats, codes: Codes, size: int) -> tuple[Floats, Floats]:
    """Sums over stays of h times the levels: (size, q) times ``columns`` (n, q), (size, size) times h and levels."""
    n, q = columns.shape
    coded = codes.shape[1]
    out, levels = np.zeros((size, q)), np.zeros((size, size))
    for i in range(n):
        for c in range(coded):
            row = codes[i, c]
            for j in range(q):
                out[row, j] += h[i] * columns[i, j]
            for other in range(coded):
                levels[row, codes[i, other]] += h[i] * h[i]
    return out, levels


@compiled
def powers(
    exp_s: Floats, weight: Floats, small: Flags, dense: Floats, codes: Codes, size: int, enter: Ints, last: Ints,
    base: int, late: Places, starts: Ints, power: Floats, alone: Floats, together: Floats,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Of the small stays at risk in each cell: weighted sums of polynomials in e^s e^z.

    power (cells, d) of e^z;  alone (r, d) and together (f,) coefficients, f <= d
    Returns (r, cells) of the polynomials ``alone``, and (cells, size) of ``together`` times the columns.
    """
    n, wide = dense.shape
    coded, cells, degree = codes.shape[1], power.shape[0], alone.shape[1]
    kinds, f_size = alone.shape[0], together.size
    out, cross = np.zeros((kinds, cells)), np.zeros((cells, size))
    lone, run = np.empty(degree), np.empty((f_size, size))
    p, e = n - 1, late.size - 1
    for t in range(starts.size - 2, -1, -1):
        lone[:] = 0.0
        run[:] = 0.0
        for cell in range(starts[t + 1] - 1, starts[t] - 1, -1):
            while p >= 0 and last[p] - base == cell:
                if small[p]:
                    _carry(lone, run, weight[p], exp_s[p], dense, codes, p, wide, coded)
                p -= 1
            while e >= 0 and enter[late[e]] - base == cell:
                i = late[e]
                if small[i]:
                    _carry(lone, run, -weight[i], exp_s[i], dense, codes, i, wide, coded)
                e -= 1
            if cell == starts[t]:
                continue
            for j in range(degree):
                here = lone[j] * power[cell, j]
                for r in range(kinds):
                    out[r, cell] += alone[r, j] * here
            for f in range(f_size):
                factor = together[f] * power[cell, f]
                for j in range(size):
                    cross[cell, j] += factor * run[f, j]
    return out, cross


@compiled
def _carry(
    lone: Floats, run: Floats, weight: float, x: float, dense: Floats, codes: Codes, i: int, wide: int, coded: int
) -> None:  # fmt: skip
    p = weight
    for j in range(lone.size):
        p *= x
        lone[j] += p
    p = weight
    for f in range(run.shape[0]):
        p *= x
        for j in range(wide):
            run[f, j] += p * dense[i, j]
        for q in range(coded):
            run[f, codes[i, q]] += p
