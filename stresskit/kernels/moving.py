"""Loops over loans and steps that a chain of array operations would walk many times: rates with resets, indexed ratios."""

from __future__ import annotations

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@njit(cache=True, nogil=True)
def reset_rates(rate: Floats, age: Ints, every: int, terms: Floats, levels: Floats, which: Ints) -> Floats:
    """(b, H) rates in force in steps 1 .. H.

    rate    (b,) in force at as_of;  age (b,) at as_of
    every   periods from reset to reset; a reset takes place where (age + h - 1) is a multiple of it and not 0
    terms   (3, b) margin, floor, cap
    levels  (g, H) of g variables at the end of as_of, as_of + 1, ..;  which (b,) row of levels of each loan
    """
    b, steps = rate.shape[0], levels.shape[1]
    out = np.empty((b, steps))
    for i in range(b):
        now, since, row = rate[i], age[i], which[i]
        phase = since % every
        for k in range(steps):
            if phase == 0 and since + k > 0:
                now = min(max(levels[row, k] + terms[0, i], terms[1, i]), terms[2, i])
            out[i, k] = now
            phase += 1
            if phase == every:
                phase = 0
    return out


@njit(cache=True, nogil=True, error_model="numpy")
def over_indexed(
    amount: Floats, value: Floats, levels: Floats, which: Ints, first: Ints, remaining: Ints
) -> Floats:
    """(b, H) amount (b, H + 1) over value (b,) x level; from column ``remaining`` on each row holds its last one.

    levels  (g, H + 1);  which (b,) row of each loan;  first (b,) column before which its value does not move
    """
    b, steps = amount.shape[0], amount.shape[1] - 1
    out = np.empty((b, steps))
    for i in range(b):
        v, row = value[i], which[i]
        life = min(max(remaining[i], 1), steps)
        for k in range(life):
            out[i, k] = amount[i, k] / (v * levels[row, max(k, first[i])])
        for k in range(life, steps):
            out[i, k] = out[i, life - 1]
    return out
