"""Balances that the user supplies, a row per loan and period, checked against the book."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import Portfolio, frozen

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

COLUMNS = ("loan", "period", "balance")


@dataclass(frozen=True, slots=True, eq=False)
class SuppliedBalances:
    """Balances after 1, 2, .. payments of the loans of a book, one after the other.

    first    (n,) position of a loan's first value in ``values``, 0 for loans that have none
    length   (n,) number of values: to the last period before maturity, or to the horizon
    values   all values
    """

    first: Ints
    length: Ints
    values: Floats

    def __post_init__(self) -> None:
        for name in ("first", "length", "values"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def tile(self, loans: Ints, steps: int, balance: Floats) -> Floats:
        """(b, steps + 1): the balance at as_of, then the supplied ones, 0 from maturity on."""
        step = np.arange(steps)[None, :]
        there = step < self.length[loans][:, None]
        out = np.empty((loans.shape[0], steps + 1))
        out[:, 0] = balance
        place = np.where(there, self.first[loans][:, None] + step, 0)
        out[:, 1:] = np.where(there, self.values[place], 0.0) if self.values.size else 0.0
        return out


def supplied_balances(
    frame: pd.DataFrame, portfolio: Portfolio, mine: NDArray[np.bool_], *, horizon: int, source: str
) -> SuppliedBalances:
    """The supplied balances of the loans ``mine`` (n,) of a book, checked.

    frame    columns loan, period, balance (at the END of the period); rows of other loans or outside
             as_of + 1 .. maturity - 1 are not read
    horizon  largest number of steps; source: what messages call the table

    Every loan needs a value, not negative, for every period from the one after as_of to the last before its
    maturity or ``horizon``. Raises DataError with every problem found.
    """
    absent = [c for c in COLUMNS if c not in frame.columns]
    if absent:
        raise DataError(
            f"{source} lacks columns {', '.join(absent)}; it has {', '.join(map(str, frame.columns))}"
        )
    length = np.where(mine, np.minimum(portfolio.remaining - 1, horizon), 0)
    first = np.cumsum(length) - length
    values = np.full(int(length.sum()), np.nan)
    problems: list[Problem] = []
    loan = pd.Index(portfolio.loan_ids).get_indexer(pd.Index([str(v) for v in frame["loan"]], dtype=object))
    period = _periods(frame["period"], portfolio.frequency, problems)
    balance = pd.to_numeric(frame["balance"], errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
    step = period - portfolio.as_of - 1
    wanted = (loan >= 0) & (step >= 0)
    wanted[wanted] &= step[wanted] < length[loan[wanted]]
    rows = np.flatnonzero(wanted)
    place = first[loan[rows]] + step[rows]

    def report(code: str, message: str, bad: NDArray[np.bool_], remedy: str) -> None:
        if bad.any():
            shown = tuple(
                f"{portfolio.loan_ids[loan[r]]} @ {format_period(int(period[r]), portfolio.frequency)}"
                for r in rows[bad][:5]
            )
            problems.append(Problem(code, message, int(bad.sum()), shown, remedy))

    value = balance[rows]
    report("balance_not_number", "rows whose balance is no number", ~np.isfinite(value), "Fill them.")
    report("negative_balance", "rows whose balance is negative", value < 0.0, "Balances are >= 0.")
    counts = np.bincount(place, minlength=values.size)
    report(
        "schedule_doubled", "rows of a loan and period that come twice", counts[place] > 1, "One row each."
    )
    values[place] = value
    holes = np.flatnonzero(counts == 0)
    if holes.size:
        owner = np.searchsorted(first + length, holes, side="right")
        shown = tuple(
            f"{portfolio.loan_ids[o]} @ {format_period(portfolio.as_of + 1 + int(h - first[o]), portfolio.frequency)}"
            for h, o in zip(holes[:5], owner[:5], strict=True)
        )
        problems.append(
            Problem(
                "schedule_missing", f"periods without a balance, of {np.unique(owner).size:,} loans", int(holes.size),
                shown, "A projected loan needs one for every period up to the last before its maturity.",
            )
        )  # fmt: skip
    if problems:
        raise DataError(f"{source} cannot be used as a schedule", problems)
    return SuppliedBalances(first, length, values)


def _periods(column: pd.Series[Any], frequency: Frequency, problems: list[Problem]) -> Ints:
    texts = [str(v) for v in column]
    known: dict[str, int] = {}
    unread: list[str] = []
    for text in dict.fromkeys(texts):
        try:
            known[text] = parse_period(text, frequency)
        except ValueError:
            known[text] = -1
            unread.append(text)
    if unread:
        problems.append(
            Problem(
                "period_unreadable", "periods that cannot be read", len(unread), tuple(unread[:5]),
                "Expected '2025-12' or '2025Q4'.",
            )
        )  # fmt: skip
    return np.array([known[t] for t in texts], dtype=np.int64)
