"""Loans marched forward in lanes: exits, balances, losses, sums by cell. See :mod:`stresskit.kernels.lanes`.

Eight lanes at a time go through a *segment* of steps with all they carry in registers; a segment ends where something
is noted or after SEGMENT steps, so that its odds, balances and sums stay in the fastest memory. Odds come first, into
``buf``; then per step one division, flows, balance by a recursion without cancellation, discount by multiplication.
Between segments lane values live in one array ``st`` whose rows start at the constants below.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, inlined, lean
from stresskit.kernels.lanes import LANES, RUN_CHUNKS, Book, Dense, Out, Paths, Ratios
from stresskit.kernels.odds import LOGIT, exp_lanes, given_run, link_run, product_run
from stresskit.kernels.vectors import WIDTH, load, spread, store, where_less

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]
Ints = NDArray[np.int64]

(
    _S, _PD, _PO, _G, _EL, _EX, _D,  # survival, sums of exits, product of 1 + default odds, losses, exposed, discount
    _LGD, _UP, _W, _V, _A, _SCALE, _TERM, _LIFE,
    _BEYOND, _KEPT,
    _YD, _YP, _YDA, _YL, _YEL,  # sums since the last edge
) = (LANES * k for k in range(22))  # fmt: skip
_ROWS = 22

#: Most steps of a segment.
SEGMENT = 40
_RUN = SEGMENT * LANES
_OD, _OP, _OX, _XX = (
    0,
    _RUN,
    2 * _RUN,
    3 * _RUN,
)  # odds in buf: default, payoff, other causes together, one of them
_TMP = 4 * _RUN  # eight places for what goes lane by lane

_ON, _MATURED, _DEFAULT, _PAYOFF, _BALANCE, _AMOUNT, _EXPOSED, _LOSS = (WIDTH * k for k in range(8))
_SUMS = 8
_STEP = _SUMS * WIDTH


@lean
def _begin(st: Floats, book: Book, c: int) -> None:
    """Lane values of chunk c before the first step."""
    n, at = book.size[c], book.start[c]
    st[:] = 0.0
    for i in range(n):
        st[_S + i] = book.present[at + i]
        st[_G + i] = 1.0
        st[_D + i] = book.d0[at + i]
        st[_W + i] = book.w[at + i]
    for i in range(n):
        st[_UP + i] = book.up[at + i]
        st[_LGD + i] = book.lgd[at + i]
        st[_TERM + i] = book.term[at + i]
        st[_LIFE + i] = book.life[at + i]


@lean
def _balances(st: Floats, bal: Floats, book: Book, dense: Dense, c: int) -> None:
    """bal[k * LANES + i]: balance after k = 0 .. steps payments."""
    n, at, steps = book.size[c], book.start[c], book.steps[c]
    if dense.balance.size > 0:
        for k in range(steps + 1):
            for i in range(n):
                bal[k * LANES + i] = dense.balance[k, at + i]
        return
    for i in range(0, n, WIDTH):
        v, scale, term = load(book.v, at + i), load(book.scale, at + i), load(book.term, at + i)
        a = load(book.annuity, at + i)
        store(bal, steps * LANES + i, a * scale)
        for k in range(steps - 1, -1, -1):
            a = where_less(spread(float(k)), term, 1.0 + v * a, 0.0)
            store(bal, k * LANES + i, a * scale)


@lean
def _most(b: Floats, h: int, count: int) -> float:
    top = 0.0
    for k in range(h, h + count):
        top = max(top, b[k])
    return 1.000001 * top


@lean
def _products(
    buf: Floats, to: int, a: Floats, at: int, n: int, b: Floats, h: int, count: int, top: float, link: int
) -> None:
    """Odds of a cause that factors for lanes at .. at + n - 1, whose largest e^s is ``top``, and ``count`` steps after h."""
    top *= _most(b, h, count)
    for i in range(0, n, WIDTH):
        product_run(buf, to + i * SEGMENT, a, at + i, b, h, count, top, link)


@lean
def _given(
    buf: Floats, to: int, x: Floats, tops: Floats, at: int, n: int, h: int, count: int, link: int
) -> None:
    """Odds of a cause that does not."""
    top = _most(tops, h, count)
    for i in range(0, n, WIDTH):
        given_run(buf, to + i * SEGMENT, x, h, at + i, count, top, link)


@lean
def _index(buf: Floats, inverse: Floats, which: Ints, first: Ints, at: int, h: int) -> None:
    """1 / index of eight loans at the start of step h + 1."""
    for i in range(WIDTH):
        buf[_TMP + i] = inverse[which[at + i], max(h, first[at + i])]


@lean
def _move(
    buf: Floats, to: int, bal: Floats, ratios: Ratios, m: int, s: int, at: int, n: int, h: int, count: int, link: int
) -> None:  # fmt: skip
    """Products x in buf times e^(slope * balance over value), and odds of them."""
    slope, logged, c, which, first = (
        ratios.slope[m], ratios.logged[m], ratios.c[s, m], ratios.which[m], ratios.first[m],
    )  # fmt: skip
    inverse = ratios.inverse[s, m]
    for i in range(0, n, WIDTH):
        own, most, alike = load(c, at + i), spread(0.0), True
        for j in range(at + i, at + i + WIDTH):
            alike &= which[j] == which[at + i] and first[j] <= h
        for k in range(count):
            if not alike:
                _index(buf, inverse, which, first, at + i, h + k)
                value = load(bal, (h + k) * LANES + i) * own * load(buf, _TMP)
            else:
                value = load(bal, (h + k) * LANES + i) * own * spread(inverse[which[at + i], h + k])
            if logged:
                store(buf, _TMP, value)
                for j in range(_TMP, _TMP + WIDTH):
                    buf[j] = math.log(buf[j])
                value = load(buf, _TMP)
            x = load(buf, to + i * SEGMENT + k * WIDTH) * exp_lanes(slope * value)
            most = where_less(most, x, x, most)
            store(buf, to + i * SEGMENT + k * WIDTH, x)
        store(buf, _TMP, most)
        top = _most(buf, _TMP, WIDTH)
        link_run(buf, to + i * SEGMENT, count, top, link)


@lean
def _odds(
    buf: Floats, bal: Floats, book: Book, paths: Paths, dense: Dense, ratios: Ratios, s: int, c: int, h: int, count: int
) -> None:  # fmt: skip
    """Odds of all causes of chunk c; those of third and further causes together in their row."""
    n, at, row = book.size[c], book.start[c], book.row[c]
    for cause in range(book.a.shape[0]):
        d, link, to = dense.at[cause], paths.links[cause], min(cause, 3) * _RUN
        term = -1
        for m in range(ratios.cause.size):
            if ratios.cause[m] == cause:
                term = m
        if d >= 0:
            _given(buf, to, dense.x[d], dense.top[d], at, n, h, count, link)
        elif term >= 0:
            _products(buf, to, book.a[cause], at, n, paths.b[s, cause, row], h, count, 0.0, LOGIT)
            _move(buf, to, bal, ratios, term, s, at, n, h, count, link)
        else:
            _products(
                buf, to, book.a[cause], at, n, paths.b[s, cause, row], h, count, book.top[cause, c], link
            )
        if cause > 2:
            for k in range(_RUN):
                buf[_OX + k] += buf[_XX + k]


@lean
def _only_alive(buf: Floats, st: Floats, n: int, h: int, count: int) -> None:
    """No exits after a loan's life."""
    for i in range(0, n, WIDTH):
        end = load(st, _LIFE + i)
        for k in range(count):
            done, j = spread(float(h + k)), i * SEGMENT + k * WIDTH
            store(buf, _OD + j, where_less(done, end, load(buf, _OD + j), 0.0))
            store(buf, _OP + j, where_less(done, end, load(buf, _OP + j), 0.0))
            store(buf, _OX + j, where_less(done, end, load(buf, _OX + j), 0.0))


