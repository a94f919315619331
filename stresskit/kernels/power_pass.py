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
from stresskit.kernels.stay_blocks import Blocks, Stays, end_cells, exponentials, largest, width
from stresskit.kernels.vectors import (
    WIDTH,
    Vec,
    eight_powers,
    load,
    nth,
    spread,
    store,
    sums_of_eight,
    times_plus,
    transposed,
)
from stresskit.kernels.walks import add_batch, add_row, add_stay

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rows whose survival is multiplied up before a logarithm is taken.
TOGETHER = 8


class Powers(NamedTuple):
    """Coefficients of x, x^2, ..., d of them, a multiple of eight.

    stays (3 * d,)  log-likelihood (variance for a log hazard), probability, information
    joint (d,)      information, to fewer digits: the first f of them
    """

    log_hazard: bool
    stays: Floats
    joint: Floats
    f: int
    limit: float
    top: float


class Carried(NamedTuple):
    """Powers of e^s times weight of the stays at risk, summed: alone (d,), times dense columns (f * w,), by level ((size - w) * d,)."""

    lone: Floats
    dense: Floats
    levels: Floats


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
    d, w, length = powers.joint.size, stays.dense.shape[1], width(size, v)
    out = np.zeros(ids.size * length)
    most, events, cells = largest(ids, stays, blocks)
    terms, power, sums, carried = (
        np.empty((2, events)),
        np.empty(cells * d),
        np.empty(cells * d),
        np.empty(most * d),
    )
    rest, left, parts = np.empty(cells * (size + 1)), np.empty(BATCH * w), np.zeros(BATCH * d)
    values, score, info = np.empty(3 * BATCH), np.empty(BATCH), np.empty(BATCH)
    carry = Carried(np.empty(d), np.empty(powers.f * w), np.empty((size - w) * d))
    extra, across, scaled = np.empty(size), np.empty(BATCH * size), np.empty(BATCH * v)
    for k in range(ids.size):
        b, to = ids[k], out[k * length : (k + 1) * length]
        if not filled:
            _predictors(b, stays, blocks, weights, left, exp_s, z_event, event)
        rest[: (stays.starts[blocks.last[b] + 1] - stays.starts[blocks.first[b]]) * (size + 1)] = 0.0
        _over_stays(
            b, stays, blocks, size, powers, exp_z, exp_s, event,
            (terms, power, sums, carried, rest, left, parts, score, info), values, found, to,
        )  # fmt: skip
        _over_cells(
            b,
            stays,
            blocks,
            (size, v),
            powers,
            (terms, power, carried, rest, extra, across, scaled, score),
            carry,
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
def table(first: int, end: int, d: int, exp_z: Floats, top: float, power: Floats, sums: Floats) -> float:
    """Writes powers of min(e^z, top) along a track from [0] on, 0 in its first cell, and their running sums; returns the largest e^z."""
    high = 0.0
    for j in range(d):
        power[j], sums[j] = 0.0, 0.0
    for cell in range(first + 1, end):
        z, at = exp_z[nth(cell)], (cell - first) * d
        if not z <= high:
            high = z
        z = min(z, top)
        here = eight_powers(z)
        for j in range(at, at + d, WIDTH):
            store(power, j, here)
            store(sums, j, load(sums, j - d) + here)
            here *= eighth_power(z)
    return high


@lean
def eighth_power(x: float) -> Vec:
    """x^8 in all places."""
    square = x * x
    return spread((square * square) * (square * square))


@lean
def powers_of_stay(
    x: float, weight: float, d: int, sums: Floats, enter: int, last: int, carried: Floats, to: int, parts: Floats, k: int
) -> None:  # fmt: skip
    """Writes ``weight`` times powers of x to carried[to:], and powers times their sums over the rows of the stay to parts[k:]."""
    here = eight_powers(x)
    for j in range(0, d, WIDTH):
        store(carried, to + j, spread(weight) * here)
        store(parts, k + j, here * (load(sums, last + j) - load(sums, enter + j)))
        here *= eighth_power(x)


@lean
def sums_of_parts(parts: Floats, n: int, d: int, coefficients: Floats, out: Floats) -> None:
    """Writes to out[c * BATCH + k] the parts (n, d) of stay k times coefficients[c * d : (c + 1) * d], summed, for every
    such c; n rounded up to a multiple of eight."""
    for k in range(0, n, WIDTH):
        for j in range(0, d, WIDTH):
            at = k * d + j
            x = transposed(
                load(parts, at), load(parts, at + d), load(parts, at + 2 * d), load(parts, at + 3 * d),
                load(parts, at + 4 * d), load(parts, at + 5 * d), load(parts, at + 6 * d), load(parts, at + 7 * d),
            )  # fmt: skip
            c, to = j, k
            while c < coefficients.size:
                total = spread(0.0) if j == 0 else load(out, to)
                total = times_plus(spread(coefficients[c]), x[0], total)
                total = times_plus(spread(coefficients[c + 1]), x[1], total)
                total = times_plus(spread(coefficients[c + 2]), x[2], total)
                total = times_plus(spread(coefficients[c + 3]), x[3], total)
                total = times_plus(spread(coefficients[c + 4]), x[4], total)
                total = times_plus(spread(coefficients[c + 5]), x[5], total)
                total = times_plus(spread(coefficients[c + 6]), x[6], total)
                total = times_plus(spread(coefficients[c + 7]), x[7], total)
                store(out, to, total)
                c, to = c + d, to + BATCH


@lean
def _over_stays(
    b: int, stays: Stays, blocks: Blocks, size: int, powers: Powers, exp_z: Floats, exp_s: Floats, event: Floats,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats], values: Floats,
    found: Floats, to: Floats,
) -> None:  # fmt: skip
    """Log-likelihood, what the loan columns alone make of score and information, and the powers that the stays carry."""
    w, flat, d = stays.dense.shape[1], stays.dense.reshape(-1), powers.joint.size
    terms, power, sums, carried, rest, left, parts, score, info = scratch
    begin, e, events, start = (
        blocks.stay[b],
        blocks.event[b],
        blocks.event[b + 1],
        stays.starts[blocks.first[b]],
    )
    track, high, at = blocks.first[b] - 1, 0.0, begin
    while at < blocks.stay[b + 1]:
        n = min(BATCH, blocks.stay[b + 1] - at)
        for k in range(n):
            i, to_carried = nth(at + k), (at + k - begin) * d
            while track < blocks.first[b] or stays.enter[i] >= stays.starts[track + 1]:
                track += 1
                first = stays.starts[track]
                place = (first - start) * d
                high = table(
                    first, stays.starts[track + 1], d, exp_z, powers.top, power[place:], sums[place:]
                )
            info[k] = exp_s[i] * high
            if info[k] <= powers.limit:
                enter, last = (stays.enter[i] - start) * d, (stays.last[i] - start) * d
                powers_of_stay(
                    exp_s[i], stays.weight[i], d, sums, enter, last, carried, to_carried, parts, k * d
                )
            else:
                carried[to_carried : to_carried + d] = 0.0
        sums_of_parts(parts, n, d, powers.stays, values)
        for k in range(n):
            i = nth(at + k)
            weight = stays.weight[i]
            one_, p, h = values[k], values[BATCH + k], values[2 * BATCH + k]
            if not info[k] <= powers.limit:
                one_, p, h = _row_by_row(
                    i, weight, exp_s[i], stays, size, powers.log_hazard, exp_z, start, rest
                )
            found[0, i], found[1, i] = p, one_ if powers.log_hazard else h
            score[k], info[k] = -weight * p, weight * h
            if not powers.log_hazard:
                to[0] += weight * one_
            if e < events and stays.event_at[nth(e)] == i:
                _event(e - blocks.event[b], k, event[e], weight, powers.log_hazard, terms, score, info, to)
                e += 1
        add_batch(flat, at, n, w, stays.codes, (score, info, 0), left, (to, 1), (to, 1 + size), size)
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
            p = -math.expm1(-x)
            q = 1.0 - p if x < 1.0 else math.exp(-x)
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
    b: int, stays: Stays, blocks: Blocks, shape: tuple[int, int], powers: Powers,
    scratch: tuple[Floats, Floats, Floats, Floats, Floats, Floats, Floats, Floats], carry: Carried, to: Floats,
) -> None:  # fmt: skip
    """What the cell columns make of score and information, alone and with the loan columns."""
    w, flat, d, size = stays.dense.shape[1], stays.dense.reshape(-1), powers.joint.size, shape[0]
    terms, power, carried, rest, extra, across, scaled, score = scratch
    t, begin, start = blocks.last[b], blocks.stay[b], stays.starts[blocks.first[b]]
    p, e, g = blocks.stay[b + 1], blocks.late[b + 1] - 1, blocks.event[b + 1] - 1
    end = stays.starts[t + 1]
    empty(carry)
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
                score[cell - base] = 0.0
                empty(carry)
                t -= 1
                continue
            leave(carry, stays, p, after, begin, carried, 1.0)
            while e >= blocks.late[b] and stays.enter[stays.late[e]] == cell:
                leave(carry, stays, stays.late[e], stays.late[e] + 1, begin, carried, -1.0)
                e -= 1
            mine, z = (cell - start) * (size + 1), (cell - start) * d
            across_columns(across, row, size, carry, powers.joint, power, z, rest, mine)
            across[row] = of_cell(carry.lone, powers.stays, 2 * d, power, z) + rest[mine]
            score[cell - base] = 0.0
            if not powers.log_hazard:
                score[cell - base] = -of_cell(carry.lone, powers.stays, d, power, z) - rest[mine + size]
            if g >= blocks.event[b] and stays.event_cell[g] == cell:
                extra[:] = 0.0
                while g >= blocks.event[b] and stays.event_cell[g] == cell:
                    score[cell - base] += terms[0, g - blocks.event[b]]
                    add_stay(extra, 0, flat, stays.event_at[g], w, stays.codes, terms[1, g - blocks.event[b]])
                    g -= 1
                add_row(across, row, extra, 0, size, 1.0)
        end_cells(base, end - base, stays, shape, across, score, scaled, to)
        end = base


