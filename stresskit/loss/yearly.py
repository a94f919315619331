"""Calendar years of a book under one scenario, summed into cells while the loans stream by.

Point 0 is as_of, point y the end of the y-th calendar-year bucket. Everything is an expected amount seen from as_of:
a loan counts at a point with the probability of being there. Sums run over loans in the order in which blocks
come, which does not depend on threads.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.loss import result
from stresskit.loss.capital import Inputs, capital_measures, defaulted_requirement
from stresskit.loss.interfaces import YearFlows
from stresskit.loss.staging import StagePoint, in_stage_2, stage_measures
from stresskit.spec.provisions import Staging

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Flows of the bucket that ends at the point; 0 at as_of.
FLOWS = ("default", "payoff", "matured", "default_amount", "loss", "el")
#: States at the point.
STATES = ("on_book", "balance")
#: Measures that are numbers of loans: they go by the counts of entries that stand for several.
NUMBERS = (*result.NUMBERS, "loans_stage_1", "loans_stage_2")


@dataclass(frozen=True, slots=True)
class StageInputs:
    """What staging needs: the rule, the lifetime PD at origination (n, N + 1), and who is past due at as_of (n,)."""

    rule: Staging
    at_origin: Floats
    past_due: NDArray[np.bool_] | None


@dataclass(frozen=True, slots=True)
class CapitalInputs:
    """What capital needs: class and floors, long-run PD (n, N + 1), its weight, maturity in years (None: remaining term)."""

    loans: Inputs
    long_run: Floats
    stressed_weight: float
    maturity: float | None


@dataclass(frozen=True, slots=True)
class Plan:
    """The book cut into cells, and what is asked of its years.

    codes    (n,) cell of each loan, 0 <= code < count
    points   (N + 1,) step of each point, the first is 0
    """

    portfolio: Portfolio
    codes: Ints
    count: int
    points: Ints
    staging: StageInputs | None = None
    capital: CapitalInputs | None = None

    @property
    def n_points(self) -> int:
        return int(self.points.size)

    def maturity(self, rows: Ints, columns: slice) -> Floats:
        """(b, points) years, for classes that use it."""
        points = self.points[columns]
        if self.capital is not None and self.capital.maturity is not None:
            return np.full((rows.size, points.size), self.capital.maturity)
        left = self.portfolio.remaining[rows][:, None] - points[None, :]
        return np.clip(left / self.portfolio.frequency.per_year, 1.0, 5.0)


@dataclass(frozen=True, slots=True)
class YearCells:
    """Sums of one scenario: measure -> (cells, N + 1); ``stage`` (n,) 1 or 2 at as_of, None without staging."""

    measures: Mapping[str, Floats]
    stage: NDArray[np.int8] | None = None


@dataclass(slots=True)
class YearSums:
    """Collects one scenario: :meth:`add` takes blocks, :meth:`finish` the measures at as_of."""

    plan: Plan
    _sums: dict[str, Floats] = field(default_factory=dict)
    _lgd: Floats = field(default_factory=lambda: np.zeros(0))

    def __post_init__(self) -> None:
        self._lgd = np.zeros(self.plan.portfolio.n_loans)

    def add(self, flows: YearFlows) -> None:
        """One block; buckets past the last point only enter the tails."""
        plan, rows = self.plan, flows.loans
        m = min(plan.n_points - 1, flows.edges.size)
        lgd = _next_lgd(flows)
        self._lgd[rows] = lgd[:, 0]
        keep = slice(1, m + 1)
        for name in ("default", "payoff", "matured", "default_amount", "loss", "el"):
            self._put(name, rows, getattr(flows, name)[:, :m], keep)
        self._put("on_book", rows, flows.survival[:, :m], keep)
        self._put("balance", rows, flows.balance[:, :m], keep)
        there = flows.survival[:, :m] > 0
        base = np.where(there, flows.survival[:, :m], 1.0)
        year = np.where(there, _ahead(flows.default)[:, :m] / base, 0.0)
        if plan.staging is not None:
            rest = np.where(there, _rest(flows.default)[:, :m] / base, 0.0)
            point = StagePoint(rest, plan.staging.at_origin[rows, keep], year)
            second = in_stage_2(point, plan.staging.rule)
            found = stage_measures(
                second, on_book=flows.survival[:, :m], balance=flows.balance[:, :m],
                el_year=_ahead(flows.el)[:, :m] / flows.discount[:, :m], el_rest=_rest(flows.el)[:, :m] / flows.discount[:, :m],
            )  # fmt: skip
            for name, values in found.items():
                self._put(name, rows, values, keep)
        if plan.capital is not None:
            floor = plan.capital.loans.lgd_floor[rows][:, None]
            unexpected = defaulted_requirement(floor * flows.default_amount[:, :m], flows.loss[:, :m])
            self._put("defaulted_k", rows, unexpected, keep)
            self._capital(plan.capital, rows, year, lgd[:, 1 : m + 1], flows.balance[:, :m], keep)

    def finish(self, loans: Mapping[str, Floats]) -> YearCells:
        """The point as_of, from the measures of each loan: pd_12m, pd_lifetime, el_12m, el_lifetime, (n,) each."""
        plan = self.plan
        rows = np.arange(plan.portfolio.n_loans)
        first, ones = slice(0, 1), np.ones((rows.size, 1))
        balance = plan.portfolio.balance[:, None]
        self._put("on_book", rows, ones, first)
        self._put("balance", rows, balance, first)
        stage = None
        if plan.staging is not None:
            point = StagePoint(loans["pd_lifetime"], plan.staging.at_origin[:, 0], loans["pd_12m"])
            second = in_stage_2(point, plan.staging.rule, plan.staging.past_due)
            found = stage_measures(
                second[:, None], on_book=ones, balance=balance,
                el_year=loans["el_12m"][:, None], el_rest=loans["el_lifetime"][:, None],
            )  # fmt: skip
            for name, values in found.items():
                self._put(name, rows, values, first)
            stage = np.where(second, 2, 1).astype(np.int8)
        if plan.capital is not None:
            self._capital(plan.capital, rows, loans["pd_12m"][:, None], self._lgd[:, None], balance, first)
        return YearCells(dict(self._sums), stage)

    def _capital(
        self, inputs: CapitalInputs, rows: Ints, stressed: Floats, lgd: Floats, balance: Floats, at: slice
    ) -> None:
        found = capital_measures(
            inputs.loans.taken(rows), stressed=stressed, long_run=inputs.long_run[rows, at],
            weight=inputs.stressed_weight, lgd=lgd, balance=balance, maturity=self.plan.maturity(rows, at),
        )  # fmt: skip
        for name, values in found.items():
            self._put(name, rows, values, at)

    def _put(self, name: str, rows: Ints, values: Floats, at: slice) -> None:
        if name not in self._sums:
            self._sums[name] = np.zeros((self.plan.count, self.plan.n_points))
        if name in NUMBERS and self.plan.portfolio.count is not None:
            values = values * self.plan.portfolio.count[rows, None]
        self._sums[name][:, at] += by_cell(self.plan.codes[rows], values, self.plan.count)


def by_cell(codes: Ints, values: Floats, count: int) -> Floats:
    """(count, k) sums of (b, k) values, added in the order of the rows."""
    return np.stack([np.bincount(codes, weights=v, minlength=count) for v in values.T], axis=1)


def _rest(values: Floats) -> Floats:
    """(b, Y) sum of all later buckets."""
    from_here = np.cumsum(values[:, ::-1], axis=1)[:, ::-1]
    return np.concatenate([from_here[:, 1:], np.zeros((values.shape[0], 1))], axis=1)


def _ahead(values: Floats) -> Floats:
    """(b, Y) the next bucket, which is a whole year."""
    return np.concatenate([values[:, 1:], np.zeros((values.shape[0], 1))], axis=1)


def _next_lgd(flows: YearFlows) -> Floats:
    """(b, Y + 1) LGD of the defaults of the bucket after each point; of the bucket before where none follow, else 0."""
    own = np.divide(
        flows.loss, flows.default_amount, out=np.zeros_like(flows.loss), where=flows.default_amount > 0
    )
    for j in range(1, own.shape[1]):
        own[:, j] = np.where(flows.default_amount[:, j] > 0, own[:, j], own[:, j - 1])
    return np.concatenate([own, own[:, -1:]], axis=1)