@inlined
def _segment(
    st: Floats, i: int, odds: int, buf: Floats, bal: Floats, acc: Floats, h: int, count: int, others: bool,
    full: bool, at: int, dense: Dense,
) -> None:  # fmt: skip
    """Lanes i .. i + 7, whose odds begin at ``odds``, over ``count`` steps after h; money by recursion.

    full  with sums since the last edge, and with money as given (slots from ``at``) where it is: what year views and
          contracts need. A constant where it is called, so that what it leaves out is not even compiled.
    """
    s, grown, pd, po = load(st, _S + i), load(st, _G + i), load(st, _PD + i), load(st, _PO + i)
    el, ex, f = load(st, _EL + i), load(st, _EX + i), load(st, _D + i)
    w, up, lgd, term = load(st, _W + i), load(st, _UP + i), load(st, _LGD + i), load(st, _TERM + i)
    yd, yp, yda, yl, yel = (
        load(st, _YD + i), load(st, _YP + i), load(st, _YDA + i), load(st, _YL + i), load(st, _YEL + i),
    )  # fmt: skip
    given = full and dense.balance.size > 0
    for k in range(count):
        j = odds + k * WIDTH
        od, op, b = load(buf, _OD + j), load(buf, _OP + j), load(bal, (h + k) * LANES + i)
        g = 1.0 + od
        whole = g + op
        if others:
            whole += load(buf, _OX + j)
        owed = s * b
        s = s * (1.0 / whole)
        d, p = od * s, op * s
        grown = grown * g
        pd += d
        po += p
        if given:
            f, lgd = load(dense.discount[h + k], at), load(dense.lgd[h + k], at)
            da = d * load(dense.exposure[h + k], at)
        else:
            f = f * w
            da = d * (b * up)
        xd = da * f
        xl = xd * lgd
        ex += xd
        el += xl
        if full:
            yd += d
            yp += p
            yda += da
            yl += da * lgd
            yel += xl
        to = (h + k) * _STEP
        on = where_less(spread(float(h + k + 1)), term, s, 0.0)
        store(acc, to + _ON, load(acc, to + _ON) + on)
        store(acc, to + _DEFAULT, load(acc, to + _DEFAULT) + d)
        store(acc, to + _PAYOFF, load(acc, to + _PAYOFF) + p)
        store(acc, to + _BALANCE, load(acc, to + _BALANCE) + owed)
        store(acc, to + _AMOUNT, load(acc, to + _AMOUNT) + da)
        store(acc, to + _EXPOSED, load(acc, to + _EXPOSED) + xd)
        store(acc, to + _LOSS, load(acc, to + _LOSS) + xl)
    store(st, _S + i, s)
    store(st, _G + i, grown)
    store(st, _PD + i, pd)
    store(st, _PO + i, po)
    store(st, _EL + i, el)
    store(st, _EX + i, ex)
    store(st, _D + i, f)
    if full:
        store(st, _YD + i, yd)
        store(st, _YP + i, yp)
        store(st, _YDA + i, yda)
        store(st, _YL + i, yl)
        store(st, _YEL + i, yel)


