"""Sums of products of columns, a tile of eight by eight at a time, held in registers while rows pass by.

Rows come in batches that stay in the first-level cache. Arrays are flat; numbers of columns are multiples of eight.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import lean
from stresskit.kernels.vectors import WIDTH, load, nth, spread, store, times_plus

Floats = NDArray[np.float64]

#: Rows of a batch.
BATCH = 64


@lean
def add_products(
    left: Floats, l0: int, l_step: int, right: Floats, r0: int, r_step: int, n: int, columns: tuple[int, int],
    out: Floats, to: int, stride: int,
) -> None:  # fmt: skip
    """Adds to out[to + i * stride + j] the sum over n rows of column i of ``left`` times column j of ``right``.

    Rows begin at left[l0], left[l0 + l_step], ... and so on the right. columns = (p, q) of the two, multiples of eight;
    q = 0 for p columns of the right, of which only the tiles on and below the diagonal are wanted.
    """
    u = 0
    while u < columns[0]:
        v, end = 0, columns[1] if columns[1] else u + WIDTH
        while v + WIDTH < end:
            _two_tiles(left, l0 + u, l_step, right, r0 + v, r_step, n, out, to + u * stride + v, stride)
            v += 2 * WIDTH
        if v < end:
            _tile(left, l0 + u, l_step, right, r0 + v, r_step, n, out, to + u * stride + v, stride)
        u += WIDTH


@lean
def _tile(
    left: Floats, at_left: int, p: int, right: Floats, at: int, q: int, n: int, out: Floats, to: int, stride: int
) -> None:  # fmt: skip
    a0, a1 = load(out, to), load(out, to + stride)
    a2, a3 = load(out, to + 2 * stride), load(out, to + 3 * stride)
    a4, a5 = load(out, to + 4 * stride), load(out, to + 5 * stride)
    a6, a7 = load(out, to + 6 * stride), load(out, to + 7 * stride)
    for _ in range(n):
        x = load(right, at)
        a0 = times_plus(spread(left[nth(at_left)]), x, a0)
        a1 = times_plus(spread(left[nth(at_left + 1)]), x, a1)
        a2 = times_plus(spread(left[nth(at_left + 2)]), x, a2)
        a3 = times_plus(spread(left[nth(at_left + 3)]), x, a3)
        a4 = times_plus(spread(left[nth(at_left + 4)]), x, a4)
        a5 = times_plus(spread(left[nth(at_left + 5)]), x, a5)
        a6 = times_plus(spread(left[nth(at_left + 6)]), x, a6)
        a7 = times_plus(spread(left[nth(at_left + 7)]), x, a7)
        at_left += p
        at += q
    store(out, to, a0)
    store(out, to + stride, a1)
    store(out, to + 2 * stride, a2)
    store(out, to + 3 * stride, a3)
    store(out, to + 4 * stride, a4)
    store(out, to + 5 * stride, a5)
    store(out, to + 6 * stride, a6)
    store(out, to + 7 * stride, a7)


@lean
def _two_tiles(
    left: Floats, at_left: int, p: int, right: Floats, at: int, q: int, n: int, out: Floats, to: int, stride: int
) -> None:  # fmt: skip
    """Two tiles side by side, for which the numbers on the left are read once."""
    a0, b0 = load(out, to), load(out, to + WIDTH)
    a1, b1 = load(out, to + stride), load(out, to + stride + WIDTH)
    a2, b2 = load(out, to + 2 * stride), load(out, to + 2 * stride + WIDTH)
    a3, b3 = load(out, to + 3 * stride), load(out, to + 3 * stride + WIDTH)
    a4, b4 = load(out, to + 4 * stride), load(out, to + 4 * stride + WIDTH)
    a5, b5 = load(out, to + 5 * stride), load(out, to + 5 * stride + WIDTH)
    a6, b6 = load(out, to + 6 * stride), load(out, to + 6 * stride + WIDTH)
    a7, b7 = load(out, to + 7 * stride), load(out, to + 7 * stride + WIDTH)
    for _ in range(n):
        x, y = load(right, at), load(right, at + WIDTH)
        z = spread(left[nth(at_left)])
        a0, b0 = times_plus(z, x, a0), times_plus(z, y, b0)
        z = spread(left[nth(at_left + 1)])
        a1, b1 = times_plus(z, x, a1), times_plus(z, y, b1)
        z = spread(left[nth(at_left + 2)])
        a2, b2 = times_plus(z, x, a2), times_plus(z, y, b2)
        z = spread(left[nth(at_left + 3)])
        a3, b3 = times_plus(z, x, a3), times_plus(z, y, b3)
        z = spread(left[nth(at_left + 4)])
        a4, b4 = times_plus(z, x, a4), times_plus(z, y, b4)
        z = spread(left[nth(at_left + 5)])
        a5, b5 = times_plus(z, x, a5), times_plus(z, y, b5)
        z = spread(left[nth(at_left + 6)])
        a6, b6 = times_plus(z, x, a6), times_plus(z, y, b6)
        z = spread(left[nth(at_left + 7)])
        a7, b7 = times_plus(z, x, a7), times_plus(z, y, b7)
        at_left += p
        at += q
    store(out, to, a0)
    store(out, to + WIDTH, b0)
    store(out, to + stride, a1)
    store(out, to + stride + WIDTH, b1)
    store(out, to + 2 * stride, a2)
    store(out, to + 2 * stride + WIDTH, b2)
    store(out, to + 3 * stride, a3)
    store(out, to + 3 * stride + WIDTH, b3)
    store(out, to + 4 * stride, a4)
    store(out, to + 4 * stride + WIDTH, b4)
    store(out, to + 5 * stride, a5)
    store(out, to + 5 * stride + WIDTH, b5)
    store(out, to + 6 * stride, a6)
    store(out, to + 6 * stride + WIDTH, b6)
    store(out, to + 7 * stride, a7)
    store(out, to + 7 * stride + WIDTH, b7)
