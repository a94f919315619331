"""Loans marched forward step by step in lanes: exits, balances, losses, sums by cell. See :mod:`stresskit.kernels.lanes`.

Per step: odds by product of two tables, one division for all lanes' survival, flows, balance by a recursion without
cancellation, discount by multiplication. All lane values live in one buffer ``st`` whose rows start at the constants
below: with constant distances the compiler sees that rows do not overlap and works on several lanes at once.
Two steps at a time where nothing happens in between: the same additions in the same order, half the traffic.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled
from stresskit.kernels.lanes import LANES, RUN_CHUNKS, Book, Dense, Out, Paths
from stresskit.kernels.odds import copy_row, link_row, product_row

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

(
    _OD, _OP, _OD2, _OP2, _OX, _XX,  # odds: default, payoff, the same one step on, other causes and one of them
    _S, _PD, _PO, _G, _EL, _EX, _D,  # survival, sums of exits, product of 1 + default odds, losses, exposed, discount
    _EAD, _LGD, _UP, _W, _V, _A, _SCALE, _TERM, _LIFE,
    _BEYOND, _KEPT,
    _YD, _YP, _YDA, _YL, _YEL,  # sums since the last edge
) = (LANES * k for k in range(29))  # fmt: skip
_ROWS = 29

_ON, _MATURED, _DEFAULT, _PAYOFF, _BALANCE, _AMOUNT, _EXPOSED, _LOSS = (LANES * k for k in range(8))
_SUMS = 8
_STEP = _SUMS * LANES


@compiled
def _begin(st: Floats, book: Book, c: int) -> None:
    """Lane values of chunk c before the first step."""
    n, at = book.size[c], book.start[c]
    for i in range(n):
        st[_S + i] = book.present[at + i]
        st[_PD + i] = 0.0
        st[_PO + i] = 0.0
        st[_G + i] = 1.0
        st[_EL + i] = 0.0
        st[_EX + i] = 0.0
        st[_BEYOND + i] = 0.0
        st[_OP + i] = 0.0
        st[_OP2 + i] = 0.0
        st[_OX + i] = 0.0
    for i in range(n):
        st[_D + i] = book.d0[at + i]
        st[_W + i] = book.w[at + i]
        st[_UP + i] = book.up[at + i]
        st[_LGD + i] = book.lgd[at + i]
        st[_TERM + i] = book.term[at + i]
        st[_LIFE + i] = book.life[at + i]
    for i in range(n):
        st[_YD + i] = 0.0
        st[_YP + i] = 0.0
        st[_YDA + i] = 0.0
        st[_YL + i] = 0.0
        st[_YEL + i] = 0.0


@compiled
def _balances(st: Floats, bal: Floats, book: Book, dense: Dense, c: int) -> None:
    """bal[k * LANES + i]: balance after k = 0 .. steps payments."""
    n, at, steps = book.size[c], book.start[c], book.steps[c]
    if dense.balance.size > 0:
        for k in range(steps + 1):
            given = dense.balance[k, at : at + n]
            row = bal[k * LANES : k * LANES + n]
            for i in range(n):
                row[i] = given[i]
        return
    for i in range(n):
        st[_V + i] = book.v[at + i]
        st[_A + i] = book.annuity[at + i]
        st[_SCALE + i] = book.scale[at + i]
        st[_TERM + i] = book.term[at + i]
        bal[steps * LANES + i] = st[_A + i] * st[_SCALE + i]
    for k in range(steps - 1, -1, -1):
        row = bal[k * LANES : k * LANES + n]
        paid = float(k)
        for i in range(n):
            a = (1.0 + st[_V + i] * st[_A + i]) if paid < st[_TERM + i] else 0.0
            st[_A + i] = a
            row[i] = a * st[_SCALE + i]


@compiled
def _odds(st: Floats, to: int, a: Floats, b: float, top: float, link: int, n: int) -> None:
    """Odds of a cause that factors, a (n,) e^s and b e^z of the step."""
    product_row(st, to, a, b, n)
    link_row(st, to, top * b, link, n)


@compiled
def _dense_odds(st: Floats, to: int, x: Floats, top: float, link: int, n: int) -> None:
    """Odds of a cause that does not, x (n,) e^eta of the step."""
    copy_row(st, to, x, n)
    link_row(st, to, top, link, n)


@compiled
def _other_odds(st: Floats, book: Book, paths: Paths, dense: Dense, s: int, c: int, h: int) -> None:
    """Sum of the odds of third and further causes."""
    n, at = book.size[c], book.start[c]
    for i in range(n):
        st[_OX + i] = 0.0
    for cause in range(2, book.a.shape[0]):
        d, link = dense.at[cause], paths.links[cause]
        if d >= 0:
            _dense_odds(st, _XX, dense.x[d, h, at : at + n], dense.top[d, h], link, n)
        else:
            b = paths.b[s, cause, book.row[c], h]
            _odds(st, _XX, book.a[cause, at : at + n], b, book.top[cause, c], link, n)
        for i in range(n):
            st[_OX + i] += st[_XX + i]


@compiled
def _only_alive(st: Floats, h: int, n: int) -> None:
    """No exits after a loan's life."""
    done = float(h)
    for i in range(n):
        alive = done < st[_LIFE + i]
        st[_OD + i] = st[_OD + i] if alive else 0.0
        st[_OP + i] = st[_OP + i] if alive else 0.0
        st[_OX + i] = st[_OX + i] if alive else 0.0


