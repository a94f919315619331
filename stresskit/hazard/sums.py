"""Sums over rows at risk for a coefficient vector: the only thing solver and covariance know of the data.

Two backends supply them: row blocks (here), which build the design block by block and can carry any
column, and factored sums (:mod:`stresskit.hazard.factored`), which never expand a stay.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import FeatureTable
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design, SideColumns
from stresskit.hazard.link import InformationKind, Link
from stresskit.hazard.terms import SIDES, LoanCategory
from stresskit.kernels.blocks import block_cuts, in_order, stay_rows, totals

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Rows per block of the row backend; part of the result's definition, because sums are added per block.
BLOCK_ROWS = 1 << 14
#: Largest linear predictor of a block up to which e^eta is exact enough for everything else of the logit.
PLAIN_ETA = 30.0


@dataclass(frozen=True, slots=True, eq=False)
class Evaluation:
    """llf; score (k,); information (k, k) = minus the Hessian."""

    llf: float
    score: Floats
    information: Floats


@dataclass(frozen=True, slots=True, eq=False)
class ScoreProducts:
    """Sums over clusters of the outer product of the cluster's score, (k, k), and how many clusters.

    period_scores  (p, k) score of each calendar period from the first at risk to the last, 0 where none was
    """

    by_loan: Floats
    loans: int
    by_period: Floats
    periods: int
    period_scores: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Tally:
    """Expected events: by_age, index = age; by_period, index = period - first period at risk."""

    by_age: Floats
    by_period: Floats


@dataclass(frozen=True, slots=True, eq=False)
class HazardData:
    """What sums are over: a design, the rows at risk, and the design's sides that do not expand.

    loan_side  products of the n_loans loans, offset (n_loans,)
    key      (n_loans,) see hazard.keys.Keys; 0 throughout where no feature goes by a loan column
    periods  (keys * periods, products) feature side, row = key * periods + period - first period at risk
    seen     (keys * periods,) whether rows at risk read it; the others hold 0
    """

    design: Design
    rows: CauseRows
    link: Link
    loan_side: SideColumns
    offset: Floats
    key: Ints
    periods: Floats
    seen: NDArray[np.bool_]

    @property
    def loans(self) -> Floats:
        """(n_loans, products) the loan side written out, anew each time."""
        return self.loan_side.matrix()

    @property
    def n_periods(self) -> int:
        return int(self.rows.by_period()[0].size)

    def feature_rows(self, loan: Ints, period: Ints) -> Ints:
        """Rows of ``periods`` that loans read in periods counted from the first at risk."""
        return period if not self.design.keys.terms else self.key[loan] * self.n_periods + period


def hazard_data(design: Design, rows: CauseRows, features: FeatureTable | None, link: Link) -> HazardData:
    """Evaluates the loan and feature sides. Raises DataError for values that cannot be used."""
    n, ids = rows.n_loans, rows.loan_ids
    categories = [t.source for t in design.terms if isinstance(t, LoanCategory) and not t.moving]
    columns = rows.with_levels([*categories, *(t.by for t in design.keys.terms)])
    key = design.keys.of_loans(columns, n, ids)
    return HazardData(
        design,
        rows,
        link,
        design.side_columns("loan", columns, n, ids),
        design.offset("loan", columns, n, ids),
        key,
        *period_matrix(design, rows, features, key),
    )


class Sums(Protocol):
    """Partial sums of a binomial hazard over all rows, always added in the same order."""

    @property
    def k(self) -> int: ...

    def evaluate(self, params: Floats) -> Evaluation:
        """Log-likelihood, score and observed information at ``params`` (k,)."""

    def expected_information(self, params: Floats) -> Floats:
        """(k, k) expectation of the observed information over the events."""

    def score_products(self, params: Floats) -> ScoreProducts:
        """What clustered covariances are made of."""

    def tally(self, params: Floats) -> Tally:
        """Expected events at ``params``."""

    def column_totals(self) -> tuple[Floats, Floats]:
        """Weighted sum of every column over all rows and over the event rows, each (k,)."""


class LoanSums(Sums, Protocol):
    """Sums that also know what to expect of each loan."""

    def expected_by_loan(self, params: Floats) -> tuple[Floats, Floats]:
        """(n_loans,) weighted sum of P over the loan's rows, and of P (1 - P)."""


@dataclass(frozen=True, slots=True, eq=False)
class _Block:
    """Rows of one block: design (n, k), offset (n,), event, weight, and where each row belongs."""

    x: Floats
    offset: Floats
    event: NDArray[np.bool_]
    weight: Floats
    loan: Ints
    age: Ints
    period: Ints


