"""Balances and exposures of a book along one path, schedule by schedule.

Timing (METHOD: projection, loss): payment h falls at the end of step h; the balance after it enters step h + 1. A
loan has made ``age - 1`` payments at as_of: what is outstanding at the end of its period of origination is the
amount. EAD of a default in step h is taken at the START of the step.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.contract.index import MacroLevels
from stresskit.contract.supplied import SuppliedBalances, supplied_balances
from stresskit.contract.terms import codes_of, per_loan
from stresskit.core.errors import NumericError
from stresskit.core.values import Portfolio, frozen
from stresskit.kernels.runoff import payment_due, run_off
from stresskit.spec.exposure import Schedule
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Frames = Mapping[str, pd.DataFrame]


@dataclass(frozen=True, slots=True, eq=False)
class ScheduleTerms:
    """One schedule and its terms for the whole book, (n,) each; rows of loans that have another one are not read.

    mine           loans with this schedule
    interest_only  payments after as_of that are interest alone
    kept           amount due at maturity
    growth         (H,) revolving: utilisation in step h over that in the step before; None: the balance stays
    """

    schedule: Schedule
    mine: NDArray[np.bool_]
    interest_only: Ints
    kept: Floats
    limit: Floats
    ccf: Floats
    growth: Floats | None
    supplied: SuppliedBalances | None

    def __post_init__(self) -> None:
        for name in ("mine", "interest_only", "kept", "limit", "ccf"):
            object.__setattr__(self, name, frozen(getattr(self, name)))

    def balances(self, loans: Ints, steps: int, rates: Floats, book: Portfolio) -> Floats:
        """(b, steps + 1); ``rates`` (b, steps) or (b, 1) per period."""
        balance, remaining = book.balance[loans], book.remaining[loans]
        name = self.schedule.schedule
        if name == "supplied":
            if self.supplied is None:
                return self._unread(balance, steps)
            return self.supplied.tile(loans, steps, balance)
        if name == "revolving":
            return self._drawn(loans, steps, balance, remaining)
        return run_off(
            balance, rates, remaining, steps, name,
            interest_only=self.interest_only[loans], kept=self.kept[loans],
        )  # fmt: skip

    def _unread(self, balance: Floats, steps: int) -> Floats:
        """What is known before the file is looked at: the balance at as_of."""
        if steps > 1:
            raise NumericError("schedule: supplied without its balances")
        return np.stack([balance, np.full(balance.shape, np.nan)], axis=1)

    def _drawn(self, loans: Ints, steps: int, balance: Floats, remaining: Ints) -> Floats:
        out = np.repeat(balance[:, None], steps + 1, axis=1)
        if self.growth is not None:
            limit = self.limit[loans]
            for h in range(1, steps + 1):
                # up to the limit; a balance above it already may not grow further
                top = np.maximum(limit, out[:, h - 1])
                out[:, h] = np.minimum(out[:, h - 1] * self.growth[h - 1], top)
        out *= np.arange(steps + 1)[None, :] < remaining[:, None]
        return out

    def exposures(self, loans: Ints, before: Floats, rates: Floats, alive: NDArray[np.bool_]) -> Floats:
        """(b, steps) EAD, of balances ``before`` (b, steps) each step; ``rates`` per period."""
        if self.schedule.schedule == "revolving":
            undrawn = np.maximum(self.limit[loans][:, None] - before, 0.0)
            owed = before * (self.schedule.accrued * np.maximum(rates, 0.0))
            return np.asarray((before + self.ccf[loans][:, None] * undrawn + owed) * alive)
        return np.asarray(before * (1.0 + self.schedule.accrued * np.maximum(rates, 0.0)))

    def due(self, loans: Ints, path: Floats, rate: Floats, left: Ints) -> Floats:
        """Payment due in each step of balances ``path`` (b, steps + 1), at ``rate`` per period, with ``left`` to go, (b, steps)."""
        before = path[:, :-1]
        if self.schedule.schedule == "supplied":
            return np.asarray(before * (1.0 + rate) - path[:, 1:])
        step = np.arange(before.shape[1])[None, :]
        return payment_due(
            before, rate, left, _paying(self.schedule),
            interest_only=self.interest_only[loans][:, None] - step, kept=self.kept[loans][:, None],
        )  # fmt: skip


def _paying(schedule: Schedule) -> str:
    """Revolving debt pays its interest; the balance is a matter of use."""
    return "bullet" if schedule.schedule == "revolving" else schedule.schedule


@dataclass(frozen=True, slots=True, eq=False)
class Balances:
    """All schedules of a book."""

    book: Portfolio
    terms: tuple[ScheduleTerms, ...]

    def _parts(self, loans: Ints) -> Iterator[tuple[ScheduleTerms, NDArray[np.bool_] | slice]]:
        """Schedules that occur among these loans, with their rows."""
        for terms in self.terms:
            mine = terms.mine[loans]
            if mine.all():
                yield terms, slice(None)
                return
            if mine.any():
                yield terms, mine

    def _gather(
        self, loans: Ints, width: int, one: Callable[[ScheduleTerms, NDArray[np.bool_] | slice], Floats]
    ) -> Floats:
        out = np.zeros((loans.shape[0], width))
        for terms, rows in self._parts(loans):
            part = one(terms, rows)
            if isinstance(rows, slice):
                return part
            out[rows] = part
        return out

    def balances(self, loans: Ints, steps: int, rates: Floats) -> Floats:
        """(b, steps + 1)."""
        return self._gather(
            loans, steps + 1, lambda terms, rows: terms.balances(loans[rows], steps, rates[rows], self.book)
        )

    def exposures(self, loans: Ints, before: Floats, rates: Floats, *, renewed: bool = False) -> Floats:
        """(b, steps), zero after maturity unless contracts are ``renewed``."""
        alive = np.arange(before.shape[1])[None, :] < self.book.remaining[loans][:, None]
        if renewed:
            alive = np.ones_like(alive)
        return self._gather(
            loans, before.shape[1],
            lambda terms, rows: terms.exposures(loans[rows], before[rows], rates[rows], alive[rows]),
        )  # fmt: skip

    def due(self, loans: Ints, path: Floats, rate: Floats, left: Ints) -> Floats:
        """(b, steps) payment due in each step."""
        return self._gather(
            loans, path.shape[1] - 1,
            lambda terms, rows: terms.due(loans[rows], path[rows], rate[rows], left[rows]),
        )  # fmt: skip

    def lacking(self) -> dict[str, NDArray[np.bool_]]:
        """Term -> (n,) loans that need it and have none, or one that cannot be."""
        out: dict[str, NDArray[np.bool_]] = {}
        for terms in self.terms:
            wanted = {"kept": "balloon"}
            if terms.schedule.schedule == "revolving":
                wanted |= {"limit": "limit", "ccf": "ccf"}
            bad = {word: np.isnan(getattr(terms, name)) for name, word in wanted.items()}
            bad["interest_only"] = terms.interest_only == NOT_KNOWN
            for word, rows in bad.items():
                if (rows & terms.mine).any():
                    out[f"loss.exposure: {word}"] = out.get(f"loss.exposure: {word}", np.zeros_like(rows)) | (
                        rows & terms.mine
                    )
        return out


#: Number of interest-only payments of a loan whose column is empty.
NOT_KNOWN = np.int64(-(10**6))


def schedule_balances(
    study: Study, portfolio: Portfolio, source: MacroLevels, *, horizon: int, frames: Frames
) -> Balances:
    """The schedules that ``loss.exposure`` declares for a book.

    frames  file name under loss.exposure -> its rows
    Raises DataError for values of its column that are not declared, and for supplied balances that do not do.
    """
    exposure = study.loss.exposure
    if exposure.by is None:
        everyone = np.ones(portfolio.n_loans, dtype=bool)
        return Balances(
            portfolio, (_terms(study, exposure, portfolio, source, everyone, horizon=horizon, frames=frames),)
        )
    code = codes_of(
        portfolio.static[exposure.by], exposure.values,
        place="loss.exposure.values", by=exposure.by, ids=lambda: portfolio.loan_ids,
    )  # fmt: skip
    return Balances(
        portfolio,
        tuple(
            _terms(study, schedule, portfolio, source, code == i, horizon=horizon, frames=frames)
            for i, schedule in enumerate(exposure.values.values())
        ),
    )


def _terms(
    study: Study,
    schedule: Schedule,
    portfolio: Portfolio,
    source: MacroLevels,
    mine: NDArray[np.bool_],
    *,
    horizon: int,
    frames: Frames,
) -> ScheduleTerms:
    static, n = portfolio.static, portfolio.n_loans
    growth, supplied = None, None
    if schedule.utilisation is not None and horizon > 0:
        level = source.of(schedule.utilisation, positive=True)
        at = portfolio.as_of - source.start
        growth = level[at + 1 : at + horizon + 1] / level[at : at + horizon]
    if schedule.file is not None and schedule.file in frames:
        supplied = supplied_balances(
            frames[schedule.file], portfolio, mine, horizon=horizon, source=schedule.file
        )
    stated = per_loan(schedule.interest_only, static, n, 0.0)
    left = interest_only_left(stated, portfolio.age - 1)
    return ScheduleTerms(
        schedule=schedule,
        mine=mine,
        interest_only=left,
        kept=balloon_of(schedule, static, n, study.loans.columns.amount),
        limit=per_loan(schedule.limit, static, n, 0.0),
        ccf=per_loan(schedule.ccf, static, n, 0.0),
        growth=growth,
        supplied=supplied,
    )


def interest_only_left(stated: Floats, paid: Ints) -> Ints:
    """Interest-only payments to come of ``stated`` after ``paid`` payments; NOT_KNOWN where none is stated."""
    known = np.isfinite(stated)
    whole = np.where(known, np.floor(np.where(known, stated, 0.0)), 0.0).astype(np.int64)
    return np.where(known, np.where(whole > 0, np.maximum(whole - paid, 0), 0), NOT_KNOWN)


def balloon_of(
    schedule: Schedule, static: Mapping[str, NDArray[np.float64]], n: int, amount: str | None
) -> Floats:
    """(n,) amount due at maturity: a column, or a fraction of the amount at origination."""
    if isinstance(schedule.balloon, str) or schedule.balloon == 0.0 or amount is None:
        return per_loan(schedule.balloon, static, n, 0.0)
    return schedule.balloon * np.asarray(static[amount], dtype=np.float64)