@compiled
def _two_steps(st: Floats, bal: Floats, acc: Floats, n: int) -> None:
    """Two steps of lanes that all live on after them."""
    for i in range(n):
        s0 = st[_S + i]
        od = st[_OD + i]
        op = st[_OP + i]
        g = 1.0 + od
        s = s0 / (g + op)
        d = od * s
        p = op * s
        od2 = st[_OD2 + i]
        op2 = st[_OP2 + i]
        g2 = 1.0 + od2
        s2 = s / (g2 + op2)
        d2 = od2 * s2
        p2 = op2 * s2
        st[_S + i] = s2
        st[_G + i] = st[_G + i] * g * g2
        st[_PD + i] = st[_PD + i] + d + d2
        st[_PO + i] = st[_PO + i] + p + p2
        w = st[_W + i]
        f = st[_D + i] * w
        f2 = f * w
        st[_D + i] = f2
        b = bal[i]
        b2 = bal[LANES + i]
        up = st[_UP + i]
        lgd = st[_LGD + i]
        da = d * (b * up)
        da2 = d2 * (b2 * up)
        xd = da * f
        xd2 = da2 * f2
        xl = xd * lgd
        xl2 = xd2 * lgd
        st[_EX + i] = st[_EX + i] + xd + xd2
        st[_EL + i] = st[_EL + i] + xl + xl2
        acc[_ON + i] += s
        acc[_DEFAULT + i] += d
        acc[_PAYOFF + i] += p
        acc[_BALANCE + i] += s0 * b
        acc[_AMOUNT + i] += da
        acc[_EXPOSED + i] += xd
        acc[_LOSS + i] += xl
        acc[_STEP + _ON + i] += s2
        acc[_STEP + _DEFAULT + i] += d2
        acc[_STEP + _PAYOFF + i] += p2
        acc[_STEP + _BALANCE + i] += s * b2
        acc[_STEP + _AMOUNT + i] += da2
        acc[_STEP + _EXPOSED + i] += xd2
        acc[_STEP + _LOSS + i] += xl2


@compiled
def _one_step(st: Floats, bal: Floats, acc: Floats, n: int) -> None:
    """One step, whatever the causes; exposure, discount and LGD stand in their rows."""
    for i in range(n):
        s0 = st[_S + i]
        od = st[_OD + i]
        op = st[_OP + i]
        g = 1.0 + od
        s = s0 / (g + op + st[_OX + i])
        d = od * s
        p = op * s
        st[_S + i] = s
        st[_G + i] = st[_G + i] * g
        st[_PD + i] = st[_PD + i] + d
        st[_PO + i] = st[_PO + i] + p
        da = d * st[_EAD + i]
        xd = da * st[_D + i]
        xl = xd * st[_LGD + i]
        st[_EX + i] = st[_EX + i] + xd
        st[_EL + i] = st[_EL + i] + xl
        acc[_DEFAULT + i] += d
        acc[_PAYOFF + i] += p
        acc[_BALANCE + i] += s0 * bal[i]
        acc[_AMOUNT + i] += da
        acc[_EXPOSED + i] += xd
        acc[_LOSS + i] += xl


@compiled
def _money(st: Floats, bal: Floats, n: int) -> None:
    """Exposure and discount of the next step into their rows."""
    for i in range(n):
        st[_D + i] = st[_D + i] * st[_W + i]
        st[_EAD + i] = bal[i] * st[_UP + i]


