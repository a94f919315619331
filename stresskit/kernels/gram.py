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
        while v < end:
            _tile(left, l0 + u, l_step, right, r0 + v, r_step, n, out, to + u * stride + v, stride)
            v += WIDTH
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
