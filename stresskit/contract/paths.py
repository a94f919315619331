"""What the contracts of a book make of one path: rates, balances, exposures and the columns that move.

Everything is computed per block of loans, for all steps at once, from the book, the path and nothing else: the
values of a block do not depend on which blocks were asked for before. Column h - 1 holds step h.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.balances import Balances, Frames, schedule_balances
from stresskit.contract.definitions import evaluate
from stresskit.contract.index import IndexLevels, MacroLevels, moving_indices
from stresskit.contract.rates import RatePaths, rate_paths
from stresskit.contract.ratio import Ratio
from stresskit.contract.terms import origination
from stresskit.core.errors import NumericError
from stresskit.core.values import MacroHistory, Portfolio, ScenarioPath
from stresskit.kernels.annuity import hold_after
from stresskit.kernels.moving import over_indexed
from stresskit.spec.moving import BalanceOverValue, Index, MovingColumn, Valued
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class ContractPaths:
    """A book's contracts along one path; see the module.

    moving   the columns, by the name that hazards use
    afterwards   (horizon,) whether what hazards read in a step rests on path values past the last given one
    indices  moving column -> levels of its index, or of its variable as a fraction
    plain    whether rates are fixed and balances and exposures those of the study's schedule
    """

    book: Portfolio
    rate_paths: RatePaths
    schedules: Balances
    moving: Mapping[str, MovingColumn]
    indices: Mapping[str, IndexLevels]
    afterwards: NDArray[np.bool_]
    plain: bool = False

    @property
    def names(self) -> tuple[str, ...]:
        """Moving columns that :meth:`columns` gives."""
        return tuple(self.moving)

    def ratio(self, name: str, steps: int) -> Ratio | None:
        """Moving column ``name`` as a ratio that projections work out on the way, None where it is something else."""
        column, book = self.moving[name], self.book
        if not (self.plain and isinstance(column, BalanceOverValue)):
            return None
        over = column.balance_over_value
        value, none = np.asarray(book.static[over.value], dtype=np.float64), np.zeros(book.n_loans, np.int64)
        if over.index is None:
            found = Ratio(1.0 / value, none, none, np.ones((1, steps)))
        else:
            levels, everyone = self.indices[name], np.arange(book.n_loans)
            base, _ = index_ratio(levels, book, everyone, np.arange(1), over.valued)
            first = none if over.valued == "as_of" else np.maximum(1 - book.age, 0)
            inverse = 1.0 / levels.rows(book.as_of, steps)
            c = np.broadcast_to(base[:, 0], none.shape) / value
            found = Ratio(c, levels.which, np.minimum(first, steps - 1), inverse)
        return found if np.isfinite(found.c).all() and np.isfinite(found.inverse).all() else None

    def tile(self, loans: Ints, steps: int) -> ContractTile:
        """These loans over these steps, with what they share computed once."""
        return ContractTile(self, loans, steps)

    def standing(self, loans: Ints, steps: int) -> StandingTile:
        """These loans and what replaces them like for like, the balance of as_of throughout."""
        return StandingTile(ContractTile(self, loans, steps))

    def balances(self, loans: Ints, steps: int) -> Floats:
        """(b, steps + 1) balance after 0, 1, .. ``steps`` payments of a loan that stays on book."""
        return self.tile(loans, steps).balances()

    def rates(self, loans: Ints, steps: int) -> Floats:
        """(b, steps) nominal annual rate in force in each step."""
        return self.tile(loans, steps).rates()

    def exposures(self, loans: Ints, steps: int) -> Floats:
        """(b, steps) exposure of a default in each step, zero after maturity."""
        return self.tile(loans, steps).exposures()

    def columns(self, loans: Ints, steps: int) -> Mapping[str, Floats]:
        """Moving column -> (b, steps) value at the START of each step; after maturity the last one stays."""
        return self.tile(loans, steps).columns()


@dataclass(slots=True, eq=False)
class ContractTile:
    """Some loans along the path. Not shared between threads: it keeps what it has computed."""

    paths: ContractPaths
    loans: Ints
    steps: int
    _narrow: Floats | None = field(default=None, init=False)
    _balances: Floats | None = field(default=None, init=False)

    def _rates(self) -> Floats:
        """(b, steps), or (b, 1) where none of the loans floats."""
        if self._narrow is None:
            self._narrow = self.paths.rate_paths.tile(self.loans, self.steps)
        return self._narrow

    def rates(self) -> Floats:
        return np.broadcast_to(self._rates(), (self.loans.shape[0], self.steps))

    def per_period(self) -> Floats:
        """As :meth:`rates` (or (b, 1)), per period."""
        return self._rates() / self.paths.book.frequency.per_year

    def balances(self) -> Floats:
        if self._balances is None:
            self._balances = self.paths.schedules.balances(self.loans, self.steps, self.per_period())
        return self._balances

    def exposures(self) -> Floats:
        return self.paths.schedules.exposures(self.loans, self.balances()[:, : self.steps], self.per_period())

    def columns(self) -> Mapping[str, Floats]:
        start, found = TileStart(self), {}
        remaining = self.paths.book.remaining[self.loans]
        for name, column in self.paths.moving.items():
            values = evaluate(name, column, start)
            if values.shape[1] == self.steps:
                # what is never reached must be a number all the same: nothing divided by nothing is none
                values = hold_after(values, remaining)
            found[name] = np.broadcast_to(values, (self.loans.shape[0], self.steps))
        return found


@dataclass(slots=True, eq=False)
class TileStart:
    """The starts of the steps of a tile, as definitions read them."""

    tile: ContractTile
    _before: Floats | None = field(default=None, init=False)

    @property
    def per_year(self) -> int:
        return self.tile.paths.book.frequency.per_year

    def balance(self) -> Floats:
        if self._before is None:
            self._before = self.tile.balances()[:, : self.tile.steps]
        return self._before

    def rate(self) -> Floats:
        book, loans = self.tile.paths.book, self.tile.loans
        rates = self.tile._rates()
        if rates.shape[1] == 1:
            return rates
        return np.concatenate([book.rate[loans][:, None], rates[:, :-1]], axis=1)

    def due(self) -> Floats:
        book, loans, steps = self.tile.paths.book, self.tile.loans, self.tile.steps
        left = book.remaining[loans][:, None] - np.arange(steps)[None, :]
        rate = np.broadcast_to(self.rate() / self.per_year, left.shape)
        path = self.tile.balances()
        return self.tile.paths.schedules.due(loans, path, rate, np.maximum(left, 1))

    def number(self, name: str) -> Floats:
        column: Floats = self.tile.paths.book.static[name][self.tile.loans]
        return column[:, None]

    def indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        value = self.number(amount)
        if index is None:
            return value
        book, loans = self.tile.paths.book, self.tile.loans
        base, moved = index_ratio(
            self.tile.paths.indices[moving], book, loans, np.arange(self.tile.steps), valued
        )
        return np.asarray((value / base) * moved)

    def over_indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        book, loans, steps = self.tile.paths.book, self.tile.loans, self.tile.steps
        if index is None:
            return np.asarray(self.balance() / self.indexed(moving, amount, index, valued))
        levels = self.tile.paths.indices[moving]
        base, _ = index_ratio(levels, book, loans, np.arange(1), valued)
        value = np.ascontiguousarray(np.broadcast_to((self.number(amount) / base)[:, 0], loans.shape))
        # a value is not moved before it was taken: that of a loan of age 0 stands still in its first step
        first = np.zeros_like(loans) if valued == "as_of" else np.maximum(1 - book.age[loans], 0)
        return over_indexed(
            self.tile.balances(),
            value,
            levels.rows(book.as_of, steps + 1),
            levels.which[loans],
            first,
            book.remaining[loans],
        )

    def level(self, moving: str) -> Floats:
        return self.tile.paths.indices[moving].at(self.tile.loans, self.clock().astype(np.int64))

    def clock(self) -> Floats:
        return (self.tile.paths.book.as_of + np.arange(self.tile.steps))[None, :].astype(np.float64)


class StandingStart(TileStart):
    """The starts of the steps when the balance stands: an index moves a value, a payment or a renewal does not."""

    def balance(self) -> Floats:
        book = self.tile.paths.book
        return np.broadcast_to(
            book.balance[self.tile.loans][:, None], (self.tile.loans.size, self.tile.steps)
        )

    def over_indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        return np.asarray(self.balance() / self.indexed(moving, amount, index, valued))

    def due(self) -> Floats:
        raise NumericError("a payment due is not defined where the balance stands")


@dataclass(frozen=True, slots=True, eq=False)
class StandingTile:
    """Some loans of a constant balance sheet along the path, past their contract ends."""

    tile: ContractTile

    def rates(self) -> Floats:
        """(b, steps): a renewed contract keeps the kind of rate, and a floating one its resets."""
        return self.tile.rates()

    def exposures(self) -> Floats:
        """(b, steps) of the balance at as_of."""
        before = StandingStart(self.tile).balance()
        found = self.tile.paths.schedules.exposures(
            self.tile.loans, before, self.tile.per_period(), renewed=True
        )
        return np.broadcast_to(found, before.shape)

    def columns(self) -> Mapping[str, Floats]:
        """Moving column -> (b, steps), at the start of each step."""
        start, shape = StandingStart(self.tile), (self.tile.loans.size, self.tile.steps)
        return {n: np.broadcast_to(evaluate(n, c, start), shape) for n, c in self.tile.paths.moving.items()}


def index_ratio(
    levels: IndexLevels, book: Portfolio, loans: Ints, after: Ints, valued: Valued
) -> tuple[Floats, Floats]:
    """(b, 1) level when the value was taken, (b or 1, H) levels ``after`` (H,) periods past as_of.

    A value is not moved before it was taken: a loan that starts after as_of keeps it in its first period.
    """
    now = (book.as_of + after)[None, :]
    if valued == "as_of":
        return levels.at(loans, np.full((loans.size, 1), book.as_of)), levels.at(loans, now)
    taken = origination(book, loans)[:, None]
    if taken.size and int(taken.max()) > book.as_of + int(after[0]):
        now = np.maximum(now, taken)
    return levels.at(loans, taken), levels.at(loans, now)


def needs_contracts(study: Study) -> bool:
    """Whether more than a fixed rate, a plain schedule and columns that stand still are declared."""
    exposure = study.loss.exposure
    return bool(study.moving_in_use) or study.rates is not None or not exposure.plain


def contract_paths(
    study: Study,
    portfolio: Portfolio,
    *,
    history: MacroHistory | None,
    path: ScenarioPath | None,
    horizon: int,
    frames: Frames | None = None,
) -> ContractPaths | None:
    """The contracts of a book along a path; None for a study that declares nothing beyond the plain.

    horizon  largest number of steps that will be asked for
    frames   file name under loss.exposure -> its rows (see contract.supplied)
    Raises DataError for columns whose values are not declared, index levels that are not above zero, a history or path
    that ends too early, and supplied balances that do not do; TextError for terms that do not fit the calendar.
    """
    if not needs_contracts(study):
        return None
    source = MacroLevels(history, path, portfolio.frequency, portfolio.as_of + horizon)
    moving = study.moving_in_use
    indices = moving_indices(
        study, source, portfolio.static.__getitem__, lambda: portfolio.loan_ids, portfolio.n_loans
    )
    return ContractPaths(
        book=portfolio,
        rate_paths=rate_paths(study, portfolio, source),
        schedules=schedule_balances(study, portfolio, source, horizon=horizon, frames=frames or {}),
        moving=moving,
        indices=indices,
        afterwards=_afterwards(study, source, portfolio.as_of, horizon),
        plain=study.rates is None and study.loss.exposure.plain,
    )


def _afterwards(study: Study, source: MacroLevels, as_of: int, horizon: int) -> NDArray[np.bool_]:
    out = np.zeros(horizon, dtype=bool)
    for use in study.contract_variables() if study.moving_in_use and horizon else ():
        if use.place[0] in ("moving", "rates"):
            out |= source.afterwards(use.variable, as_of, horizon)
    return out
