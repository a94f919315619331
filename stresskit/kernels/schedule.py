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


def run_off(
    balance: NDArray[np.float64],
    rates: NDArray[np.float64],
    remaining: NDArray[np.int64],
    steps: int,
    schedule: str,
    *,
    interest_only: NDArray[np.int64],
    kept: NDArray[np.float64],
) -> NDArray[np.float64]:
    """(n, steps + 1) balances after 0, 1, .. ``steps`` payments of loans whose rate may change and whose terms may wait.

    rates          (n, 1) fraction per period for all steps, or (n, steps) in force in each
    interest_only  (n,) payments from now that are interest alone
    kept           (n,) amount that stays due until maturity (balloon); the rest is repaid by then

    What is repaid is ``balance - kept`` by the schedule over the payments after the interest-only ones. Where rates
    change, a level payment is set anew from the balance, rate and term of that moment, so the share that is left
    after a payment is that of a loan with this rate and these payments to go, and the shares multiply. A loan whose
    interest-only payments reach its maturity repays all of it then. Errors as in :func:`balance_after`.
    """
    plain = not interest_only.any() and not kept.any()
    if rates.shape[1] == 1 and plain:
        return balance_path(balance, rates[:, 0], remaining, steps, schedule)
    n = np.asarray(remaining)[:, None]
    wait = np.minimum(interest_only, np.maximum(remaining - 1, 0))[:, None]
    held = np.clip(kept, 0.0, balance)[:, None]
    repaid = np.asarray(balance, np.float64)[:, None] - held
    done: NDArray[Any] = np.arange(steps + 1, dtype=np.int64)[None, :]
    if rates.shape[1] == 1 or schedule != "annuity":
        rate = rates[:, :1]
        path = balance_after(repaid, rate, n - wait, np.maximum(done - wait, 0), schedule)
    else:
        before = np.maximum(n - done[:, :-1], 0)
        share = balance_after(np.ones(1), rates[:, :steps], before, np.ones(1, np.int64), schedule)
        share[done[:, 1:] <= wait] = 1.0
        path = np.empty((repaid.shape[0], steps + 1))
        path[:, :1] = repaid
        path[:, 1:] = repaid * np.multiply.accumulate(share, axis=1)
    out: NDArray[np.float64] = path + held * (done < n)
    return out


def payment_due(
    balance: NDArray[np.float64],
    rate_per_period: NDArray[np.float64],
    remaining: NDArray[np.int64],
    schedule: str,
    *,
    interest_only: NDArray[np.int64] | int = 0,
    kept: NDArray[np.float64] | float = 0.0,
) -> NDArray[np.float64]:
    """Interest and principal due with the next payment; arguments broadcast, meanings as in :func:`run_off`.

    With one payment to go everything is due. Errors as in :func:`balance_after`.
    """
    one = np.ones(1, np.int64)
    n = np.asarray(remaining)
    share = balance_after(np.ones(1), rate_per_period, n, one, schedule)
    share = np.where((np.asarray(interest_only) > 0) & (n > 1), 1.0, share)
    held = np.clip(kept, 0.0, balance)
    after = (balance - held) * share + held * (n > 1)
    result: NDArray[np.float64] = balance * (1.0 + rate_per_period) - after
    return result
