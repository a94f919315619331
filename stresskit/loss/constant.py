"""The constant balance sheet: what leaves a position is replaced at once by exposure of the same kind.

A position is one loan of the book and all that replaces it. Its contract is renewed with the original term N = age +
remaining periods at as_of, so in step h it has the age ((age + h - 1) mod N) + 1, and somebody with that age is there in every
step. With o_c the odds of cause c in step h, p_c(h) = o_c / (1 + sum o) is the probability that the one who is there leaves
by it: no survival stands before it. Balance B0 throughout; default flow EAD0 p_d(h), loss EAD0 p_d(h) LGD(h).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import coder
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import CellPart, HazardFit, LoanPart
from stresskit.kernels.blocks import in_order
from stresskit.kernels.rollforward import period_odds
from stresskit.loss.lgd import LgdSource, lgd_source
from stresskit.loss.money import period_rate
from stresskit.loss.yearly import FLOWS, NUMBERS, YearCells, by_cell
from stresskit.projection.interfaces import MovingHazard, StandingContracts, StandingTile
from stresskit.projection.project import check_path
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Loans x steps of a block.
BLOCK = 1 << 18


@dataclass(frozen=True, slots=True, eq=False)
class StandingBook:
    """A book held constant; make one with :func:`hold_book`.

    codes   (n,) cell of each position, 0 <= code < count
    points  (N + 1,) step of each point, the first is 0
    steps   computed: the last point, or the study's cap where that is less
    place   (ages, steps) cell of the hazards, -1 where no position is of that age in that step
    age, step  (k,) of each such cell
    """

    portfolio: Portfolio
    fits: Mapping[str, HazardFit]
    loss: Loss
    codes: Ints
    count: int
    points: Ints
    steps: int
    parts: Mapping[str, LoanPart]
    place: Ints
    age: Ints
    step: Ints

    def along(
        self,
        features: FeatureTable,
        *,
        contracts: StandingContracts | None = None,
        lgd: LgdSource | None = None,
        threads: int = 1,
    ) -> YearCells:
        """Flows of the buckets between points, and states at the points, under one path.

        ``payoff`` and ``matured`` are what early repayment and contract ends replace. Raises what
        :func:`stresskit.projection.project.check_path` raises, DataError for a value without an LGD.
        """
        check_path(self.fits, features, self.portfolio, self.steps, contracts)
        first = self.portfolio.as_of + 1 - features.start
        cells = {}
        for cause, fit in self.fits.items():
            path = [features.column(n)[first : first + self.steps] for n in fit.feature_names]
            values = np.stack(path, axis=1)[self.step] if path else np.empty((self.step.size, 0))
            cells[cause] = fit.cell_part(self.age, values, fit.feature_names)
        route = _Route(
            self, cells, contracts, lgd_source(self.loss.lgd, self.portfolio) if lgd is None else lgd
        )
        n, size = self.portfolio.n_loans, max(1, BLOCK // self.steps)
        cuts = np.append(np.arange(0, n, size), n)
        sums = {name: np.zeros((self.count, self.points.size)) for name in FLOWS}
        for found in in_order(lambda k: route.block(np.arange(cuts[k], cuts[k + 1])), cuts.size - 1, threads):
            for name, part in found.items():
                sums[name][:, 1:] += part
        for name, values in (("on_book", self.portfolio.counts), ("balance", self.portfolio.balance)):
            whole = by_cell(self.codes, values[:, None], self.count)
            sums[name] = np.repeat(whole, self.points.size, axis=1)
        return YearCells(sums)


@dataclass(frozen=True, slots=True, eq=False)
class _Route:
    """One path of a standing book."""

    book: StandingBook
    cells: Mapping[str, CellPart]
    contracts: StandingContracts | None
    lgd: LgdSource

    def block(self, loans: Ints) -> dict[str, Floats]:
        """Flow -> (count, N) sums of some positions by cell and bucket."""
        book, portfolio = self.book, self.book.portfolio
        term = (portfolio.age + portfolio.remaining)[loans, None]
        age = _ages(portfolio.age[loans], term[:, 0], book.steps)
        tile = None if self.contracts is None else self.contracts.standing(loans, book.steps)
        leaves = self._leaves(loans, age, tile)
        exposure, discount = self._money(loans, tile)
        lgd = np.asarray(self.lgd.tile(loans, book.steps, exposure), dtype=np.float64)
        amount = leaves["default"] * exposure
        loss = amount * (lgd[:, None] if lgd.ndim == 1 else lgd)
        none = np.zeros(age.shape)
        flows = {
            "default": leaves["default"], "payoff": leaves.get("payoff", none),
            "matured": np.where(age == term, leaves["stay"], 0.0), "default_amount": amount, "loss": loss, "el": loss * discount,
        }  # fmt: skip
        if portfolio.count is not None:
            count = portfolio.count[loans, None]
            flows |= {name: flows[name] * count for name in flows if name in NUMBERS}
        starts, codes = book.points[:-1], book.codes[loans]
        return {
            name: by_cell(codes, np.add.reduceat(values, starts, axis=1), book.count)
            for name, values in flows.items()
        }

    def _leaves(self, loans: Ints, age: Ints, tile: StandingTile | None) -> dict[str, Floats]:
        """Cause, and "stay" -> (b, steps) probability of those who are there at the start of each step."""
        book = self.book
        cell = book.place[age - 1, np.arange(book.steps)[None, :]]
        moving = None if tile is None else tile.columns()
        odds = {}
        for cause, fit in book.fits.items():
            part, at = book.parts[cause], self.cells[cause]
            eta = part.s[loans, None] + at.z[cell]
            if part.U.shape[1]:
                eta += np.einsum("bk,bhk->bh", part.U[loans], at.V[cell])
            if moving is not None and isinstance(fit, MovingHazard) and fit.moving_columns:
                eta += fit.moving_part({name: moving[name] for name in fit.moving_columns})
            odds[cause] = period_odds(eta, fit.spec.link)
        stay: Floats = 1.0 / (1.0 + sum(odds.values(), np.zeros(cell.shape)))
        return {"stay": stay} | {cause: o * stay for cause, o in odds.items()}

    def _money(self, loans: Ints, tile: StandingTile | None) -> tuple[Floats, Floats]:
        """(b, steps) EAD and discount factor to as_of of a default in each step."""
        portfolio, loss, steps = self.book.portfolio, self.book.loss, self.book.steps
        k = portfolio.frequency.per_year
        force = np.log1p(period_rate(loss, portfolio)[loans])[:, None]
        if tile is None:
            owed = 1.0 + loss.exposure.accrued * np.maximum(portfolio.rate[loans] / k, 0.0)
            exposure = np.broadcast_to((portfolio.balance[loans] * owed)[:, None], (loans.size, steps))
        else:
            exposure = tile.exposures()
            if loss.discount == "rate_path":
                force = np.log1p(tile.rates() / k)
        growth = np.cumsum(np.broadcast_to(force, (loans.size, steps)), axis=1)
        return exposure, np.exp(-(growth - 0.5 * force if loss.timing == "mid" else growth))


def hold_book(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    loss: Loss,
    *,
    codes: Ints,
    count: int,
    points: Ints,
    cap: int | None = None,
) -> StandingBook:
    """What the paths of a standing book share; ``points`` (N + 1,) ascending steps from 0 on, N >= 1.

    Raises DataError when a loan lacks a column that a hazard reads.
    """
    steps = int(points[-1]) if cap is None else min(int(points[-1]), cap)
    n, columns = portfolio.n_loans, coder(portfolio)
    parts = {c: f.loan_part(portfolio.static, n, portfolio.loan_ids, coder=columns) for c, f in fits.items()}
    term = portfolio.age + portfolio.remaining
    used = np.zeros((int(term.max()), steps), dtype=np.bool_)
    kinds = np.unique(np.stack([portfolio.age, term], axis=1), axis=0)
    size = max(1, BLOCK // steps)
    for begin in range(0, kinds.shape[0], size):
        some = kinds[begin : begin + size]
        used[_ages(some[:, 0], some[:, 1], steps) - 1, np.arange(steps)[None, :]] = True
    age, step = np.nonzero(used)
    place = np.full(used.shape, -1, dtype=np.int64)
    place[age, step] = np.arange(age.size)
    return StandingBook(portfolio, fits, loss, codes, count, points, steps, parts, place, age + 1, step)


def _ages(age: Ints, term: Ints, steps: int) -> Ints:
    """(b, steps) age at the end of each step of contracts that are renewed when their term is over."""
    out: Ints = (age[:, None] + np.arange(steps)[None, :]) % term[:, None] + 1
    return out
