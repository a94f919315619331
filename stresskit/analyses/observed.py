"""What really became of a past book: exits, who was lost from sight, amounts at default, cumulative incidence."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.values import Portfolio, RiskSet
from stresskit.evidence.rows import window
from stresskit.kernels.blocks import totals
from stresskit.panel.result import LoanData

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: How a loan's observation ended, besides exits 1, 2, ... in the order of the risk set's causes.
SURVIVED, LOST, MATURED = 0, -1, -2


@dataclass(frozen=True, slots=True, eq=False)
class Observed:
    """The loans of a past book that were under observation in the first period after it, and what they did.

    book         those loans, n of them, as they stood at the cut-off
    risk_set     their rows in the periods after it, one stay each
    causes       names of exits
    end          (n,) last step under observation, 1..H
    outcome      (n,) k >= 1 exit by causes[k - 1] in step ``end``; SURVIVED to step H; MATURED; LOST from sight earlier
    owed         (n,) balance in the row of the default, NaN for other loans and where it is not known
    not_seen     loans of the book without a row in the first period after it: compared with nothing

    Where entries of the book stand for several loans (Portfolio.count), ``n`` counts entries and every other number counts
    loans; ``owed`` is that of all loans of the entry.
    """

    book: Portfolio
    risk_set: RiskSet
    causes: tuple[str, ...]
    steps: int
    end: Ints
    outcome: Ints
    owed: Floats
    not_seen: float

    @property
    def n(self) -> int:
        return self.book.n_loans

    @property
    def loans(self) -> float:
        """For how many loans all entries stand."""
        return float(self.book.counts.sum())

    @property
    def lost(self) -> float:
        """Loans lost from sight before the last step."""
        return float(self.book.counts[self.outcome == LOST].sum())

    def mean(self, values: Floats) -> float:
        """Mean over loans of a number (n,) that each loan of an entry has."""
        return float(np.average(values, weights=self.book.count))

    def did(self, cause: str) -> NDArray[np.bool_]:
        """(n,) whether a loan left by the cause."""
        return np.asarray(self.outcome == self.causes.index(cause) + 1)

    def exits(self, cause: str) -> float:
        """Loans that left by the cause."""
        return float(self.book.counts[self.did(cause)].sum())

    def counts(self, cause: str, code: Ints, groups: int) -> Floats:
        """(groups, H) exits by group and step."""
        at = np.flatnonzero(self.did(cause))
        out = np.zeros((groups, self.steps))
        np.add.at(out, (code[at], self.end[at] - 1), self.book.counts[at])
        return out

    def amounts(self, code: Ints, groups: int) -> Floats:
        """(groups, H) balance at default by group and step; NaN when it is known for none of the defaults."""
        at = np.flatnonzero(self.did("default"))
        out = np.zeros((groups, self.steps))
        if at.size and np.isnan(self.owed[at]).all():
            return np.full_like(out, np.nan)
        np.add.at(out, (code[at], self.end[at] - 1), np.nan_to_num(self.owed[at]))
        return out


def select(book: Portfolio, at: NDArray[np.bool_] | Ints) -> Portfolio:
    """Some loans of a book."""
    return replace(
        book, loan_ids=book.loan_ids[at], age=book.age[at], remaining=book.remaining[at], balance=book.balance[at],
        rate=book.rate[at], static={name: column[at] for name, column in book.static.items()},
        count=None if book.count is None else book.count[at],
    )  # fmt: skip


def observed(book: Portfolio, now: LoanData, steps: int) -> Observed:
    """What the loans of a past book did in the ``steps`` periods after it, by the data of today.

    Raises DataError when none of them was under observation then.
    """
    cutoff = book.as_of
    after = window(now.risk_set, first=cutoff + 1, last=cutoff + steps)
    # The first stay after the cut-off counts; one that begins later, after a gap, follows a loan lost from sight.
    begins = after.stay_origin + after.stay_entry
    _, there = _places(after.loan_ids, book.loan_ids)
    wanted = (begins == cutoff) & there[after.stay_loan]
    if not wanted.any():
        raise DataError("no loan of the book was under observation in the first period after the cut-off")
    rows = _stays(after, np.flatnonzero(wanted))
    place = _places(rows.loan_ids, book.loan_ids)[0]
    compared = select(book, place)
    rest = np.ones(book.n_loans, dtype=np.bool_)
    rest[place] = False
    end = rows.stay_origin + rows.stay_exit - cutoff
    outcome = np.where(rows.stay_cause > 0, rows.stay_cause, LOST)
    quiet = rows.stay_cause == 0
    outcome = np.where(quiet & (end >= steps), SURVIVED, outcome)
    outcome = np.where(quiet & (end >= compared.remaining), MATURED, outcome)
    return Observed(
        compared, rows, rows.causes, steps, end, outcome, _owed(compared, outcome, now), float(book.counts[rest].sum())
    )  # fmt: skip


def _owed(book: Portfolio, outcome: Ints, now: LoanData) -> Floats:
    out = np.full(book.n_loans, np.nan)
    if now.defaulted is None or outcome.size == 0:
        return out
    known = now.defaulted.loans
    if known.n_loans:
        at, there = _places(book.loan_ids, known.loan_ids)
        out[there] = known.balance[at[there]]
    return np.where(outcome == now.risk_set.causes.index("default") + 1, out, np.nan)


def _places(names: NDArray[Any], among: NDArray[Any]) -> tuple[Ints, NDArray[np.bool_]]:
    """(place, whether it is there) of sorted names among other sorted names."""
    at = np.searchsorted(among, names).clip(max=max(among.size - 1, 0))
    return at, np.asarray(among[at] == names) if among.size else np.zeros(names.size, dtype=np.bool_)


def _stays(rows: RiskSet, at: Ints) -> RiskSet:
    """Some stays of a risk set and the loans they are of."""
    loans, code = np.unique(rows.stay_loan[at], return_inverse=True)
    keep = np.zeros(rows.stay_loan.size, dtype=np.bool_)
    keep[at] = True
    of_rows = np.repeat(keep, rows.stay_exit - rows.stay_entry)
    return replace(
        rows, loan_ids=rows.loan_ids[loans], static={n: c[loans] for n, c in rows.static.items()},
        stay_loan=code.astype(np.int64), stay_origin=rows.stay_origin[at], stay_entry=rows.stay_entry[at],
        stay_exit=rows.stay_exit[at], stay_cause=rows.stay_cause[at], weight=rows.weight[at],
        moving={n: c[of_rows] for n, c in rows.moving.items()},
    )  # fmt: skip


def incidence(end: Ints, outcome: Ints, cause: int, steps: int, count: Floats | None = None) -> Floats:
    """(H,) cumulative incidence of an exit among loans under observation from step 1 (Aalen and Johansen 1978).

    count  (n,) for how many loans each entry stands; None: each for itself

    Loans LOST from sight leave the risk set after their last step; those that MATURED stay in it, without a
    further event: nothing can befall a contract that has ended. Without lost loans it is the plain share.
    """
    each = np.ones(end.size) if count is None else count
    h = np.arange(1, steps + 1)

    def ending(which: NDArray[np.bool_]) -> Floats:
        """(H,) loans whose observation ends in each step."""
        return totals(end[which], each[which], steps + 1)[h]

    leaves = (outcome > 0) | (outcome == LOST)
    # Added up from the end, so that nothing is left by rounding where fractional counts have all gone.
    at_risk = ending(leaves)[::-1].cumsum()[::-1] + each[~leaves].sum()
    rate, out = (
        np.divide(ending(which), at_risk, out=np.zeros(steps), where=at_risk > 0)
        for which in (outcome == cause, outcome > 0)
    )
    stay = np.concatenate([[1.0], np.cumprod(1.0 - out)[:-1]])
    total: Floats = np.cumsum(stay * rate)
    return total
