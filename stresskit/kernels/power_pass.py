"""Sums over rows by powers of e^eta, block after block in one call: the logit, and expected information of a log hazard.

Conventions as in :mod:`stresskit.kernels.stay_blocks`. A stay is carried by powers while its largest e^eta is at most
``limit``; the rows of others are taken one by one.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.event_rows import one
from stresskit.kernels.gram import BATCH
from stresskit.kernels.stay_blocks import Blocks, Stays, end_cells, exponentials, width
from stresskit.kernels.vectors import WIDTH, load, spread, store, times_plus
from stresskit.kernels.walks import add_batch, add_row, add_stay

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rows whose survival is multiplied up before a logarithm is taken.
TOGETHER = 8


class Powers(NamedTuple):
    """Coefficients of x, x^2, ...; d of them, a multiple of eight, and f.

    stays (3, d)  log-likelihood (variance for a log hazard), probability, information
    joint (f,)    information, to fewer digits
    """

    log_hazard: bool
    stays: Floats
    joint: Floats
    limit: float
    top: float


@compiled
def power_pass(
    ids: Ints, stays: Stays, blocks: Blocks, shape: tuple[int, int], powers: Powers, weights: Floats, exp_z: Floats,
    z_event: Floats, exp_s: Floats, event: Floats, filled: bool, found: Floats,
) -> Floats:  # fmt: skip
    """(blocks, width) the sums of the blocks ``ids``; of a log hazard no log-likelihood and no score.

    shape, weights, exp_z, z_event, exp_s, event as in :func:`stresskit.kernels.hazard_pass.hazard_pass`
    filled  exp_s and event are there already
    found   (2, m) written: expected events of each stay and their variance, over the rows that the pattern counts
    """
    size, v = shape
    d, f, w, length = powers.stays.shape[1], powers.joint.size, stays.dense.shape[1], width(size, v)
    out = np.zeros(ids.size * length)
    most, cells, events = 0, 0, 0
    for b in ids:
        most = max(most, blocks.stay[b + 1] - blocks.stay[b])
        events = max(events, blocks.event[b + 1] - blocks.event[b])
        cells = max(cells, stays.starts[blocks.last[b] + 1] - stays.starts[blocks.first[b]])
    terms, sums, carried = np.empty((2, events)), np.empty(cells * d), np.empty(most * d)
    rest, left = np.empty(cells * (size + 1)), np.empty(BATCH * w)
    run, lone, extra = np.empty(f * size), np.empty(d), np.empty(size)
    across, scaled, score = np.empty(BATCH * size), np.empty(BATCH * v), np.empty(BATCH)
    info = np.empty(BATCH)
    for k in range(ids.size):
        b, to = ids[k], out[k * length : (k + 1) * length]
        if not filled:
            _predictors(b, stays, blocks, weights, left, exp_s, z_event, event)
        rest[: (stays.starts[blocks.last[b] + 1] - stays.starts[blocks.first[b]]) * (size + 1)] = 0.0
        _over_stays(
            b,
            stays,
            blocks,
            size,
            powers,
            exp_z,
            exp_s,
            event,
            (terms, sums, carried, rest, left, score, info),
            found,
            to,
        )
        _over_cells(
            b,
            stays,
            blocks,
            (size, v),
            powers,
            exp_z,
            (terms, carried, rest, run, lone, extra, across, scaled, score),
            to,
        )
    return out.reshape((ids.size, length))


@lean
def _predictors(
    b: int, stays: Stays, blocks: Blocks, weights: Floats, left: Floats, exp_s: Floats, z_event: Floats, event: Floats
) -> None:  # fmt: skip
    at, e = blocks.stay[b], blocks.event[b]
    while at < blocks.stay[b + 1]:
        n = min(BATCH, blocks.stay[b + 1] - at)
        exponentials(at, n, stays, weights, left, exp_s, (e, blocks.event[b + 1]), z_event, event)
        while e < blocks.event[b + 1] and stays.event_at[e] < at + n:
            e += 1
        at += n


@lean
def _table(first: int, end: int, d: int, exp_z: Floats, top: float, sums: Floats) -> float:
    """Writes running sums of powers of min(e^z, top) along a track, from sums[0] on, and returns the largest e^z."""
    high = 0.0
    for j in range(d):
        sums[j] = 0.0
    for cell in range(first + 1, end):
        if not exp_z[cell] <= high:
            high = exp_z[cell]
        z, p, at = min(exp_z[cell], top), 1.0, (cell - first) * d
        for j in range(at, at + d):
            p *= z
            sums[j] = sums[j - d] + p
    return high


@lean
def _over_stays(
    b: int, stays: Stays, blocks: Blocks, size: int, powers: Powers, exp_z: Floats, exp_s: Floats, event: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats], found: Floats, to: Floats,
) -> None:  # fmt: skip
    """Log-likelihood, what the loan columns alone make of score and information, and the powers that the stays carry."""
    w, flat, codes, d = stays.dense.shape[1], stays.dense.reshape(-1), stays.codes, powers.stays.shape[1]
    terms, sums, carried, rest, left, score, info = scratch
    start = stays.starts[blocks.first[b]]
    begin, end, e, events = blocks.stay[b], blocks.stay[b + 1], blocks.event[b], blocks.event[b + 1]
    track, high, at = blocks.first[b] - 1, 0.0, begin
    while at < end:
        n = min(BATCH, end - at)
        for k in range(n):
            i = at + k
            while track < blocks.first[b] or stays.enter[i] >= stays.starts[track + 1]:
                track += 1
                first = stays.starts[track]
                high = _table(
                    first, stays.starts[track + 1], d, exp_z, powers.top, sums[(first - start) * d :]
                )
            weight, x = stays.weight[i], exp_s[i]
            if x * high <= powers.limit:
                one_, p, h = _polynomials(
                    x, d, powers.stays, sums, (stays.enter[i] - start) * d, (stays.last[i] - start) * d
                )
                power = weight
                for j in range((i - begin) * d, (i - begin + 1) * d):
                    power *= x
                    carried[j] = power
            else:
                one_, p, h = _row_by_row(i, weight, x, stays, size, powers.log_hazard, exp_z, start, rest)
                carried[(i - begin) * d : (i - begin + 1) * d] = 0.0
            found[0, i], found[1, i] = p, one_ if powers.log_hazard else h
            score[k], info[k] = -weight * p, weight * h
            if not powers.log_hazard:
                to[0] += weight * one_
            if e < events and stays.event_at[e] == i:
                _event(e - blocks.event[b], k, event[e], weight, powers.log_hazard, terms, score, info, to)
                e += 1
        add_batch(flat, at, n, w, codes, (score, info, 0), left, (to, 1), (to, 1 + size), size)
        at += n


@lean
def _event(
    e: int, k: int, eta: float, weight: float, log_hazard: bool, terms: Floats, score: Floats, info: Floats, to: Floats
) -> None:  # fmt: skip
    """What event row e adds: the log odds of the logit to log-likelihood and score, a log hazard's expected information."""
    terms[0, e], terms[1, e] = 0.0, 0.0
    if log_hazard:
        _, _, terms[1, e] = one(eta, weight, True)
        info[k] += terms[1, e]
    else:
        terms[0, e] = weight
        to[0] += weight * eta
        score[k] += weight


