"""Balances and payments of loans whose rate may change, whose repayment may wait, and of which a part may stay due."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.annuity import annuity_balances
from stresskit.kernels.schedule import balance_after


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
    n = np.asarray(remaining)
    wait = np.minimum(interest_only, np.maximum(n - 1, 0))
    held = np.clip(kept, 0.0, balance)
    repaid = np.asarray(balance, np.float64) - held
    if schedule == "annuity":
        return annuity_balances(repaid, held, rates, n, wait, steps)
    done: NDArray[Any] = np.arange(steps + 1, dtype=np.int64)[None, :]
    paid = np.maximum(done - wait[:, None], 0)
    path = balance_after(repaid[:, None], np.zeros(1), (n - wait)[:, None], paid, schedule)
    out: NDArray[np.float64] = path + held[:, None] * (done < n[:, None])
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
