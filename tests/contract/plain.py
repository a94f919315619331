"""One loan at a time, one period at a time, with payments computed from their definition: a slow oracle.

A level payment is B r / (1 - (1 + r)^-n), kept in force until the rate is set anew; nothing here knows of shares
of a balance that multiply.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field


@dataclass
class Plain:
    """One loan: what it owes at as_of, and its contract. Rates are annual fractions, periods as in the study."""

    balance: float
    rate: float
    age: int
    remaining: int
    schedule: str = "annuity"
    interest_only: int = 0
    balloon: float = 0.0
    floats: bool = False
    margin: float = 0.0
    floor: float = float("-inf")
    cap: float = float("inf")
    every: int = 1
    limit: float = 0.0
    ccf: float = 0.0
    accrued: float = 0.0
    supplied: Sequence[float] = ()


@dataclass
class Course:
    """What became of it: after 0, 1, .. payments; rate and payment in each step."""

    balances: list[float] = field(default_factory=list)
    rates: list[float] = field(default_factory=list)
    payments: list[float] = field(default_factory=list)
    exposures: list[float] = field(default_factory=list)


def level_payment(owed: float, rate: float, payments: int) -> float:
    return owed / payments if rate == 0.0 else owed * rate / (1.0 - (1.0 + rate) ** -payments)


def course(
    loan: Plain, steps: int, *, per_year: int = 12, policy: Sequence[float] = (), use: Sequence[float] = ()
) -> Course:
    """policy  level at the end of as_of, as_of + 1, ..;  use  utilisation in as_of, as_of + 1, .."""
    out = Course(balances=[loan.balance])
    rate, owed, payment = loan.rate, loan.balance, None
    waits = max(loan.interest_only - (loan.age - 1), 0) if loan.interest_only > 0 else 0
    for h in range(1, steps + 1):
        since = loan.age + h - 1
        if loan.floats and since >= 1 and since % loan.every == 0:
            rate = min(max(policy[h - 1] + loan.margin, loan.floor), loan.cap)
            payment = None
        left = loan.remaining - (h - 1)
        r = rate / per_year
        out.rates.append(rate)
        if left <= 0:
            out.exposures.append(0.0)
        elif loan.schedule == "revolving":
            undrawn = max(loan.limit - owed, 0.0)
            out.exposures.append(owed + loan.ccf * undrawn + loan.accrued * max(r, 0.0) * owed)
        else:
            out.exposures.append(owed + loan.accrued * max(r, 0.0) * owed)
        kept = min(loan.balloon, owed)
        interest = owed * r
        if left <= 0:
            after, paid = 0.0, 0.0
        elif left == 1:
            after, paid = 0.0, owed + interest
        elif loan.schedule == "bullet" or (loan.schedule in ("annuity", "linear") and h <= waits):
            after, paid = owed, interest
        elif loan.schedule == "revolving":
            after = owed
            if len(use):
                after = min(owed * use[h] / use[h - 1], max(loan.limit, owed))
            paid = interest
        elif loan.schedule == "supplied":
            after = loan.supplied[h - 1]
            paid = interest + owed - after
        elif loan.schedule == "linear":
            after = owed - (owed - kept) / left
            paid = interest + owed - after
        else:
            if payment is None:
                payment = level_payment(owed - kept, r, left) + kept * r
            paid = payment
            after = owed + interest - paid
        if loan.schedule == "annuity" and h == waits:
            payment = None
        out.payments.append(paid)
        owed = after
        out.balances.append(owed)
    return out
