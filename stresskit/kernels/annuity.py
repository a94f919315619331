"""Level-payment balances of many loans over many steps, compiled: fixed rates by recurrence, changing rates step by step.

With a(m) the present value of m payments of 1, the balance with m payments to go is in proportion to a(m), and
a(m) = v (1 + a(m - 1)), v = 1/(1 + r): sums and products of positive numbers only, so that no digits are lost
(Kellison, The Theory of Interest, 3rd ed. 2008, ch. 3 and 5). Where rates change, the share that is left after a
payment is a(m - 1)/a(m) at the rate of that step, and the shares multiply.
"""

from __future__ import annotations

import math

import numpy as np
from numba import njit
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def annuity_balances(
    repaid: Floats, held: Floats, rates: Floats, remaining: Ints, wait: Ints, steps: int
) -> Floats:
    """(n, steps + 1) balances after 0, 1, .. ``steps`` payments.

    repaid, held   (n,) what the payments repay, and what stays due until maturity
    rates          (n, 1) or (n, steps) fraction per period, > -1
    remaining      (n,) payments to go, >= 1;  wait (n,) of them that are interest alone, < remaining
    Raises ValueError for a rate of -1 or less.
    """
    if rates.size and rates.min() <= -1.0:
        raise ValueError("a rate of -100 % per period or less has no annuity schedule")
    out = np.empty((repaid.shape[0], steps + 1))
    loop = _fixed if rates.shape[1] == 1 else _changing
    loop(
        np.ascontiguousarray(repaid), np.ascontiguousarray(held), np.ascontiguousarray(rates),
        np.ascontiguousarray(remaining), np.ascontiguousarray(wait), out,
    )  # fmt: skip
    return out


@njit(cache=True, nogil=True)
def _fixed(repaid: Floats, held: Floats, rates: Floats, remaining: Ints, wait: Ints, out: Floats) -> None:
    columns = out.shape[1]
    for i in range(out.shape[0]):
        r, n, w = rates[i, 0], remaining[i], wait[i]
        v = 1.0 / (1.0 + r)
        end = min(n, columns - 1)
        left = n - end
        if left == 0:
            a = 0.0
        elif r == 0.0:
            a = float(left)
        else:
            a = -math.expm1(-left * math.log1p(r)) / r
        for k in range(columns - 1, end, -1):
            out[i, k] = 0.0
        start = min(w, end)
        out[i, end] = a
        for k in range(end - 1, start - 1, -1):
            a = v * (1.0 + a)
            out[i, k] = a
        if w > end:  # the horizon ends while only interest is paid
            for k in range(end + 1):
                out[i, k] = repaid[i] + held[i]
            continue
        scale = repaid[i] / a
        for k in range(start + 1, end + 1):
            out[i, k] = out[i, k] * scale + (held[i] if k < n else 0.0)
        for k in range(start + 1):
            out[i, k] = repaid[i] + held[i]


@njit(cache=True, nogil=True)
def _changing(repaid: Floats, held: Floats, rates: Floats, remaining: Ints, wait: Ints, out: Floats) -> None:
    columns = out.shape[1]
    for i in range(out.shape[0]):
        n, w, share = remaining[i], wait[i], 1.0
        last, size, after = math.nan, 0.0, 0.0
        out[i, 0] = repaid[i] + held[i]
        for k in range(1, columns):
            left = n - k  # payments to go after this one
            if left <= 0:
                out[i, k] = 0.0
                continue
            if k > w:
                r = rates[i, k - 1]
                if r == 0.0:
                    share *= left / (left + 1.0)
                else:
                    if r != last:
                        size = abs(math.log1p(r))
                        before = math.expm1(-(left + 1.0) * size)
                    else:
                        before = after
                    after = math.expm1(-left * size)
                    share *= after / before
                    if r < 0.0:  # v^-1 cancelled: no power of a number above 1 is formed
                        share *= math.exp(-size)
                last = r
            out[i, k] = repaid[i] * share + held[i]


def hold_after(values: Floats, remaining: Ints) -> Floats:
    """(n, steps) values of which each row holds its last one in life: column remaining - 1 and later ones alike.

    Works in place where the array is an n-row array of its own, else on a copy.
    """
    rows = remaining.shape[0]
    own = (
        values.shape[0] == rows
        and values.flags.c_contiguous
        and values.flags.writeable
        and values.flags.owndata
    )
    out = values if own else np.array(np.broadcast_to(values, (rows, values.shape[1])))
    _hold(out, np.ascontiguousarray(remaining))
    return out


@njit(cache=True, nogil=True)
def _hold(values: Floats, remaining: Ints) -> None:
    for i in range(values.shape[0]):
        for k in range(max(remaining[i], 1), values.shape[1]):
            values[i, k] = values[i, k - 1]
