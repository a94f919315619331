"""Odds of one cause for a row of lanes, from products of tables: no exponential per loan and step.

With eta = s + z the odds are x = e^s * e^z for the logit and expm1(x) for the cloglog. expm1 is a polynomial up to
1/16, four doublings expm1(2y) = e (e + 2) of it up to 1, and the library's beyond. Which of them a loan gets
depends on its own x alone, never on its neighbours in the row: the branches only spare work that no lane needs.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

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


@compiled
def expm1_small(x: float) -> float:
    """expm1 for 0 <= x <= 1/16."""
    return x + x * x * (_C0 + x * (_C1 + x * (_C2 + x * (_C3 + x * (_C4 + x * _C5)))))


@compiled
def expm1_middle(x: float) -> float:
    """expm1 for 0 <= x <= 1."""
    small = x <= SMALL
    e = expm1_small(x if small else 0.0625 * x)
    d = e * (e + 2.0)
    d = d * (d + 2.0)
    d = d * (d + 2.0)
    d = d * (d + 2.0)
    return e if small else d


@compiled
def product_row(st: Floats, at: int, a: Floats, b: float, n: int) -> None:
    """st[at + i] = a[i] * b for n lanes."""
    for i in range(n):
        st[at + i] = a[i] * b


@compiled
def copy_row(st: Floats, at: int, given: Floats, n: int) -> None:
    """st[at + i] = given[i]."""
    for i in range(n):
        st[at + i] = given[i]


@compiled
def link_row(st: Floats, at: int, top: float, link: int, n: int) -> None:
    """Turns x in st[at : at + n], all of it <= top up to rounding, into odds."""
    top = top * 1.000001
    if link == LOGIT:
        if top > LARGEST:
            for i in range(n):
                st[at + i] = min(st[at + i], LARGEST)
    elif top <= SMALL:
        for i in range(n):
            st[at + i] = expm1_small(st[at + i])
    elif top <= MIDDLE:
        for i in range(n):
            st[at + i] = expm1_middle(st[at + i])
    else:
        for i in range(n):
            x = st[at + i]
            st[at + i] = expm1_middle(x) if x <= MIDDLE else math.expm1(min(x, LIMIT))


def odds_of(x: Any, link: str) -> Floats:
    """Odds for x = e^eta >= 0, any number of them: what the compiled loops compute, for those who compare."""
    row = np.array(x, dtype=np.float64).ravel()
    link_row(row, 0, float(row.max(initial=0.0)), LINK_CODES[link], row.size)
    return row