@lean
def _polynomials(
    x: float, d: int, coefficients: Floats, sums: Floats, enter: int, last: int
) -> tuple[float, float, float]:
    """Sums over the rows of a stay of three polynomials, of which running sums begin at ``enter`` and end at ``last``."""
    first, second, third, j = 0.0, 0.0, 0.0, d - 1
    while j >= 0:
        here = sums[last + j] - sums[enter + j]
        first = x * (first + coefficients[0, j] * here)
        second = x * (second + coefficients[1, j] * here)
        third = x * (third + coefficients[2, j] * here)
        j -= 1
    return first, second, third


@lean
def _row_by_row(
    i: int, weight: float, exp_s: float, stays: Stays, size: int, log_hazard: bool, exp_z: Floats, start: int,
    rest: Floats,
) -> tuple[float, float, float]:  # fmt: skip
    """The same sums of a stay from its rows, which are added to their cells of ``rest``: information with the columns, then P."""
    w, flat = stays.dense.shape[1], stays.dense.reshape(-1)
    first, second, third, survived, together = 0.0, 0.0, 0.0, 1.0, 0
    for cell in range(stays.enter[i] + 1, stays.last[i] + 1):
        x = exp_s * exp_z[cell]
        if log_hazard:
            p, q = -math.expm1(-x), math.exp(-x)
            h = x * (x * q / p if p > 0.0 else x * q)
            first += p * q
        else:
            q = 1.0 / (1.0 + x)
            p = x * q
            h = p * q
            survived *= q
            together += 1
            if together == TOGETHER or not survived > 1e-250:
                first, survived, together = first + math.log(survived), 1.0, 0
        second += p
        third += h
        at = (cell - start) * (size + 1)
        add_stay(rest, at, flat, i, w, stays.codes, weight * h)
        rest[at + size] += weight * p
    if together:
        first += math.log(survived)
    return first, second, third