class BlockSums:
    """What sums over blocks have in common: a design, and where block after block begins."""

    _design: Design
    _cuts: Ints

    @property
    def k(self) -> int:
        return self._design.k

    @property
    def blocks(self) -> int:
        return self._cuts.size - 1


class RowBlockSums(BlockSums):
    """Sums by building the design for a fixed number of rows at a time.

    Blocks hold whole loans and about ``block_rows`` rows; block results are added in block order, so the
    bits do not depend on ``threads``.
    """

    def __init__(self, data: HazardData, *, block_rows: int = BLOCK_ROWS, threads: int = 1) -> None:
        self._design, self._rows, self._link, self._threads = data.design, data.rows, data.link, threads
        self._loans, self._loan_offset, self._features = data.loans, data.offset, data.periods
        self._feature_rows = data.feature_rows
        self._cuts = block_cuts(data.rows.exit - data.rows.entry, data.rows.loan, block_rows)
        self._first_period = data.rows.first_period
        self._known: tuple[Floats, Evaluation] | None = None
        self._ages = data.design.age_matrix(np.arange(data.rows.largest_age + 1).clip(min=1))

    def _block(self, b: int) -> _Block:
        rows, design = self._rows, self._design
        part = slice(self._cuts[b], self._cuts[b + 1])
        stay, age = stay_rows(rows.entry[part], rows.exit[part])
        loan = rows.loan[part][stay]
        period = rows.origin[part][stay] + age - self._first_period
        event = rows.event[part][stay] & (age == rows.exit[part][stay])
        offset = self._loan_offset[loan]
        moving = np.empty((stay.size, 0))
        if design.products["moving"] or design.has_offset("moving"):
            at = rows.first_row[part][stay] + age - rows.entry[part][stay] - 1
            columns = {name: rows.moving[name][at] for name in design.sources("moving")}
            moving = design.matrix("moving", columns, stay.size, rows.loan_ids[loan])
            offset = offset + design.offset("moving", columns, stay.size)
        x = np.empty((stay.size, design.k), order="F")
        feature = self._feature_rows(loan, period)
        sides = {"loan": (self._loans, loan), "age": (self._ages, age), "feature": (self._features, feature)}
        for j in range(design.k):
            column, used = x[:, j], False
            for side in SIDES:
                p = int(design.index[side][j])
                if p < 0:
                    continue
                if side == "moving":
                    factor = moving[:, p]
                else:
                    values, at = sides[side]
                    # The first factor is written in place; every index is within its table.
                    factor = np.take(values[:, p], at, out=None if used else column, mode="clip")
                if used:
                    column *= factor
                elif side == "moving":
                    column[:] = factor
                used = True
            if not used:
                column[:] = 1.0
        return _Block(x, offset, event, rows.weight[part][stay], loan, age, period)

    def _terms(self, block: _Block, params: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        eta = block.x @ params + block.offset
        loglik, score, information = self._survive(eta, kind)
        at = np.flatnonzero(block.event)
        if at.size:
            loglik[at], score[at], information[at] = self._link.event(eta[at], kind)
        return loglik, score, information

    def _survive(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        """Rows without event; the logit by one exponential and one logarithm where no eta is large."""
        if self._link.log_hazard or not float(eta.max(initial=0.0)) <= PLAIN_ETA:
            return self._link.survive(eta, kind)
        odds = np.exp(eta)
        p, _, information = self._link.from_exp(odds)
        return -np.log1p(odds), -p, information

    def evaluate(self, params: Floats) -> Evaluation:
        if self._known is None or not np.array_equal(self._known[0], params):
            self._known = params.copy(), self._evaluate(params, "observed", range(self.blocks))
        return self._known[1]

    def evaluate_blocks(self, params: Floats, blocks: range) -> Evaluation:
        return self._evaluate(params, "observed", blocks)

    def events_in(self, blocks: range) -> float:
        parts = [slice(self._cuts[b], self._cuts[b + 1]) for b in blocks]
        return sum(float(self._rows.weight[part] @ self._rows.event[part]) for part in parts)

    def expected_information(self, params: Floats) -> Floats:
        # Expected and observed information of the logit are one.
        if not self._link.log_hazard:
            return self.evaluate(params).information
        return self._evaluate(params, "expected", range(self.blocks)).information

    def _evaluate(self, params: Floats, information: InformationKind, blocks: range) -> Evaluation:
        def work(i: int) -> Evaluation:
            block = self._block(blocks[i])
            loglik, score, weight = self._terms(block, params, information)
            with np.errstate(over="ignore", invalid="ignore"):
                return Evaluation(
                    float((block.weight * loglik).sum()),
                    block.x.T @ (block.weight * score),
                    block.x.T @ (block.x * (block.weight * weight)[:, None]),
                )

        llf, total, matrix = 0.0, np.zeros(self.k), np.zeros((self.k, self.k))
        for part in in_order(work, len(blocks), self._threads):
            llf, total, matrix = llf + part.llf, total + part.score, matrix + part.information
        return Evaluation(llf, total, 0.5 * (matrix + matrix.T))

    def score_products(self, params: Floats) -> ScoreProducts:
        at_risk, _ = self._rows.by_period()

        def work(b: int) -> tuple[Floats, Floats]:
            block = self._block(b)
            _, score, _ = self._terms(block, params, "observed")
            rows = block.x * (block.weight * score)[:, None]
            first = np.flatnonzero(np.concatenate(([True], block.loan[1:] != block.loan[:-1])))
            by_loan = np.add.reduceat(rows, first, axis=0)
            by_period = np.column_stack(
                [totals(block.period, rows[:, j], at_risk.size) for j in range(self.k)]
            )
            return by_loan.T @ by_loan, by_period

        loans, periods = np.zeros((self.k, self.k)), np.zeros((at_risk.size, self.k))
        for by_loan, by_period in in_order(work, self.blocks, self._threads):
            loans, periods = loans + by_loan, periods + by_period
        return ScoreProducts(
            loans, self._rows.n_loans, periods.T @ periods, int((at_risk > 0).sum()), periods
        )

    def tally(self, params: Floats) -> Tally:
        ages, periods = self._rows.largest_age + 1, self._rows.by_period()[0].size

        def work(b: int) -> Tally:
            block = self._block(b)
            expected = block.weight * self._link.probability(block.x @ params + block.offset)
            return Tally(
                totals(block.age, expected, ages),
                totals(block.period, expected, periods),
            )

        by_age, by_period = np.zeros(ages), np.zeros(periods)
        for part in in_order(work, self.blocks, self._threads):
            by_age, by_period = by_age + part.by_age, by_period + part.by_period
        return Tally(by_age, by_period)

    def expected_by_loan(self, params: Floats) -> tuple[Floats, Floats]:
        def work(b: int) -> tuple[Ints, Floats, Floats]:
            block = self._block(b)
            p = self._link.probability(block.x @ params + block.offset)
            first = np.flatnonzero(np.concatenate(([True], block.loan[1:] != block.loan[:-1])))
            expected, variance = block.weight * p, block.weight * p * (1.0 - p)
            return block.loan[first], np.add.reduceat(expected, first), np.add.reduceat(variance, first)

        expected, variance = np.zeros(self._rows.n_loans), np.zeros(self._rows.n_loans)
        for loan, more, spread in in_order(work, self.blocks, self._threads):
            expected[loan] += more
            variance[loan] += spread
        return expected, variance

    def column_totals(self) -> tuple[Floats, Floats]:
        def work(b: int) -> tuple[Floats, Floats]:
            block = self._block(b)
            return block.x.T @ block.weight, block.x.T @ (block.weight * block.event)

        rows, events = np.zeros(self.k), np.zeros(self.k)
        for part in in_order(work, self.blocks, self._threads):
            rows, events = rows + part[0], events + part[1]
        return rows, events


def period_matrix(
    design: Design, rows: CauseRows, features: FeatureTable | None, key: Ints
) -> tuple[Floats, NDArray[np.bool_]]:
    """``periods`` and ``seen`` of :class:`HazardData`, for loans of the given keys (n_loans,).

    Periods without rows at risk hold 0, so that a hole in the macro data never meets a sum.
    """
    names, size, count = design.sources("feature"), rows.by_period()[0].size, design.keys.count
    seen = np.concatenate([rows.periods_seen(None if count == 1 else key == k) for k in range(count)])
    if not names or features is None:
        return np.empty((seen.size, 0)), seen
    out = np.zeros((seen.size, len(design.products["feature"])))
    for k in range(count):
        used = np.flatnonzero(seen[k * size : (k + 1) * size])
        at = rows.first_period - features.start + used
        values = np.column_stack([features.column(name)[at] for name in names])
        out[k * size + used] = design.feature_matrix(values, names, k)
    return out, seen
