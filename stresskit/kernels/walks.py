"""Sums over the stays at risk in each cell, by one walk along every track from its last cell to its first.

Conventions as in :mod:`stresskit.kernels.cohorts`. Stays lie in ascending order of ``last``, so those that leave a
cell are met as the walk comes to it; the few that enter later than their track begins are met through ``late``,
their places in ascending order of ``enter``. What the walk carries along fits into the first-level cache, and no
cell holds more than its result.

Columns of stays: ``dense`` (n, w) are the columns 0 .. w - 1, of which the first d are used, the first of all ones;
w is a multiple of eight, so that eight columns are worked on at once. ``codes`` (n, c) say which further columns are
1. ``size``, a multiple of eight, is more than all columns; the last one is that of levels that nobody asks for.
Sums of products of two columns are flat (size * size,), known below the diagonal until :func:`mirrored`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.gram import BATCH, add_products
from stresskit.kernels.vectors import WIDTH, load, nth, spread, store, times_plus

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


@lean
def add_row(to: Floats, at: int, flat: Floats, row: int, w: int, factor: float) -> None:
    """to[at + j] += factor * flat[row + j] for the w columns of a stay."""
    times, v = spread(factor), 0
    while v < w:
        store(to, at + v, load(to, at + v) + times * load(flat, row + v))
        v += WIDTH


@lean
def add_stay(to: Floats, at: int, flat: Floats, i: int, w: int, codes: Codes, factor: float) -> None:
    """to[at + j] += factor times column j of stay i."""
    add_row(to, at, flat, i * w, w, factor)
    for q in range(codes.shape[1]):
        to[at + codes[i, q]] += factor


@lean
def add_leaving(
    to: Floats, start: int, size: int, flat: Floats, at: int, n: int, w: int, codes: Codes, last: Ints, exp_s: Floats,
    weight: Floats,
) -> None:  # fmt: skip
    """to[(last - start) * size + j] += column j of n stays from ``at`` on times exp_s times weight; ``last`` ascends."""
    v = 0
    while v < w:
        k = 0
        while k < n:
            i = nth(at + k)
            cell = last[i]
            total = load(to, (cell - start) * size + v)
            while k < n and last[i] == cell:
                total = times_plus(spread(exp_s[i] * weight[i]), load(flat, i * w + v), total)
                k += 1
                i = nth(at + k)
            store(to, (cell - start) * size + v, total)
        v += WIDTH
    for q in range(codes.shape[1]):
        for k in range(n):
            i = nth(at + k)
            to[nth((last[i] - start) * size + codes[i, q])] += exp_s[i] * weight[i]


@lean
def add_batch(
    flat: Floats, at: int, n: int, w: int, codes: Codes, values: tuple[Floats, Floats, int], left: Floats,
    total: tuple[Floats, int], products: tuple[Floats, int], size: int,
) -> None:  # fmt: skip
    """Adds n stays from ``at`` on: score times columns to ``total``, information times products of two to ``products``.

    values    (score, information, the place of the first stay in both)
    left      (BATCH * w,) for passing use
    total, products   (array, where the sums begin in it)
    """
    (score, information, first), (sums, s0), (squared, p0), v = values, total, products, 0
    while v < w:
        here = load(sums, s0 + v)
        for k in range(n):
            x, i = load(flat, (at + k) * w + v), nth(first + k)
            here = times_plus(spread(score[i]), x, here)
            store(left, k * w + v, spread(information[i]) * x)
        store(sums, s0 + v, here)
        v += WIDTH
    for k in range(n):
        for q in range(codes.shape[1]):
            i = nth(at + k)
            code = nth(codes[i, q])
            sums[nth(s0 + code)] += score[nth(first + k)]
            add_row(squared, p0 + code * size, left, k * w, w, 1.0)
            for other in range(q):
                squared[nth(p0 + code * size + codes[i, other])] += information[nth(first + k)]
    add_products(left, 0, w, flat, at * w, w, n, (w, 0), squared, p0, size)


@lean
def _add_square(
    products: Floats, size: int, flat: Floats, row: int, d: int, codes: Codes, i: int, h: float
) -> None:
    """Adds h times the products of two columns of stay i, whose dense columns begin at flat[row]."""
    v = 0
    while v < d:
        x = load(flat, row + v)
        at = v * size + v
        for j in range(row + v, row + d):
            store(products, at, load(products, at) + spread(h * flat[j]) * x)
            at += size
        for q in range(codes.shape[1]):
            at = codes[i, q] * size + v
            store(products, at, load(products, at) + spread(h) * x)
        v += WIDTH
    for q in range(1, codes.shape[1]):
        for other in range(q):
            products[codes[i, q] * size + codes[i, other]] += h


@compiled
def combined(dense: Floats, codes: Codes, weights: Floats, add: Floats, out: Floats) -> None:
    """Writes to out (n,) the sum of ``add`` and of the columns of each stay times ``weights`` (size,)."""
    w, flat, part = dense.shape[1], dense.reshape(-1), np.empty(WIDTH)
    for i in range(out.size):
        total = spread(0.0)
        for v in range(0, w, WIDTH):
            total += load(flat, i * w + v) * load(weights, v)
        store(part, 0, total)
        s = ((part[0] + part[1]) + (part[2] + part[3])) + ((part[4] + part[5]) + (part[6] + part[7]))
        for q in range(codes.shape[1]):
            s += weights[codes[i, q]]
        out[i] = s + add[i]


@compiled
def totals(values: Floats, dense: Floats, codes: Codes, size: int) -> Floats:
    """(size,) sums of ``values`` (n,) times columns."""
    w, flat, total = dense.shape[1], dense.reshape(-1), np.zeros(size)
    for v in range(0, w, WIDTH):
        sums = load(total, v)
        for i in range(values.size):
            sums = times_plus(spread(values[i]), load(flat, i * w + v), sums)
        store(total, v, sums)
    for i in range(values.size):
        for q in range(codes.shape[1]):
            total[codes[i, q]] += values[i]
    return total


@compiled
def squares(
    score: Floats, information: Floats, dense: Floats, codes: Codes, size: int
) -> tuple[Floats, Floats]:
    """(size,) sums of ``score`` (n,) times columns, (size * size,) of ``information`` (n,) times products of two."""
    w, flat = dense.shape[1], dense.reshape(-1)
    total, products, left = np.zeros(size), np.zeros(size * size), np.empty(BATCH * w)
    at = 0
    while at < score.size:
        n = min(BATCH, score.size - at)
        add_batch(flat, at, n, w, codes, (score, information, at), left, (total, 0), (products, 0), size)
        at += n
    return total, products


@compiled
def events(
    stay: Ints, cell: Ints, score: Floats, information: Floats, dense: Floats, codes: Codes, d: int,
    total: Floats, products: Floats, by_cell: Floats, cross: Floats,
) -> None:  # fmt: skip
    """Adds single rows, one in a cell of each of some stays, to sums as those of :func:`squares` and :func:`hazards`.

    by_cell (cells,) of the score, cross (cells, size) of the information times columns
    """
    size = total.size
    w, flat = dense.shape[1], dense.reshape(-1)
    for e in range(stay.size):
        i, c, s, h = stay[e], cell[e], score[e], information[e]
        by_cell[c] += s
        add_row(total, 0, flat, i * w, w, s)
        for j in range(d):
            cross[c, j] += h * flat[i * w + j]
        for q in range(codes.shape[1]):
            total[codes[i, q]] += s
            cross[c, codes[i, q]] += h
        _add_square(products, size, flat, i * w, d, codes, i, h)


@compiled
def mirrored(products: Floats, d: int) -> Floats:
    """(size, size) of sums of products of two columns known below the diagonal.

    Columns from d on are levels: 0 or 1, so one of them times itself is itself.
    """
    size = int(np.sqrt(products.size))
    out = products.reshape((size, size))
    for row in range(size):
        if row >= d:
            out[row, row] = out[row, 0]
        for j in range(row):
            out[j, row] = out[row, j]
    return out


@compiled
def powers(
    exp_s: Floats, weight: Floats, small: Flags, dense: Floats, codes: Codes, size: int, enter: Ints, last: Ints,
    base: int, late: Places, starts: Ints, power: Floats, alone: Floats, together: Floats,
) -> tuple[Floats, Floats]:  # fmt: skip
    """Of the small stays at risk in each cell: weighted sums of polynomials in e^s e^z.

    power (cells, d) of e^z;  alone (2, d) and together (f,) coefficients, f <= d
    Returns (2, cells) of the polynomials ``alone``, and (cells, size) of ``together`` times the columns.
    """
    n, w, flat = dense.shape[0], dense.shape[1], dense.reshape(-1)
    cells, degree = power.shape[0], alone.shape[1]
    f_size = together.size
    out, cross = np.zeros((2, cells)), np.zeros(cells * size)
    lone, run = np.empty(degree), np.empty(f_size * size)
    p, e = n - 1, late.size - 1
    for t in range(starts.size - 2, -1, -1):
        lone[:] = 0.0
        run[:] = 0.0
        for cell in range(starts[t + 1] - 1, starts[t] - 1, -1):
            while p >= 0 and last[p] - base == cell:
                if small[p]:
                    _carry(lone, run, size, weight[p], exp_s[p], flat, p, w, codes)
                p -= 1
            while e >= 0 and enter[late[e]] - base == cell:
                i = late[e]
                if small[i]:
                    _carry(lone, run, size, -weight[i], exp_s[i], flat, i, w, codes)
                e -= 1
            if cell == starts[t]:
                continue
            first, second = 0.0, 0.0
            for j in range(degree):
                here = lone[j] * power[cell, j]
                first += alone[0, j] * here
                second += alone[1, j] * here
            out[0, cell], out[1, cell] = first, second
            for f in range(f_size):
                add_row(cross, cell * size, run, f * size, size, together[f] * power[cell, f])
    return out, cross.reshape((cells, size))


@lean
def _carry(
    lone: Floats, run: Floats, size: int, weight: float, x: float, flat: Floats, i: int, w: int, codes: Codes
) -> None:  # fmt: skip
    """Adds the powers of x of a stay to those carried along, alone (degree,) and times its columns (f * size,)."""
    p = weight
    for j in range(lone.size):
        p *= x
        lone[j] += p
    v = 0
    while v < w:
        columns, p, at = load(flat, i * w + v), weight, v
        while at < run.size:
            p *= x
            store(run, at, load(run, at) + spread(p) * columns)
            at += size
        v += WIDTH
    for q in range(codes.shape[1]):
        p, at = weight, codes[i, q]
        while at < run.size:
            p *= x
            run[at] += p
            at += size


@compiled
def period_squares(
    exp_s: Floats, weight: Floats, small: Flags, dense: Floats, codes: Codes, shape: tuple[int, int], enter: Ints,
    last: Ints, base: int, late: Places, starts: Ints, power: Floats, together: Floats, z: Floats, period: Ints,
    out: Floats,
) -> None:  # fmt: skip
    """Adds to out (periods, t * t), t = size + v, what small stays give the information of each calendar period.

    shape = (d, size);  power (cells, f) of e^z;  together (f,);  z (cells, v), v a multiple of eight;  period (cells,)
    Columns are those of stays, then those of cells; products are known below the diagonal.
    """
    d, size = shape
    n, w, flat, f_size, total = (
        exp_s.size,
        dense.shape[1],
        dense.reshape(-1),
        together.size,
        size + z.shape[1],
    )
    run, here = np.empty((f_size, size * size)), np.empty(size * size)
    p, e = n - 1, late.size - 1
    for t in range(starts.size - 2, -1, -1):
        run[:] = 0.0
        for cell in range(starts[t + 1] - 1, starts[t] - 1, -1):
            while p >= 0 and last[p] - base == cell:
                if small[p]:
                    x = weight[p]
                    for f in range(f_size):
                        x *= exp_s[p]
                        _add_square(run[f], size, flat, p * w, d, codes, p, x)
                p -= 1
            while e >= 0 and enter[late[e]] - base == cell:
                i = late[e]
                if small[i]:
                    x = -weight[i]
                    for f in range(f_size):
                        x *= exp_s[i]
                        _add_square(run[f], size, flat, i * w, d, codes, i, x)
                e -= 1
            if cell == starts[t]:
                continue
            here[:] = 0.0
            for f in range(f_size):
                add_row(here, 0, run[f], 0, here.size, together[f] * power[cell, f])
            to = out[period[cell]]
            for row in range(size):
                add_row(to, row * total, here, row * size, size, 1.0)
            _add_cell_rows(to, size, z[cell], here, size)


@lean
def _add_cell_rows(to: Floats, size: int, z: Floats, by_column: Floats, stride: int) -> None:
    """Rows of the cell columns z (v,): times the sums of the stays' columns, by_column[j * stride], and times z."""
    total = size + z.size
    for c in range(z.size):
        at = (size + c) * total
        for j in range(size):
            to[at + j] += z[c] * by_column[j * stride]
        for other in range(c + 1):
            to[at + size + other] += z[c] * z[other] * by_column[0]


@compiled
def period_rows(
    stay: Ints, cell: Ints, h: Floats, dense: Floats, codes: Codes, shape: tuple[int, int], z: Floats, period: Ints,
    out: Floats,
) -> None:  # fmt: skip
    """Adds h times the products of two columns of single rows, given by stay and cell; as :func:`period_squares`."""
    d, size = shape
    w, flat, total = dense.shape[1], dense.reshape(-1), size + z.shape[1]
    columns = np.empty(size)
    for r in range(stay.size):
        i, to = stay[r], out[period[cell[r]]]
        _add_square(to, total, flat, i * w, d, codes, i, h[r])
        columns[:] = 0.0
        for j in range(d):
            columns[j] = h[r] * flat[i * w + j]
        for q in range(codes.shape[1]):
            columns[codes[i, q]] = h[r]
        _add_cell_rows(to, size, z[cell[r]], columns, 1)