@compiled
def _dense_money(st: Floats, exposure: Floats, discount: Floats, lgd: Floats, n: int) -> None:
    """The same with LGD, as given."""
    for i in range(n):
        st[_EAD + i] = exposure[i]
        st[_D + i] = discount[i]
    for i in range(n):
        st[_LGD + i] = lgd[i]


@compiled
def _on_book(st: Floats, acc: Floats, h: int, n: int) -> None:
    """Loans on book at the end of step h + 1: not over by then."""
    done = float(h + 1)
    for i in range(n):
        acc[_ON + i] += st[_S + i] if done < st[_TERM + i] else 0.0


@compiled
def _year_sums(st: Floats, n: int) -> None:
    for i in range(n):
        d = st[_OD + i] * st[_S + i]
        da = d * st[_EAD + i]
        st[_YD + i] += d
        st[_YP + i] += st[_OP + i] * st[_S + i]
        st[_YDA + i] += da
        st[_YL + i] += da * st[_LGD + i]
        st[_YEL + i] += da * st[_D + i] * st[_LGD + i]


@compiled
def _year_end(st: Floats, bal: Floats, years: Floats, at: int, n: int) -> None:
    """Sums since the last edge into years (YEAR_ROWS, slots), and zero again. bal is the balance after the payment."""
    for i in range(n):
        years[0, at + i] = st[_YD + i]
        years[1, at + i] = st[_YP + i]
        years[2, at + i] = st[_S + i]
        years[3, at + i] = st[_S + i] * bal[i]
        years[4, at + i] = st[_YDA + i]
        years[5, at + i] = st[_YL + i]
        years[6, at + i] = st[_YEL + i]
        st[_YD + i] = 0.0
        st[_YP + i] = 0.0
        st[_YDA + i] = 0.0
        st[_YL + i] = 0.0
        st[_YEL + i] = 0.0


@compiled
def _noted(after: Bools, year: int, own: int, done: int) -> bool:
    """Whether something is noted after ``done`` steps, the end of the life aside."""
    return bool(done in (year, own) or after[done - 1] != after[done])


@compiled
def _after_step(
    st: Floats, loans: Floats, who: Ints, after: Bools, year: int, own: int, done: int, end: bool
) -> None:
    """What is noted when ``done`` steps are done; called where :func:`_noted` says so, and at the end."""
    if done == year or (end and done < year):
        for i in range(who.size):
            if who[i] >= 0:
                loans[who[i], 0] = st[_PD + i]
                loans[who[i], 4] = st[_EL + i]
    if done == own:
        for i in range(who.size):
            st[_KEPT + i] = st[_PD + i]
    was = after[done - 1]
    now = False if end else after[done]
    if was != now:
        sign = 1.0 if was else -1.0
        for i in range(who.size):
            st[_BEYOND + i] += sign * st[_PD + i]


@compiled
def _finish(st: Floats, acc: Floats, loans: Floats, book: Book, c: int) -> None:
    """Loan rows at the end of the chunk's life, and matured loans into the step they mature in."""
    n, at, own = book.size[c], book.start[c], book.own[c]
    who = book.loan[at : at + n]
    for i in range(n):
        k = who[i]
        if k >= 0:
            loans[k, 1] = st[_PD + i]
            loans[k, 2] = 1.0 - 1.0 / st[_G + i]
            loans[k, 3] = st[_PO + i]
            loans[k, 5] = st[_EL + i]
            loans[k, 6] = st[_EX + i]
            kept = 0.0 if own <= 0 else st[_KEPT + i]
            loans[k, 7] = 0.0 if own >= book.steps[c] else st[_PD + i] - kept
            loans[k, 8] = st[_BEYOND + i]
    for i in range(n):
        if book.term[at + i] == book.life[at + i]:
            acc[(int(book.life[at + i]) - 1) * _STEP + _MATURED + i] += st[_S + i]