@lean
def _segments(
    st: Floats, buf: Floats, bal: Floats, acc: Floats, n: int, h: int, count: int, others: bool, at: int, dense: Dense
) -> None:  # fmt: skip
    for i in range(0, n, WIDTH):
        _segment(st, i, i * SEGMENT, buf, bal, acc, h, count, others, False, at + i, dense)


@lean
def _tabled(
    st: Floats, buf: Floats, bal: Floats, acc: Floats, a: tuple[Floats, Floats], b: tuple[Floats, Floats],
    tops: tuple[float, float], links: tuple[int, int], at: int, n: int, h: int, count: int, dense: Dense,
) -> None:  # fmt: skip
    """Odds of two causes from their tables and the segment, eight lanes after the other: what most books are."""
    top0, top1 = tops[0] * _most(b[0], h, count), tops[1] * _most(b[1], h, count)
    for i in range(0, n, WIDTH):
        product_run(buf, _OD, a[0], at + i, b[0], h, count, top0, links[0])
        product_run(buf, _OP, a[1], at + i, b[1], h, count, top1, links[1])
        _segment(st, i, 0, buf, bal, acc, h, count, False, False, at + i, dense)


@lean
def _full_segments(
    st: Floats, buf: Floats, bal: Floats, acc: Floats, n: int, h: int, count: int, at: int, dense: Dense
) -> None:
    for i in range(0, n, WIDTH):
        _segment(st, i, i * SEGMENT, buf, bal, acc, h, count, True, True, at + i, dense)


@lean
def _year_end(st: Floats, bal: Floats, years: Floats, at: int, done: int, n: int) -> None:
    """Sums since the last edge into years (YEAR_ROWS, slots), and zero again."""
    for i in range(n):
        years[0, at + i] = st[_YD + i]
        years[1, at + i] = st[_YP + i]
        years[2, at + i] = st[_S + i]
        years[3, at + i] = st[_S + i] * bal[done * LANES + i]
        years[4, at + i] = st[_YDA + i]
        years[5, at + i] = st[_YL + i]
        years[6, at + i] = st[_YEL + i]
    st[_YD:] = 0.0


@lean
def _until(h: int, steps: int, least: int, marks: tuple[int, int, int], after: Bools) -> int:
    """Where the segment that begins after h steps ends: at what is noted, at the first loan's end, or when it is long."""
    end = min(steps, h + SEGMENT)
    if h < least < end:
        end = least
    for mark in marks:
        if h < mark < end:
            end = mark
    for k in range(h + 1, end):
        if after[k - 1] != after[k]:
            return k
    return end