@lean
def empty(carry: Carried) -> None:
    """Nobody is at risk."""
    carry.lone[:], carry.dense[:], carry.levels[:] = 0.0, 0.0, 0.0


@lean
def leave(
    carry: Carried, stays: Stays, first: int, end: int, begin: int, carried: Floats, sign: float
) -> None:
    """Adds ``sign`` times the powers of some stays, which are at risk in the cells before the one that they leave in."""
    if first == end:
        return
    w, flat, d, j = stays.dense.shape[1], stays.dense.reshape(-1), carry.lone.size, 0
    while j < d:
        total = load(carry.lone, j)
        for i in range(first, end):
            total = times_plus(spread(sign), load(carried, (i - begin) * d + j), total)
        store(carry.lone, j, total)
        j += WIDTH
    for f in range(carry.dense.size // w):
        v = 0
        while v < w:
            total = load(carry.dense, f * w + v)
            for i in range(first, end):
                total = times_plus(
                    spread(sign * carried[nth((i - begin) * d + f)]), load(flat, i * w + v), total
                )
            store(carry.dense, f * w + v, total)
            v += WIDTH
    for i in range(first, end):
        for q in range(stays.codes.shape[1]):
            add_row(carry.levels, (stays.codes[nth(i), q] - w) * d, carried, (i - begin) * d, d, sign)


@lean
def of_cell(lone: Floats, coefficients: Floats, c: int, power: Floats, z: int) -> float:
    """Polynomial with coefficients[c:] in a cell, from what is carried alone and the powers of e^z from power[z] on."""
    total, j = 0.0, lone.size - 1
    while j >= 0:
        total += coefficients[nth(c + j)] * lone[nth(j)] * power[nth(z + j)]
        j -= 1
    return total


@lean
def across_columns(
    across: Floats, row: int, size: int, carry: Carried, joint: Floats, power: Floats, z: int, rest: Floats, mine: int
) -> None:  # fmt: skip
    """Writes a polynomial in a cell times the loan columns, with that of rows taken one by one."""
    d, w = carry.lone.size, size - carry.levels.size // carry.lone.size
    u = 0
    while u < w:
        total = load(rest, mine + u)
        for f in range(carry.dense.size // w):
            total = times_plus(spread(joint[f] * power[nth(z + f)]), load(carry.dense, f * w + u), total)
        store(across, row + u, total)
        u += WIDTH
    while u < size:
        total, at = load(rest, mine + u), (u - w) * d
        for j in range(0, d, WIDTH):
            x = load(joint, j) * load(power, z + j)
            total += sums_of_eight(
                x * load(carry.levels, at + j), x * load(carry.levels, at + d + j),
                x * load(carry.levels, at + 2 * d + j), x * load(carry.levels, at + 3 * d + j),
                x * load(carry.levels, at + 4 * d + j), x * load(carry.levels, at + 5 * d + j),
                x * load(carry.levels, at + 6 * d + j), x * load(carry.levels, at + 7 * d + j),
            )  # fmt: skip
        store(across, row + u, total)
        u += WIDTH
