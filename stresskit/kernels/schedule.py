"""Scheduled balances: annuity, linear and bullet, in closed form.

Level-payment loan (annuity): with rate r per period and n periods to go, the balance after k payments is
B * (1 - v^(n-k)) / (1 - v^n), v = 1/(1+r), which is B(1+r)^k less the accumulated payments
B r / (1 - v^n) (Kellison, The Theory of Interest, 3rd ed. 2008, ch. 5, prospective method). It is computed
with log1p and expm1, so that tiny rates lose no digits, and tends to the linear schedule as r goes to 0.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

SCHEDULES = ("annuity", "linear", "bullet")


def balance_after(
    balance: NDArray[np.float64],
    rate_per_period: NDArray[np.float64],
    remaining: NDArray[np.int64],
    steps: NDArray[np.int64],
    schedule: str,
) -> NDArray[np.float64]:
    """Balance after ``steps`` payments of a loan that owes ``balance`` with ``remaining`` payments to go.

    All arguments broadcast against each other. ``rate_per_period`` is a fraction per period, > -1;
    ``remaining`` and ``steps`` are whole numbers >= 0. From maturity on the balance is 0.
    Raises ValueError for an unknown schedule, a negative count or a rate of -1 or less.
    """
    if schedule not in SCHEDULES:
        raise ValueError(f"schedule {schedule!r} is none of {', '.join(SCHEDULES)}")
    b, r, n, k = np.broadcast_arrays(
        np.asarray(balance, np.float64), np.asarray(rate_per_period, np.float64), remaining, steps
    )
    if b.size and (np.min(n) < 0 or np.min(k) < 0):
        raise ValueError("remaining and steps must not be negative")
    if schedule == "annuity" and b.size and np.min(r) <= -1.0:
        raise ValueError("a rate of -100 % per period or less has no annuity schedule")
    left = np.maximum(n - k, 0).astype(np.float64)
    if schedule == "bullet":
        share = (left > 0).astype(np.float64)
    else:
        share = left / np.maximum(n, 1)
    if schedule == "annuity":
        force = np.log1p(r)
        bends = (force != 0.0) & (n > 0)
        falls = force < 0.0
        size = np.abs(force)
        np.divide(np.expm1(-left * size), np.expm1(-n * size), out=share, where=bends)
        # below zero the same fraction is taken with v^-n cancelled: no power of a number above 1 is formed
        share = np.where(falls & (left > 0), share * np.exp(-(n - left) * size), share)
    result: NDArray[np.float64] = b * share
    return result


def balance_path(
    balance: NDArray[np.float64],
    rate_per_period: NDArray[np.float64],
    remaining: NDArray[np.int64],
    steps: int,
    schedule: str,
) -> NDArray[np.float64]:
    """(n, steps + 1) balances after 0, 1, .. ``steps`` payments; column 0 is ``balance`` itself.

    Shapes and errors as in :func:`balance_after`, with (n,) arrays and one number of steps.
    """
    column: NDArray[Any] = np.arange(steps + 1, dtype=np.int64)[None, :]
    return balance_after(
        np.asarray(balance, np.float64)[:, None],
        np.asarray(rate_per_period, np.float64)[:, None],
        np.asarray(remaining)[:, None],
        column,
        schedule,
    )
