"""Odds of one cause for lanes over some steps, from products of tables: no exponential per loan and step.

With eta = s + z the odds are x = e^s * e^z for the logit and expm1(x) for the cloglog. expm1 is a polynomial up to
1/16, four doublings expm1(2y) = e (e + 2) of it up to 1, and the library's beyond. Which of them a loan gets
depends on its own x alone, never on its neighbours: the branches only spare work that no lane needs.
A *run* of odds is ``count`` steps of eight lanes, contiguous in ``buf`` from ``to`` on.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled, lean
from stresskit.kernels.vectors import WIDTH, Vec, load, spread, store, times_two_to, where_at_most, where_less

Floats = NDArray[np.float64]

LOGIT, CLOGLOG = 0, 1
LINK_CODES = {"logit": LOGIT, "cloglog": CLOGLOG}

#: Largest cumulative hazard of a period that is told apart from certainty, as in :mod:`stresskit.kernels.rollforward`.
LIMIT = 690.0
LARGEST = math.exp(LIMIT)

SMALL, MIDDLE = 0.0625, 1.0
#: (expm1(x) - x) / x^2 on [0, 1/16], interpolated in the Chebyshev nodes of degree 5: relative error of expm1 4.4e-17.
_C0, _C1, _C2, _C3, _C4, _C5 = (
    0.4999999999999993, 0.16666666666751564, 0.04166666650826839, 0.00833334413551778, 0.001388556220295345,
    0.00020312412301907323,
)  # fmt: skip


@lean
def expm1_small(x: Vec) -> Vec:
    """expm1 for 0 <= x <= 1/16."""
    return x + x * x * (_C0 + x * (_C1 + x * (_C2 + x * (_C3 + x * (_C4 + x * _C5)))))


@lean
def expm1_middle(x: Vec) -> Vec:
    """expm1 for 0 <= x <= 1."""
    e = expm1_small(where_at_most(x, SMALL, x, 0.0625 * x))
    d = e * (e + 2.0)
    d = d * (d + 2.0)
    d = d * (d + 2.0)
    d = d * (d + 2.0)
    return where_at_most(x, SMALL, e, d)


#: ln 2 in two parts, the first with so few digits that its multiples are exact, and 1.5 * 2^52, which rounds to whole numbers.
_LN2_HIGH, _LN2_LOW, _LOG2_E, _ROUND = (
    0.693147180369123816490,
    1.90821492927058770002e-10,
    1.4426950408889634,
    6755399441055744.0,
)
_E2, _E3, _E4, _E5, _E6, _E7, _E8, _E9, _E10, _E11, _E12, _E13 = (
    1.0 / math.factorial(k) for k in range(2, 14)
)


@lean
def exp_lanes(x: Vec) -> Vec:
    """e^x, held at |x| = LIMIT: 2^k e^r with |r| <= ln(2) / 2 by Taylor's series to r^13 (remainder 5e-18)."""
    x = where_less(x, LIMIT, where_less(-LIMIT, x, x, -LIMIT), LIMIT)
    shifted = x * _LOG2_E + _ROUND
    k = shifted - _ROUND
    r = (x - k * _LN2_HIGH) - k * _LN2_LOW
    high = _E8 + r * (_E9 + r * (_E10 + r * (_E11 + r * (_E12 + r * _E13))))
    return times_two_to(
        1.0 + (r + r * r * (_E2 + r * (_E3 + r * (_E4 + r * (_E5 + r * (_E6 + r * (_E7 + r * high))))))),
        shifted,
    )


@lean
def product_run(
    buf: Floats, to: int, a: Floats, at: int, b: Floats, first: int, count: int, top: float, link: int
) -> None:
    """Odds of a cause that factors: a[at + lane] = e^s, b[first + k] = e^z of the steps; all products <= top."""
    each = load(a, at)
    if link == CLOGLOG and top <= SMALL:
        for k in range(count):
            store(buf, to + k * WIDTH, expm1_small(each * spread(b[first + k])))
        return
    for k in range(count):
        store(buf, to + k * WIDTH, each * spread(b[first + k]))
    if link == CLOGLOG or top > LARGEST:
        link_run(buf, to, count, top, link)


@lean
def given_run(
    buf: Floats, to: int, x: Floats, first: int, at: int, count: int, top: float, link: int
) -> None:
    """Odds of a cause that does not: x[first + k, at + lane] = e^eta, all of it <= top."""
    for k in range(count):
        for i in range(WIDTH):
            buf[to + k * WIDTH + i] = x[first + k, at + i]
    link_run(buf, to, count, top, link)


@lean
def link_run(buf: Floats, to: int, count: int, top: float, link: int) -> None:
    """Turns x in place, all of it <= top up to rounding, into odds."""
    if link == LOGIT:
        if top > LARGEST:
            for k in range(to, to + count * WIDTH, WIDTH):
                x = load(buf, k)
                store(buf, k, where_less(x, LARGEST, x, LARGEST))
    elif top <= SMALL:
        for k in range(to, to + count * WIDTH, WIDTH):
            store(buf, k, expm1_small(load(buf, k)))
    elif top <= MIDDLE:
        for k in range(to, to + count * WIDTH, WIDTH):
            store(buf, k, expm1_middle(load(buf, k)))
    else:
        for k in range(to, to + count * WIDTH, WIDTH):
            small = expm1_middle(load(buf, k))  # of lanes beyond the limit: something that nobody reads
            for i in range(k, k + WIDTH):
                if buf[i] > MIDDLE:
                    buf[i] = math.expm1(min(buf[i], LIMIT))
                else:
                    buf[i] = -1.0
            x = load(buf, k)
            store(buf, k, where_less(x, 0.0, small, x))


@compiled
def _whole_run(buf: Floats, top: float, link: int) -> None:
    link_run(buf, 0, buf.size // WIDTH, top, link)


def odds_of(x: Any, link: str) -> Floats:
    """Odds for x = e^eta >= 0, any number of them: what the compiled loops compute, for those who compare."""
    given = np.array(x, dtype=np.float64).ravel()
    buf = np.zeros(-(-given.size // WIDTH) * WIDTH)
    buf[: given.size] = given
    _whole_run(buf, float(given.max(initial=0.0)), LINK_CODES[link])
    return buf[: given.size]
