"""Stays, their blocks, and the row of sums that a call over many blocks gives of each of them.

Conventions as in :mod:`stresskit.kernels.walks`, cells and stays counted from 0. The row of a block holds the
log-likelihood; (size,) score of the loan columns; (size * size,) information of them, known below the diagonal;
(v,) score of the cell columns; (v * size,) information of cell columns with loan columns; (v * v,) of the cell columns,
known below the diagonal. v is the number of cell columns, made a multiple of eight.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.gram import add_products
from stresskit.kernels.odds import exp_lanes
from stresskit.kernels.vectors import WIDTH, Vec, load, nth, spread, store, sums_of_eight, times_plus

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Codes = NDArray[np.int32]

#: Beyond this the library's e^s, which may be 0, infinite or not a number.
PLAIN = 600.0


class Stays(NamedTuple):
    """Stays and the cells of their tracks; nothing in it depends on coefficients.

    dense (m, w), codes (m, c)      loan columns
    weight, offset, enter, last (m,)
    late                            stays that enter later than their track begins, block by block
    starts (tracks + 1,)
    z, columns                      (cells * kc + 8,) the cell columns one cell after the other, and some more numbers
                                    that no sum keeps; kc
    event_at, event_cell (events,)  stays that end with an event, ascending, and the cells in which they do
    """

    dense: Floats
    codes: Codes
    weight: Floats
    offset: Floats
    enter: Ints
    last: Ints
    late: Ints
    starts: Ints
    z: Floats
    columns: int
    event_at: Ints
    event_cell: Ints


class Blocks(NamedTuple):
    """Of every block: first stay, first event and first of ``late``, each with the end at the end; first and last track."""

    stay: Ints
    event: Ints
    late: Ints
    first: Ints
    last: Ints


class Sums(NamedTuple):
    """A row of sums by their names: llf, loan (size,), loans (size * size,), cell (v,), both (v, size), cells (v, v)."""

    llf: float
    loan: Floats
    loans: Floats
    cell: Floats
    both: Floats
    cells: Floats


@compiled
def width(size: int, v: int) -> int:
    """Numbers in the row of a block."""
    return 1 + size + size * size + v + v * size + v * v


def split(row: Floats, size: int, v: int) -> Sums:
    """The parts of a row (width,)."""
    loans, cell = 1 + size, 1 + size + size * size
    both = cell + v
    cells = both + v * size
    return Sums(
        float(row[0]), row[1:loans], row[loans:cell], row[cell:both], row[both:cells].reshape((v, size)),
        row[cells:].reshape((v, v)),
    )  # fmt: skip


@lean
def exponentials(
    at: int, n: int, stays: Stays, weights: Floats, s: Floats, exp_s: Floats, events: tuple[int, int],
    z_event: Floats, event: Floats,
) -> None:  # fmt: skip
    """e^s of n stays, and the predictor of those among them that end with an event; ``s`` (BATCH,) is for passing use."""
    w, flat, codes, k = stays.dense.shape[1], stays.dense.reshape(-1), stays.codes, 0
    while k + WIDTH <= n:
        store(s, k, _eight(flat, (at + k) * w, w, weights))
        k += WIDTH
    while k < n:
        s[k] = 0.0
        for j in range(w):
            s[k] += flat[(at + k) * w + j] * weights[j]
        k += 1
    top = 0.0
    for k in range(n):
        i = nth(at + k)
        s[k] += stays.offset[i]
        for q in range(codes.shape[1]):
            s[k] += weights[nth(codes[i, q])]
        if not abs(s[k]) <= top:
            top = abs(s[k])
    e = events[0]
    while e < events[1] and stays.event_at[e] < at + n:
        event[e] = s[stays.event_at[e] - at] + z_event[e]
        e += 1
    k = 0
    while k + WIDTH <= n and top < PLAIN:
        store(exp_s, at + k, exp_lanes(load(s, k)))
        k += WIDTH
    while k < n:
        exp_s[at + k] = math.exp(s[k])
        k += 1


@lean
def _eight(flat: Floats, at: int, w: int, weights: Floats) -> Vec:
    """Sums of the columns of eight neighbours times weights."""
    zero = spread(0.0)
    a, b, c, d, e, f, g, h = zero, zero, zero, zero, zero, zero, zero, zero
    v = 0
    while v < w:
        x = load(weights, v)
        a = times_plus(load(flat, at + v), x, a)
        b = times_plus(load(flat, at + w + v), x, b)
        c = times_plus(load(flat, at + 2 * w + v), x, c)
        d = times_plus(load(flat, at + 3 * w + v), x, d)
        e = times_plus(load(flat, at + 4 * w + v), x, e)
        f = times_plus(load(flat, at + 5 * w + v), x, f)
        g = times_plus(load(flat, at + 6 * w + v), x, g)
        h = times_plus(load(flat, at + 7 * w + v), x, h)
        v += WIDTH
    return sums_of_eight(a, b, c, d, e, f, g, h)


@lean
def largest(ids: Ints, stays: Stays, blocks: Blocks) -> tuple[int, int, int]:
    """Most stays, events and cells of a block."""
    most, events, cells = 0, 0, 0
    for b in ids:
        most = max(most, blocks.stay[b + 1] - blocks.stay[b])
        events = max(events, blocks.event[b + 1] - blocks.event[b])
        cells = max(cells, stays.starts[blocks.last[b] + 1] - stays.starts[blocks.first[b]])
    return most, events, cells


@lean
def running_sums(first: int, last: int, starts: Ints, values: Floats, out: Floats) -> None:
    """Writes sums of ``values`` (cells,) along the tracks from ``first`` to ``last``, from the first one's first cell on."""
    for t in range(first, last + 1):
        total = 0.0
        for cell in range(starts[t], starts[t + 1]):
            total += values[cell]
            out[cell - starts[first]] = total


@lean
def end_cells(
    base: int, n: int, stays: Stays, shape: tuple[int, int], across: Floats, score: Floats, scaled: Floats, to: Floats
) -> None:  # fmt: skip
    """Adds what n cells from ``base`` on give: ``across`` (n * size,) information with loan columns, ``score`` (n,).

    scaled (BATCH * v,) is for passing use
    """
    (size, v), z, kc, u = shape, stays.z, stays.columns, 0
    to_score = 1 + size + size * size
    joint = to_score + v
    while u < v:
        total = load(to, to_score + u)
        for k in range(n):
            x = load(z, (base + k) * kc + u)
            total = times_plus(spread(score[k]), x, total)
            store(scaled, k * v + u, spread(across[k * size]) * x)
        store(to, to_score + u, total)
        u += WIDTH
    add_products(z, base * kc, kc, across, 0, size, n, (v, size), to, joint, size)
    add_products(scaled, 0, v, z, base * kc, kc, n, (v, 0), to, joint + v * size, v)
