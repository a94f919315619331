"""The sums of :mod:`stresskit.kernels.score_pass` of a log hazard: the score of a survived row is minus its hazard.

So running sums of e^z, and of e^z times the cell columns, carry every stay, as in :mod:`stresskit.kernels.hazard_pass`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.gram import BATCH
from stresskit.kernels.hazard_pass import cells_before, last_of
from stresskit.kernels.score_pass import score_width, scores_of
from stresskit.kernels.stay_blocks import Blocks, Stays, largest, running_sums
from stresskit.kernels.vectors import WIDTH, load, nth, spread, store, times_plus
from stresskit.kernels.walks import add_leaving, add_row

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@compiled
def hazard_scores(
    ids: Ints, stays: Stays, blocks: Blocks, shape: tuple[int, int, int], exp_z: Floats, exp_s: Floats, event: Floats,
    period: Ints, apart: Ints, loan_apart: Floats, cell_apart: Floats,
) -> Floats:  # fmt: skip
    """(blocks, score width) the sums of the blocks ``ids``; arguments as for :func:`stresskit.kernels.score_pass.score_pass`."""
    size, v, periods = shape
    wide, length = stays.dense.shape[1] + v, score_width(stays.dense.shape[1], size, v, periods)
    out = np.zeros(ids.size * length)
    _, events, cells = largest(ids, stays, blocks)
    running, running_z, leaving = np.empty(cells), np.empty(cells * v), np.zeros(cells * size)
    rows, factors, terms = np.empty(BATCH * wide), np.empty(BATCH), np.empty((2, events))
    scratch = np.empty(size), np.empty(size), np.empty(BATCH * size), np.empty(BATCH), leaving
    for k in range(ids.size):
        b, to = ids[k], out[k * length : (k + 1) * length]
        running_sums(blocks.first[b], blocks.last[b], stays.starts, exp_z, running)
        _running_columns(blocks.first[b], blocks.last[b], stays, v, exp_z, running_z)
        _over_stays(
            b, stays, blocks, (size, v), exp_s, event, (running, running_z, terms, rows, factors, leaving),
            (apart, loan_apart, cell_apart), to,
        )  # fmt: skip
        _over_cells(
            b, stays, blocks, (size, v), exp_z, exp_s, period, terms, scratch,
            to[wide * wide + size * wide + size * size :],
        )  # fmt: skip
    return out.reshape((ids.size, length))


@lean
def _running_columns(first: int, last: int, stays: Stays, v: int, exp_z: Floats, out: Floats) -> None:
    """Writes sums of e^z times the cell columns along the tracks from ``first`` to ``last``, from the first one's first cell on."""
    start, kc = stays.starts[first], stays.columns
    for t in range(first, last + 1):
        u = 0
        while u < v:
            total = spread(0.0)
            for cell in range(stays.starts[t], stays.starts[t + 1]):
                total = times_plus(spread(exp_z[cell]), load(stays.z, cell * kc + u), total)
                store(out, (cell - start) * v + u, total)
            u += WIDTH


@lean
def _over_stays(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], exp_s: Floats, event: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats], apart: tuple[Ints, Floats, Floats], to: Floats,
) -> None:  # fmt: skip
    """Products of the scores of stays, and what leaves every cell."""
    (size, v), (running, running_z, terms, rows, factors, leaving) = shape, scratch
    flat = stays.dense.reshape(-1)
    w, start, e = stays.dense.shape[1], stays.starts[blocks.first[b]], blocks.event[b]
    wide, at = w + v, blocks.stay[b]
    while at < blocks.stay[b + 1]:
        n = min(BATCH, blocks.stay[b + 1] - at)
        for k in range(n):
            i = nth(at + k)
            factor, enter, last = -exp_s[i] * stays.weight[i], stays.enter[i] - start, stays.last[i] - start
            factors[k] = factor * (running[nth(last)] - running[nth(enter)])
            u = 0
            while u < v:
                total = load(running_z, last * v + u) - load(running_z, enter * v + u)
                store(rows, k * wide + w + u, spread(factor) * total)
                u += WIDTH
        e = scores_of(
            at, n, (e, blocks.event[b], blocks.event[b + 1]), stays, shape, (True, event, terms[0]), factors, rows,
            apart, to,
        )  # fmt: skip
        add_leaving(leaving, start, size, flat, at, n, w, stays.codes, stays.last, exp_s, stays.weight)
        at += n
    for g in range(e - blocks.event[b]):
        terms[1, g] = -terms[0, g]


@lean
def _over_cells(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], exp_z: Floats, exp_s: Floats, period: Ints,
    terms: Floats, scratch: tuple[Floats, Floats, Floats, Floats, Floats], to: Floats,
) -> None:  # fmt: skip
    """Scores by period."""
    (size, v), (run, _, across, score, _) = shape, scratch
    reached, low = last_of(b, stays, blocks), stays.starts[blocks.first[b]]
    end = stays.starts[blocks.last[b] + 1]
    run[:] = 0.0
    while end > low:
        base = max(low, end - BATCH)
        reached = cells_before(base, end, reached, b, stays, blocks, size, exp_z, exp_s, terms, scratch)
        for cell in range(base, end):
            at = period[nth(cell)] * (size + v)
            add_row(to, at, across, (cell - base) * size, size, -1.0)
            add_row(to, at + size, stays.z, cell * stays.columns, v, score[nth(cell - base)])
        end = base