@lean
def _over_cells(
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], powers: Powers, exp_z: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats], to: Floats,
) -> None:  # fmt: skip
    """What the cell columns make of score and information, alone and with the loan columns."""
    w, flat, codes = stays.dense.shape[1], stays.dense.reshape(-1), stays.codes
    terms, carried, rest, run, lone, extra, across, scaled, score = scratch
    size, t, begin, start = shape[0], blocks.last[b], blocks.stay[b], stays.starts[blocks.first[b]]
    p, e, g = blocks.stay[b + 1], blocks.late[b + 1] - 1, blocks.event[b + 1] - 1
    end = stays.starts[t + 1]
    run[:], lone[:] = 0.0, 0.0
    while end > start:
        base = max(start, end - BATCH)
        for cell in range(end - 1, base - 1, -1):
            after, row = p, (cell - base) * size
            while p > begin and stays.last[p - 1] == cell:
                p -= 1
            if cell == stays.starts[t]:
                # a boundary cell: nobody is at risk in it, and those who leave with it survived no row
                while e >= blocks.late[b] and stays.enter[stays.late[e]] == cell:
                    e -= 1
                across[row : row + size] = 0.0
                run[:], lone[:] = 0.0, 0.0
                score[cell - base] = 0.0
                t -= 1
                continue
            _carry(run, lone, size, stays, p, after, begin, carried, 1.0)
            while e >= blocks.late[b] and stays.enter[stays.late[e]] == cell:
                i = stays.late[e]
                _carry(run, lone, size, stays, i, i + 1, begin, carried, -1.0)
                e -= 1
            probability, information = _of_cell(lone, powers.stays, min(exp_z[cell], powers.top))
            mine = (cell - start) * (size + 1)
            _across(across, row, size, run, powers.joint, min(exp_z[cell], powers.top), rest, mine)
            across[row] = information + rest[mine]
            score[cell - base] = -probability - rest[mine + size]
            if g >= blocks.event[b] and stays.event_cell[g] == cell:
                extra[:] = 0.0
                while g >= blocks.event[b] and stays.event_cell[g] == cell:
                    score[cell - base] += terms[0, g - blocks.event[b]]
                    add_stay(extra, 0, flat, stays.event_at[g], w, codes, terms[1, g - blocks.event[b]])
                    g -= 1
                add_row(across, row, extra, 0, size, 1.0)
            if powers.log_hazard:
                score[cell - base] = 0.0
        end_cells(base, end - base, stays, shape, across, score, scaled, to)
        end = base


@lean
def _carry(
    run: Floats, lone: Floats, size: int, stays: Stays, first: int, end: int, begin: int, carried: Floats, sign: float
) -> None:  # fmt: skip
    """Adds the powers of some stays to those carried along, alone (d,) and times their columns (f * size,)."""
    if first == end:
        return
    w, flat, codes, d, j = stays.dense.shape[1], stays.dense.reshape(-1), stays.codes, lone.size, 0
    while j < d:
        total = load(lone, j)
        for i in range(first, end):
            total = times_plus(spread(sign), load(carried, (i - begin) * d + j), total)
        store(lone, j, total)
        j += WIDTH
    for f in range(run.size // size):
        v = 0
        while v < w:
            total = load(run, f * size + v)
            for i in range(first, end):
                total = times_plus(spread(sign * carried[(i - begin) * d + f]), load(flat, i * w + v), total)
            store(run, f * size + v, total)
            v += WIDTH
        for i in range(first, end):
            for q in range(codes.shape[1]):
                run[f * size + codes[i, q]] += sign * carried[(i - begin) * d + f]


@lean
def _of_cell(lone: Floats, coefficients: Floats, z: float) -> tuple[float, float]:
    """Probability and information of a cell from what is carried."""
    probability, information, j = 0.0, 0.0, lone.size - 1
    while j >= 0:
        probability = z * (probability + coefficients[1, j] * lone[j])
        information = z * (information + coefficients[2, j] * lone[j])
        j -= 1
    return probability, information


@lean
def _across(
    across: Floats, row: int, size: int, run: Floats, joint: Floats, z: float, rest: Floats, mine: int
) -> None:
    """Writes the information of a cell times the loan columns, with that of rows taken one by one."""
    u = 0
    while u < size:
        total, f = spread(0.0), joint.size - 1
        while f >= 0:
            total = spread(z) * times_plus(spread(joint[f]), load(run, f * size + u), total)
            f -= 1
        store(across, row + u, total + load(rest, mine + u))
        u += WIDTH
