"""One definition of every moving column, evaluated on history and along a path alike.

A definition is a formula over what is known at the START of a period: balance and rate at the end of the period
before, loan columns, index levels. History (contract.history) and projection (contract.paths) each give these as a
:class:`Start`; the formula does not know which of them it is given.
"""

from __future__ import annotations

from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.spec.moving import (
    BalanceOverLimit,
    BalanceOverValue,
    CurrentRate,
    Index,
    MovingColumn,
    OverIncome,
    PaymentOver,
    PeriodsSince,
    RateLess,
    Since,
    Valued,
)

Floats = NDArray[np.float64]


class Start(Protocol):
    """What is known at the start of some periods. Arrays broadcast against each other: (R,), or (b, 1), (1, H), (b, H)."""

    def balance(self) -> Floats:
        """Outstanding at the end of the period before."""

    def rate(self) -> Floats:
        """Nominal annual fraction in force at the end of the period before."""

    def due(self) -> Floats:
        """Payment due in the period, at :meth:`balance` and :meth:`rate`."""

    def number(self, name: str) -> Floats:
        """A loan column."""

    def indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        """Loan column ``amount``, moved by the index of column ``moving`` from when it was taken to the end of the period before."""

    def over_indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        """:meth:`balance` over :meth:`indexed`."""

    def level(self, moving: str) -> Floats:
        """The macro variable of column ``moving`` at the end of the period before, as an annual fraction."""

    def clock(self) -> Floats:
        """Ordinal of the period before."""

    @property
    def per_year(self) -> int:
        """Periods in a year."""


def evaluate(name: str, column: MovingColumn, start: Start) -> Floats:
    """Values of the moving column ``name``; not finite where they cannot be known."""
    with np.errstate(divide="ignore", invalid="ignore"):
        if isinstance(column, BalanceOverValue):
            over = column.balance_over_value
            return start.over_indexed(name, over.value, over.index, over.valued)
        if isinstance(column, BalanceOverLimit):
            return np.asarray(start.balance() / start.number(column.balance_over_limit.limit))
        if isinstance(column, CurrentRate):
            return start.rate()
        if isinstance(column, RateLess):
            return np.asarray(start.rate() - start.level(name))
        if isinstance(column, PaymentOver):
            return _payment_over(name, column.payment_over, start)
        if isinstance(column, PeriodsSince):
            return _since(column.periods_since, start)
    raise NumericError(f"moving.{name}: {type(column).__name__} has no formula")


def _payment_over(name: str, over: OverIncome, start: Start) -> Floats:
    income = start.indexed(name, over.income, over.index, over.valued)
    periods = start.per_year if over.per == "year" else start.per_year / 12.0
    return np.asarray(start.due() * periods / income)


def _since(since: Since, start: Start) -> Floats:
    """Counted from the event's period to the end of the period before; an event that is still to come is none."""
    elapsed = start.clock() - start.number(since.date)
    happened = elapsed >= 0
    if since.cap is not None:
        elapsed = np.minimum(elapsed, since.cap)
    return np.where(happened, elapsed, np.nan if since.never is None else since.never)


def index_of(name: str, column: MovingColumn) -> tuple[Index, str, bool] | None:
    """Index that a moving column reads, its place in the text, whether it must be above zero; None without one."""
    if isinstance(column, BalanceOverValue) and column.balance_over_value.index is not None:
        return column.balance_over_value.index, f"moving.{name}.balance_over_value.index", True
    if isinstance(column, PaymentOver) and column.payment_over.index is not None:
        return column.payment_over.index, f"moving.{name}.payment_over.index", True
    if isinstance(column, RateLess):
        return column.rate_less.variable, f"moving.{name}.rate_less.variable", False
    return None


def needs_balance(column: MovingColumn) -> bool:
    return isinstance(column, BalanceOverValue | BalanceOverLimit | PaymentOver)


def needs_rate(column: MovingColumn) -> bool:
    return isinstance(column, CurrentRate | RateLess | PaymentOver)
