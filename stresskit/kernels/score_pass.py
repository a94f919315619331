"""Sums of outer products of the scores of stays, and scores by calendar period, block after block in one call.

Conventions as in :mod:`stresskit.kernels.stay_blocks` and :mod:`stresskit.kernels.power_pass`: the score of a row without
event is minus a polynomial in e^eta for stays that powers carry, and taken row by row for others: the logit. Of a log
hazard it is -e^eta, so that running sums carry every stay. The sums of a block lie in one row: (wide * wide,) products of scores with dense and cell columns, wide = w + v, known below the diagonal;
(size * wide,) of scores with levels times those; (size * size,) of levels; (periods * (size + v),) scores by period.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.event_rows import one
from stresskit.kernels.gram import BATCH, add_products
from stresskit.kernels.power_pass import (
    Carried,
    across_columns,
    empty,
    leave,
    of_cell,
    powers_of_stay,
    sums_of_parts,
    table,
)
from stresskit.kernels.stay_blocks import Blocks, Stays, largest
from stresskit.kernels.vectors import WIDTH, load, nth, spread, store, times_plus
from stresskit.kernels.walks import add_row, add_stay

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class ScorePowers(NamedTuple):
    """Coefficients of x, x^2, ... of minus the score of a row without event, d of them, a multiple of eight.

    joint (d,)    the same to fewer digits: the first f of them
    limit, top    a stay is carried by powers while its largest e^eta is at most ``limit``, its e^s and e^z at most ``top``
    """

    alone: Floats
    joint: Floats
    f: int
    limit: float
    top: float


@compiled
def score_width(w: int, size: int, v: int, periods: int) -> int:
    """Numbers in the row of a block."""
    return (w + v) * (w + v) + size * (w + v) + size * size + periods * (size + v)


@compiled
def score_pass(
    ids: Ints, stays: Stays, blocks: Blocks, shape: tuple[int, int, int], powers: ScorePowers, exp_z: Floats,
    exp_s: Floats, event: Floats, period: Ints, apart: Ints, loan_apart: Floats, cell_apart: Floats,
) -> Floats:  # fmt: skip
    """(blocks, score width) the sums of the blocks ``ids``.

    shape = (size, v, periods);  period (cells,)
    apart (m,)  place of a stay whose score is wanted by itself and left out of the products; -1 for the others
    loan_apart (r,), cell_apart (r * v,)  written: such scores, of the ones and of the cell columns
    """
    size, v, periods = shape
    d, f, w = powers.alone.size, powers.f, stays.dense.shape[1]
    wide, length = w + v, score_width(w, size, v, periods)
    out = np.zeros(ids.size * length)
    most, events, cells = largest(ids, stays, blocks)
    power, sums, sums_z = np.empty(cells * d), np.empty(cells * d), np.empty(cells * f * v)
    carried, terms, parts, factors = (
        np.empty(most * d),
        np.empty(events),
        np.zeros(BATCH * d),
        np.empty(BATCH),
    )
    rest, rows, one_by_one = np.empty(cells * (size + 1)), np.empty(BATCH * wide), np.empty(BATCH)
    carry = Carried(np.empty(d), np.empty(f * w), np.empty((size - w) * d))
    across, extra = np.empty(size), np.empty(size)
    for k in range(ids.size):
        b, to = ids[k], out[k * length : (k + 1) * length]
        start, end = stays.starts[blocks.first[b]], stays.starts[blocks.last[b] + 1]
        rest[: (end - start) * (size + 1)] = 0.0
        _over_stays(
            b, stays, blocks, (size, v), powers, exp_z, exp_s, event,
            (power, sums, sums_z, carried, terms, rest, rows, one_by_one, parts, factors),
            apart, loan_apart, cell_apart, to,
        )  # fmt: skip
        _over_cells(
            b, stays, blocks, (size, v), powers, period, (power, carried, terms, rest, across, extra), carry,
            to[wide * wide + size * wide + size * size :],
        )  # fmt: skip
    return out.reshape((ids.size, length))


@lean
def _cell_table(
    stays: Stays, t: int, shape: tuple[int, int, int], joint: Floats, power: Floats, sums: Floats
) -> None:
    """Writes running sums of joint[f] (e^z)^(f + 1) times the cell columns along track t, from sums[0] on.

    shape = (f, v, d); power (cells * d,) of e^z
    """
    (fs, v, d), first, kc = shape, stays.starts[t], stays.columns
    sums[: fs * v] = 0.0
    for cell in range(first + 1, stays.starts[t + 1]):
        for f in range(fs):
            u, at = 0, ((cell - first) * fs + f) * v
            factor = spread(power[(cell - first) * d + f] * joint[f])
            while u < v:
                store(
                    sums,
                    at + u,
                    times_plus(factor, load(stays.z, cell * kc + u), load(sums, at - fs * v + u)),
                )
                u += WIDTH


@lean
def _over_stays(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], powers: ScorePowers, exp_z: Floats, exp_s: Floats,
    event: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats],
    apart: Ints, loan_apart: Floats, cell_apart: Floats, to: Floats,
) -> None:  # fmt: skip
    """Products of the scores of stays, and what they carry."""
    (size, v), d, f = shape, powers.alone.size, powers.f
    w = stays.dense.shape[1]
    power, sums, sums_z, carried, terms, rest, rows, one_by_one, parts, factors = scratch
    wide, start, begin = w + v, stays.starts[blocks.first[b]], blocks.stay[b]
    e, events, track, high, at = (
        blocks.event[b],
        blocks.event[b + 1],
        blocks.first[b] - 1,
        0.0,
        blocks.stay[b],
    )
    while at < blocks.stay[b + 1]:
        n = min(BATCH, blocks.stay[b + 1] - at)
        for k in range(n):
            i, to_carried, x = at + k, (at + k - begin) * d, exp_s[at + k]
            while track < blocks.first[b] or stays.enter[i] >= stays.starts[track + 1]:
                track += 1
                first = stays.starts[track]
                place, at_z = (first - start) * d, (first - start) * f * v
                high = table(
                    first, stays.starts[track + 1], d, exp_z, powers.top, power[place:], sums[place:]
                )
                _cell_table(stays, track, (f, v, d), powers.joint, power[place:], sums_z[at_z:])
            enter, last = stays.enter[i] - start, stays.last[i] - start
            one_by_one[k] = 0.0
            if x * high <= powers.limit and x <= powers.top and high <= powers.top:
                powers_of_stay(
                    x, stays.weight[i], d, sums, enter * d, last * d, carried, to_carried, parts, k * d
                )
                _cell_score(
                    x, -stays.weight[i], f, v, sums_z, enter * f * v, last * f * v, rows, k * wide + w
                )
            else:
                carried[to_carried : to_carried + d], parts[k * d : (k + 1) * d] = 0.0, 0.0
                one_by_one[k] = _row_by_row(i, stays, shape, x, exp_z, start, rest, rows, k * wide + w)
        sums_of_parts(parts, n, d, powers.alone, factors)
        for k in range(n):
            factors[k] = one_by_one[k] - stays.weight[at + k] * factors[k]
        e = scores_of(
            at, n, (e, blocks.event[b], events), stays, (size, v), (False, event, terms), factors, rows,
            (apart, loan_apart, cell_apart), to,
        )  # fmt: skip
        at += n


@lean
def scores_of(
    at: int, n: int, events: tuple[int, int, int], stays: Stays, shape: tuple[int, int],
    of_events: tuple[bool, Floats, Floats], factors: Floats, rows: Floats, apart: tuple[Ints, Floats, Floats], to: Floats,
) -> int:  # fmt: skip
    """Adds the products of the scores of n stays; returns the first event of those after them.

    events     (first event of these stays, first and last one of the block)
    of_events  (log hazard, linear predictors of event rows, (events,) written: their scores)
    factors    (n,) scores of the rows without event, of the ones; rows (n * wide,) those of the cell columns, to be completed
    apart      as for :func:`score_pass`: places, scores of the ones and of the cell columns
    """
    (size, v), (log_hazard, event, terms), (places, loan_apart, cell_apart) = shape, of_events, apart
    (e, first, end), w, flat = events, stays.dense.shape[1], stays.dense.reshape(-1)
    wide = w + v
    for k in range(n):
        i, factor = nth(at + k), factors[k]
        if e < end and stays.event_at[nth(e)] == i:
            score = stays.weight[i]
            if log_hazard:
                _, score, _ = one(event[e], stays.weight[i], False)
            terms[e - first] = score
            factor += score
            add_row(rows, k * wide + w, stays.z, stays.event_cell[e] * stays.columns, v, score)
            e += 1
        if places[i] >= 0:
            loan_apart[places[i]] = factor
            for j in range(v):
                cell_apart[places[i] * v + j] = rows[k * wide + w + j]
                rows[k * wide + w + j] = 0.0
            factor = 0.0
        u = 0
        while u < w:
            store(rows, k * wide + u, spread(factor) * load(flat, i * w + u))
            u += WIDTH
        for q in range(stays.codes.shape[1]):
            code = stays.codes[i, q]
            add_row(to, wide * wide + code * wide, rows, k * wide, wide, factor)
            for other in range(stays.codes.shape[1]):
                to[nth(wide * wide + size * wide + code * size + stays.codes[i, other])] += factor * factor
    add_products(rows, 0, wide, rows, 0, wide, n, (wide, 0), to, 0, wide)
    return e


@lean
def _cell_score(
    x: float, factor: float, f: int, v: int, sums: Floats, enter: int, last: int, rows: Floats, to: int
) -> None:
    """Writes ``factor`` times the polynomial over the rows of a stay times the cell columns to rows[to:]."""
    u = 0
    while u < v:
        total, at = spread(0.0), (f - 1) * v + u
        while at >= 0:
            total = spread(x) * (total + (load(sums, last + at) - load(sums, enter + at)))
            at -= v
        store(rows, to + u, spread(factor) * total)
        u += WIDTH


@lean
def _row_by_row(
    i: int, stays: Stays, shape: tuple[int, int], exp_s: float, exp_z: Floats, start: int, rest: Floats, rows: Floats,
    to: int,
) -> float:  # fmt: skip
    """The same from the rows of a stay, minus whose scores are added to their cells of ``rest`` with the columns."""
    (size, v), w, flat, weight, total = (
        shape,
        stays.dense.shape[1],
        stays.dense.reshape(-1),
        stays.weight[i],
        0.0,
    )
    rows[to : to + v] = 0.0
    for cell in range(stays.enter[i] + 1, stays.last[i] + 1):
        x = exp_s * exp_z[cell]
        p = weight * (x / (1.0 + x))
        total -= p
        add_stay(rest, (cell - start) * (size + 1), flat, i, w, stays.codes, p)
        add_row(rows, to, stays.z, cell * stays.columns, v, -p)
    return total


@lean
def _over_cells(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], powers: ScorePowers, period: Ints,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats], carry: Carried, to: Floats,
) -> None:  # fmt: skip
    """Scores by period."""
    (size, v), d, w, flat = shape, powers.alone.size, stays.dense.shape[1], stays.dense.reshape(-1)
    power, carried, terms, rest, across, extra = scratch
    begin, start = blocks.stay[b], stays.starts[blocks.first[b]]
    p, e, g = blocks.stay[b + 1], blocks.late[b + 1] - 1, blocks.event[b + 1] - 1
    for t in range(blocks.last[b], blocks.first[b] - 1, -1):
        empty(carry)
        for cell in range(stays.starts[t + 1] - 1, stays.starts[t], -1):
            after = p
            while p > begin and stays.last[p - 1] == cell:
                p -= 1
            leave(carry, stays, p, after, begin, carried, 1.0)
            while e >= blocks.late[b] and stays.enter[stays.late[e]] == cell:
                leave(carry, stays, stays.late[e], stays.late[e] + 1, begin, carried, -1.0)
                e -= 1
            z, mine, at = (cell - start) * d, (cell - start) * (size + 1), period[cell] * (size + v)
            across_columns(across, 0, size, carry, powers.joint, power, z, rest, mine)
            across[0] = of_cell(carry.lone, powers.alone, 0, power, z) + rest[mine]
            add_row(to, at, across, 0, size, -1.0)
            score = -across[0]
            if g >= blocks.event[b] and stays.event_cell[g] == cell:
                extra[:] = 0.0
                while g >= blocks.event[b] and stays.event_cell[g] == cell:
                    score += terms[g - blocks.event[b]]
                    add_stay(extra, 0, flat, stays.event_at[g], w, stays.codes, terms[g - blocks.event[b]])
                    g -= 1
                add_row(to, at, extra, 0, size, 1.0)
            add_row(to, at + size, stays.z, cell * stays.columns, v, score)
        while p > begin and stays.last[p - 1] == stays.starts[t]:
            p -= 1
        while e >= blocks.late[b] and stays.enter[stays.late[e]] == stays.starts[t]:
            e -= 1
