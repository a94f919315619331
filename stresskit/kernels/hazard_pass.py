"""Log-likelihood, score and observed information of a log hazard, block after block in one call.

Conventions as in :mod:`stresskit.kernels.stay_blocks`.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.event_rows import one
from stresskit.kernels.gram import BATCH
from stresskit.kernels.stay_blocks import Blocks, Stays, end_cells, exponentials, largest, running_sums, width
from stresskit.kernels.vectors import WIDTH, load, nth, spread, store
from stresskit.kernels.walks import add_batch, add_leaving, add_row, add_stay

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Track, late entry and event on the way through the cells of a block.
Place = tuple[int, int, int]


@compiled
def hazard_pass(
    ids: Ints, stays: Stays, blocks: Blocks, shape: tuple[int, int], weights: Floats, exp_z: Floats, z_event: Floats,
    exp_s: Floats, event: Floats,
) -> Floats:  # fmt: skip
    """(blocks, width) the sums of the blocks ``ids``; writes e^s of their stays and the predictor of their event rows.

    shape = (size, v);  weights (size,) of the loan columns;  exp_z (cells,), 0 in boundary cells;  z_event (events,) z
    of the cells of event rows
    """
    size, v = shape
    length = width(size, v)
    out = np.zeros(ids.size * length)
    _, most, cells = largest(ids, stays, blocks)
    terms, running, leaving = np.empty((2, most)), np.empty(cells), np.zeros(cells * size)
    left, run, extra = np.empty(BATCH * stays.dense.shape[1]), np.empty(size), np.empty(size)
    across, scaled, score = np.empty(BATCH * size), np.empty(BATCH * v), np.empty(BATCH)
    info = np.empty(BATCH)
    for k in range(ids.size):
        b, to = ids[k], out[k * length : (k + 1) * length]
        start = stays.starts[blocks.first[b]]
        running_sums(blocks.first[b], blocks.last[b], stays.starts, exp_z, running)
        _over_stays(
            b, stays, blocks, size, weights, running, start, z_event, exp_s, event, terms, (left, score, info, leaving), to
        )  # fmt: skip
        _over_cells(
            b, stays, blocks, (size, v), exp_z, exp_s, terms, (run, extra, across, scaled, score, leaving), to
        )
    return out.reshape((ids.size, length))


@lean
def _over_stays(
    b: int, stays: Stays, blocks: Blocks, size: int, weights: Floats, running: Floats, start: int, z_event: Floats,
    exp_s: Floats, event: Floats, terms: Floats, scratch: tuple[Floats, Floats, Floats, Floats], to: Floats,
) -> None:  # fmt: skip
    """Log-likelihood, what the loan columns alone make of score and information, and what leaves every cell."""
    w, flat, codes = stays.dense.shape[1], stays.dense.reshape(-1), stays.codes
    left, score, info, leaving = scratch
    first, e, events, last = blocks.event[b], blocks.event[b], blocks.event[b + 1], blocks.stay[b + 1]
    at = blocks.stay[b]
    while at < last:
        n = min(BATCH, last - at)
        exponentials(at, n, stays, weights, left, exp_s, (e, events), z_event, event)
        for k in range(n):
            i = nth(at + k)
            since = running[nth(stays.last[i] - start)] - running[nth(stays.enter[i] - start)]
            h = exp_s[i] * stays.weight[i] * since
            to[0] -= h
            score[k], info[k] = -h, h
            if e < events and stays.event_at[nth(e)] == i:
                loglik, s, h = one(event[e], stays.weight[i], False)
                terms[0, e - first], terms[1, e - first] = s, h
                to[0] += loglik
                score[k] += s
                info[k] += h
                e += 1
        add_batch(flat, at, n, w, codes, (score, info, 0), left, (to, 1), (to, 1 + size), size)
        add_leaving(leaving, start, size, flat, at, n, w, codes, stays.last, exp_s, stays.weight)
        at += n


@lean
def _over_cells(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], exp_z: Floats, exp_s: Floats, terms: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats], to: Floats,
) -> None:  # fmt: skip
    """What the cell columns make of score and information, alone and with the loan columns."""
    (size, v), (run, extra, across, scaled, score, leaving) = shape, scratch
    reached, low = last_of(b, stays, blocks), stays.starts[blocks.first[b]]
    end = stays.starts[blocks.last[b] + 1]
    run[:] = 0.0
    while end > low:
        base = max(low, end - BATCH)
        reached = cells_before(
            base, end, reached, b, stays, blocks, size, exp_z, exp_s, terms, (run, extra, across, score, leaving)
        )  # fmt: skip
        end_cells(base, end - base, stays, (size, v), across, score, scaled, to)
        end = base


@lean
def last_of(b: int, stays: Stays, blocks: Blocks) -> Place:
    """Where the way through the cells of a block begins: at their end."""
    return blocks.last[b], blocks.late[b + 1] - 1, blocks.event[b + 1] - 1


@lean
def cells_before(
    base: int, end: int, reached: Place, b: int, stays: Stays, blocks: Blocks, size: int, exp_z: Floats, exp_s: Floats,
    terms: Floats, scratch: tuple[Floats, Floats, Floats, Floats, Floats],
) -> Place:  # fmt: skip
    """Sums over those at risk in the cells from ``base`` to ``end``, last cell first; returns how far it came.

    terms    (2, events) of the event rows: what they add to the score, and what times their columns to ``across``
    scratch  run (size,), extra (size,), across (BATCH * size,), score (BATCH,), leaving (cells * size,): ``run`` holds the
             columns of those at risk after ``end`` times e^s and weight, ``leaving`` those of every cell that leave in it,
             and 0 afterwards; ``across`` (cells, size) sums at risk times e^z, and ``score`` (cells,), are written
    """
    w, flat, codes, start = (
        stays.dense.shape[1],
        stays.dense.reshape(-1),
        stays.codes,
        stays.starts[blocks.first[b]],
    )
    (t, e, g), (run, extra, across, score, leaving) = reached, scratch
    late, events = blocks.late[b], blocks.event[b]
    for cell in range(end - 1, base - 1, -1):
        row, mine, factor, u = (cell - base) * size, (cell - start) * size, spread(exp_z[nth(cell)]), 0
        if cell == stays.starts[nth(t)]:
            # a boundary cell: nobody is at risk in it, and those who leave with it survived no row
            while e >= late and stays.enter[stays.late[e]] == cell:
                e -= 1
            across[row : row + size] = 0.0
            run[:] = 0.0
            leaving[mine : mine + size] = 0.0
            score[cell - base] = 0.0
            t -= 1
            continue
        while e >= late and stays.enter[stays.late[e]] == cell:
            i = stays.late[e]
            add_stay(leaving, mine, flat, i, w, codes, -exp_s[i] * stays.weight[i])
            e -= 1
        while u < size:
            total = load(run, u) + load(leaving, mine + u)
            store(run, u, total)
            store(across, row + u, factor * total)
            store(leaving, mine + u, spread(0.0))
            u += WIDTH
        score[nth(cell - base)] = -across[nth(row)]
        if g >= events and stays.event_cell[nth(g)] == cell:
            extra[:] = 0.0
            while g >= events and stays.event_cell[g] == cell:
                score[cell - base] += terms[0, g - events]
                add_stay(extra, 0, flat, stays.event_at[g], w, codes, terms[1, g - events])
                g -= 1
            add_row(across, row, extra, 0, size, 1.0)
    return t, e, g