@lean
def _after_step(
    st: Floats, loans: Floats, who: Ints, after: Bools, year: int, own: int, done: int, end: bool
) -> None:
    """What is noted when ``done`` steps are done."""
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


@lean
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
            acc[(int(book.life[at + i]) - 1) * _STEP + _MATURED + i % WIDTH] += st[_S + i]


@lean
def _chunk(
    st: Floats, buf: Floats, bal: Floats, acc: Floats, book: Book, paths: Paths, dense: Dense, ratios: Ratios, out: Out,
    s: int, c: int,
) -> None:  # fmt: skip
    """Chunk c along path s; acc gets its lane sums, out its loan rows."""
    n, at, steps, least, own = book.size[c], book.start[c], book.steps[c], book.least[c], book.own[c]
    loans, after, years = out.loans[s], paths.after[s, book.key[c]], paths.edges.size
    full, others = years > 0 or dense.balance.size > 0, book.a.shape[0] > 2
    who, row, last = book.loan[at : at + n], book.row[c], book.a.shape[0] - 1
    tabled = not full and last == 1 and dense.at[0] < 0 and dense.at[1] < 0 and ratios.cause.size == 0
    a, b = (book.a[0], book.a[min(last, 1)]), (paths.b[s, 0, row], paths.b[s, min(last, 1), row])
    tops, links = (book.top[0, c], book.top[min(last, 1), c]), (paths.links[0], paths.links[min(last, 1)])
    _begin(st, book, c)
    h, bucket = 0, 0
    while h < steps:
        edge = paths.edges[bucket] if bucket < years else steps
        end = _until(h, steps, least, (paths.year, own, edge), after)
        if tabled and end <= least:
            _tabled(st, buf, bal, acc, a, b, tops, links, at, n, h, end - h, dense)
        else:
            _odds(buf, bal, book, paths, dense, ratios, s, c, h, end - h)
            if end > least:
                _only_alive(buf, st, n, h, end - h)
            if full:
                _full_segments(st, buf, bal, acc, n, h, end - h, at, dense)
            else:
                _segments(st, buf, bal, acc, n, h, end - h, others, at, dense)
        h = end
        if bucket < years and h in (edge, steps):
            _year_end(st, bal, out.years[s, bucket], at, h, n)
            bucket += 1
        _after_step(st, loans, who, after, paths.year, own, h, h == steps)
    _finish(st, acc, loans, book, c)


@lean
def _add_lanes(acc: Floats, sums: Floats, steps: int) -> None:
    """Lanes of acc added up into sums (CELL_ROWS, H) in a fixed tree; acc is zero afterwards."""
    for h in range(steps):
        for k in range(_SUMS):
            x = acc[h * _STEP + k * WIDTH : h * _STEP + (k + 1) * WIDTH]
            sums[k, h] += ((x[0] + x[4]) + (x[2] + x[6])) + ((x[1] + x[5]) + (x[3] + x[7]))
    acc[: steps * _STEP] = 0.0


@lean
def _runs(
    st: Floats, buf: Floats, bal: Floats, acc: Floats, book: Book, paths: Paths, dense: Dense, ratios: Ratios, out: Out
) -> None:  # fmt: skip
    for r in range(book.slot.size):
        first, last = book.cut[r], book.cut[r + 1]
        steps = 0
        for c in range(first, last):
            _balances(st, bal[c - first], book, dense, c)
            steps = max(steps, book.steps[c])
        for s in range(paths.b.shape[0]):
            for c in range(first, last):
                _chunk(st, buf, bal[c - first], acc, book, paths, dense, ratios, out, s, c)
            _add_lanes(acc, out.sums[s, book.slot[r]], steps)


@compiled
def march(book: Book, paths: Paths, dense: Dense, ratios: Ratios, out: Out) -> None:
    """All runs of ``book`` along all paths: fills ``out.loans`` and ``out.years``, adds to ``out.sums``."""
    horizon = out.sums.shape[3]
    st, buf = np.zeros(_ROWS * LANES), np.zeros(4 * _RUN + WIDTH)
    bal, acc = np.zeros((RUN_CHUNKS, (horizon + 1) * LANES)), np.zeros(horizon * _STEP)
    _runs(st, buf, bal, acc, book, paths, dense, ratios, out)