@compiled
def _chunk(
    st: Floats, bal: Floats, acc: Floats, book: Book, paths: Paths, dense: Dense, out: Out, s: int, c: int
) -> None:
    """Chunk c along path s; acc gets its lane sums, out its loan rows."""
    n, at, steps, least, own, row = (
        book.size[c],
        book.start[c],
        book.steps[c],
        book.least[c],
        book.own[c],
        book.row[c],
    )
    causes, years, loans, after, year = (
        book.a.shape[0],
        paths.edges.size,
        out.loans[s],
        paths.after[s, book.key[c]],
        paths.year,
    )
    last = min(causes, 2) - 1
    a0, b0, top0, link0, d0 = (
        book.a[0, at : at + n],
        paths.b[s, 0, row],
        book.top[0, c],
        paths.links[0],
        dense.at[0],
    )
    a1, b1, top1, link1 = (
        book.a[last, at : at + n],
        paths.b[s, last, row],
        book.top[last, c],
        paths.links[last],
    )
    d1, given = dense.at[last], dense.balance.size > 0
    plain = causes <= 2 and years == 0 and not given
    who = book.loan[at : at + n]
    _begin(st, book, c)
    h, bucket = 0, 0
    while h < steps:
        b, sums = bal[h * LANES : (h + 2) * LANES], acc[h * _STEP : (h + 2) * _STEP]
        two = plain and h + 2 < least and not _noted(after, year, own, h + 1)
        if d0 >= 0:
            _dense_odds(st, _OD, dense.x[d0, h, at : at + n], dense.top[d0, h], link0, n)
        else:
            _odds(st, _OD, a0, b0[h], top0, link0, n)
        if last > 0:
            if d1 >= 0:
                _dense_odds(st, _OP, dense.x[d1, h, at : at + n], dense.top[d1, h], link1, n)
            else:
                _odds(st, _OP, a1, b1[h], top1, link1, n)
        if two:
            if d0 >= 0:
                _dense_odds(st, _OD2, dense.x[d0, h + 1, at : at + n], dense.top[d0, h + 1], link0, n)
            else:
                _odds(st, _OD2, a0, b0[h + 1], top0, link0, n)
            if last > 0:
                if d1 >= 0:
                    _dense_odds(st, _OP2, dense.x[d1, h + 1, at : at + n], dense.top[d1, h + 1], link1, n)
                else:
                    _odds(st, _OP2, a1, b1[h + 1], top1, link1, n)
        if two:
            _two_steps(st, b, sums, n)
            h += 2
        else:
            if causes > 2:
                _other_odds(st, book, paths, dense, s, c, h)
            if h + 1 > least:
                _only_alive(st, h, n)
            if given:
                _dense_money(
                    st,
                    dense.exposure[h, at : at + n],
                    dense.discount[h, at : at + n],
                    dense.lgd[h, at : at + n],
                    n,
                )
            else:
                _money(st, b, n)
            _one_step(st, b, sums, n)
            _on_book(st, sums, h, n)
            h += 1
            if years > 0:
                _year_sums(st, n)
                if bucket < years and (h == paths.edges[bucket] or h == steps):
                    _year_end(st, bal[h * LANES : (h + 1) * LANES], out.years[s, bucket], at, n)
                    bucket += 1
        if h == steps or _noted(after, year, own, h):
            _after_step(st, loans, who, after, year, own, h, h == steps)
    _finish(st, acc, loans, book, c)


@compiled
def _add_lanes(acc: Floats, sums: Floats, steps: int) -> None:
    """Lanes of acc added up into sums (CELL_ROWS, H), always the second half onto the first; acc is zero afterwards."""
    for h in range(steps):
        row = acc[h * _STEP : (h + 1) * _STEP]
        for k in range(_SUMS):
            lane = row[k * LANES : (k + 1) * LANES]
            for i in range(32):
                lane[i] += lane[32 + i]
            for i in range(16):
                lane[i] += lane[16 + i]
            for i in range(8):
                lane[i] += lane[8 + i]
            left, right = (lane[0] + lane[4]) + (lane[2] + lane[6]), (lane[1] + lane[5]) + (lane[3] + lane[7])
            sums[k, h] += left + right
        for i in range(_STEP):
            row[i] = 0.0


@compiled
def march(book: Book, paths: Paths, dense: Dense, out: Out) -> None:
    """All runs of ``book`` along all paths: fills ``out.loans`` and ``out.years``, adds to ``out.sums``."""
    horizon = out.sums.shape[3]
    st = np.zeros(_ROWS * LANES)
    bal = np.zeros((RUN_CHUNKS, (horizon + 2) * LANES))
    acc = np.zeros((horizon + 1) * _STEP)
    for r in range(book.slot.size):
        first, last = book.cut[r], book.cut[r + 1]
        steps = 0
        for c in range(first, last):
            _balances(st, bal[c - first], book, dense, c)
            steps = max(steps, book.steps[c])
        for s in range(paths.b.shape[0]):
            for c in range(first, last):
                _chunk(st, bal[c - first], acc, book, paths, dense, out, s, c)
            _add_lanes(acc, out.sums[s, book.slot[r]], steps)
