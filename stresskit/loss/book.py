"""A book made ready for paths: what does not depend on the path is worked out once, each path then costs one march.

Routes: where all causes factor and neither contracts nor LGD move, lanes need tables alone; else the values that have no
table are computed block by block for every loan and step. Both give the same figures (1e-12).
Blocks are cut by the data alone and added up in their order, so results are the same bits for any number of threads.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import AFTERWARDS, FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.kernels.blocks import in_order
from stresskit.kernels.lanes import YEAR_ROWS, Book, Dense, Out, Paths
from stresskit.kernels.march import march
from stresskit.kernels.odds import LINK_CODES
from stresskit.loss.interfaces import OnYears, YearFlows
from stresskit.loss.lgd import LgdSource, StaticLgd, lgd_source
from stresskit.loss.money import LaneMoney, Money, lane_money, period_rate
from stresskit.loss.result import CELL_MEASURES, LOAN_MEASURES, LossResult
from stresskit.projection.factors import LARGEST_SPLIT, Factors, exp_eta, factors_of
from stresskit.projection.interfaces import ContractPaths
from stresskit.projection.packing import Packing, pack
from stresskit.projection.project import check_default, check_path, life_steps
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Slots of a block: with tables alone, and with values of its own for every loan and step.
BLOCK, DENSE_BLOCK = 8192, 1024


@dataclass(frozen=True, slots=True, eq=False)
class Route:
    """One path and what belongs to it: macro features, contracts along it, and who is told year by year."""

    features: FeatureTable
    contracts: ContractPaths | None = None
    on_years: OnYears | None = None


@dataclass(frozen=True, slots=True, eq=False)
class _Tables:
    """Of one path: z (C, R, H) and V of each cause, e^z as the march wants it, what factors, after (H,)."""

    z: Floats
    v: list[Floats]
    b: Floats
    factoring: NDArray[np.bool_]
    after: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class _Found:
    """A block's share: cells (k,) with sums (S, k, CELL_ROWS, H), slots with rows (S, LOAN_ROWS, slots), years by path."""

    cells: Ints
    sums: Floats
    slots: slice
    rows: Floats
    years: list[YearFlows]


@dataclass(frozen=True, slots=True, eq=False)
class LossBook:
    """A book in lanes. Make one with :func:`prepare_book`."""

    portfolio: Portfolio
    fits: Mapping[str, HazardFit]
    loss: Loss
    n_cells: int
    horizon: int
    money: Money
    lane_money: LaneMoney | None
    factors: Factors
    packing: Packing
    lanes: Book

    def along(
        self,
        routes: Sequence[Route],
        *,
        years: Sequence[int] | None = None,
        threads: int = 1,
        progress: Callable[[int, int], None] | None = None,
    ) -> list[LossResult]:
        """The losses along each path, in the order given.

        years     (Y,) ascending steps at which the buckets of :class:`YearFlows` end; each path's on_years is called
                  block by block, in the same order on every call, for every loan once
        progress  told how many of how many blocks are done

        Raises what :func:`stresskit.projection.project.check_path` raises.
        """
        edges = np.asarray(() if years is None else years, dtype=np.int64)
        jobs = self._jobs(routes, edges)
        sums = np.zeros((len(routes), len(CELL_MEASURES), self.n_cells, self.horizon))
        rows = np.empty((len(routes), len(LOAN_MEASURES), self.packing.loan.size))
        done, whole = 0, sum(job.blocks for job in jobs)
        for job in jobs:
            for found in in_order(job.block, job.blocks, threads):
                for k, s in enumerate(job.at):
                    sums[s][:, found.cells] += found.sums[k].swapaxes(0, 1)
                    rows[s][:, found.slots] = found.rows[k]
                for k, flows in enumerate(found.years):
                    tell = job.routes[k].on_years
                    if tell is not None:
                        tell(flows)
                done += 1
                if progress is not None:
                    progress(done, whole)
        return self._results(rows, sums, threads)

    def _jobs(self, routes: Sequence[Route], edges: Ints) -> list[_Job]:
        """Paths for which tables are all they need go together; others one by one."""
        tables = [self._tables(r) for r in routes]
        light = [self._light(r, t) for r, t in zip(routes, tables, strict=True)]
        groups = [list(range(len(routes)))] if all(light) else [[s] for s in range(len(routes))]
        links = np.array([LINK_CODES[x] for x in _links(self.factors)], dtype=np.int64)
        out = []
        for group in groups:
            mine = [tables[s] for s in group]
            paths = Paths(
                np.stack([t.b for t in mine]), links, np.stack([t.after for t in mine])[:, None, :], self.portfolio.frequency.per_year, edges
            )  # fmt: skip
            cuts = self.packing.blocks(BLOCK if light[group[0]] else DENSE_BLOCK)
            out.append(_Job(self, group, [routes[s] for s in group], mine, paths, cuts))
        return out

    def _light(self, route: Route, tables: _Tables) -> bool:
        """Whether tables are all that the path needs."""
        return bool(tables.factoring.all()) and not self._own_money(route)

    def _own_money(self, route: Route) -> bool:
        """Whether money is worked out loan by loan and step by step."""
        moves = not isinstance(self.money.lgd, StaticLgd)
        return moves or route.contracts is not None or self.lane_money is None

    def _tables(self, route: Route) -> _Tables:
        first = self.portfolio.as_of + 1 - route.features.start
        check_path(self.fits, route.features, self.portfolio, self.horizon, route.contracts)
        z, v = self.factors.tables(route.features, first, self.horizon)
        factoring = self.factors.factoring(z)
        b = np.zeros((self.lanes.a.shape[0], *z.shape[1:]))
        for c in np.flatnonzero(factoring):
            b[_place(self.factors.causes)[c]] = np.exp(z[c])
        return _Tables(z, v, b, factoring, _after_given(self.fits, route.features, first, self.horizon))

    def _results(self, rows: Floats, sums: Floats, threads: int) -> list[LossResult]:
        """rows (S, LOAN_MEASURES, slots) back in the portfolio's order, matured added up along the steps."""
        present = np.flatnonzero(self.packing.loan >= 0)
        slot = np.empty(self.portfolio.n_loans, dtype=np.int64)
        slot[self.packing.loan[present]] = present
        flat = rows.reshape(-1, rows.shape[2])
        taken = list(in_order(lambda j: flat[j].take(slot), flat.shape[0], threads))
        out = []
        for s, of_path in enumerate(sums):
            loans = taken[s * len(LOAN_MEASURES) : (s + 1) * len(LOAN_MEASURES)]
            cells = {m: values.copy() for m, values in zip(CELL_MEASURES, of_path, strict=True)}
            np.cumsum(cells["matured"], axis=1, out=cells["matured"])
            for values in (*loans, *cells.values()):
                values.setflags(write=False)
            out.append(
                LossResult(
                    MappingProxyType(dict(zip(LOAN_MEASURES, loans, strict=True))), MappingProxyType(cells)
                )
            )
        return out


@dataclass(frozen=True, slots=True, eq=False)
class _Job:
    """Paths that go through the march together: their places ``at`` among all, their tables, and the blocks' cuts."""

    book: LossBook
    at: list[int]
    routes: list[Route]
    tables: list[_Tables]
    paths: Paths
    cuts: Ints

    @property
    def blocks(self) -> int:
        return int(self.cuts.size) - 1

    def block(self, block: int) -> _Found:
        """The runs of one block along all paths of the job."""
        whole, count = self.book, len(self.routes)
        first, last = int(self.cuts[block]), int(self.cuts[block + 1])
        lanes, slots, cells = _part(whole, first, last)
        loans, present, edges = whole.packing.loan[slots], lanes.present > 0, self.paths.edges
        dense, ends = self._dense(np.where(present, loans, loans[0]), int(lanes.steps.max()))
        out = Out(
            np.empty((count, len(LOAN_MEASURES), loans.size)),
            np.zeros((count, cells.size, len(CELL_MEASURES), whole.horizon)),
            np.zeros((count, edges.size, len(YEAR_ROWS), loans.size)),
        )
        march(lanes, self.paths, dense, out)
        years = []
        if edges.size:
            here, ends = loans[present], None if ends is None else ends[present]
            years = [self._years(here, y[:, :, present], ends) for y in out.years]
        return _Found(cells, out.sums, slots, out.loans, years)

    def _dense(self, loans: Ints, steps: int) -> tuple[Dense, Floats | None]:
        """Values of every slot and step that no table gives, and (slots, H) discount factors at the steps' ends."""
        book, route, tables = self.book, self.routes[0], self.tables[0]
        causes = book.lanes.a.shape[0]
        at, place = np.full(causes, -1, dtype=np.int64), _place(book.factors.causes)
        x: list[Floats] = []
        contracts = None if route.contracts is None else route.contracts.tile(loans, steps)
        if not tables.factoring.all():
            moving = None if contracts is None else contracts.columns()
            for c in np.flatnonzero(~tables.factoring):
                at[place[c]] = len(x)
                eta = book.factors.eta(int(c), loans, tables.z[c, :, :steps], tables.v[c][:, :steps], moving)
                x.append(np.ascontiguousarray(exp_eta(eta).T))
        stack = np.stack(x) if x else np.zeros((0, 0, 0))
        top = stack.max(axis=2, initial=0.0)
        if not book._own_money(route):
            none = np.zeros((0, 0))
            return Dense(stack, at, top, none, none, none, none), None
        m = book.money.block(loans, steps, contracts)
        turned = [np.ascontiguousarray(a.T) for a in (m.balance, m.exposure, m.discount, m.lgd)]
        return Dense(stack, at, top, *turned), m.ends

    def _years(self, loans: Ints, sums: Floats, ends: Floats | None) -> YearFlows:
        """sums (Y, 7, b) of the march as flows; ends (slots, H) where discount factors follow contracts."""
        book = self.book.portfolio
        default, payoff, survival, balance, amount, loss, el = (
            np.ascontiguousarray(sums[:, k].T) for k in range(len(YEAR_ROWS))
        )
        edges = self.paths.edges[None, :]
        before = np.concatenate([[0], self.paths.edges[:-1]])[None, :]
        term = book.remaining[loans][:, None]
        ended = term <= np.minimum(edges, self.book.horizon)
        matured = np.where(ended & (term > before), survival, 0.0)
        if ends is None:
            discount = np.exp(-np.log1p(period_rate(self.book.loss, book)[loans])[:, None] * edges)
        else:
            discount = ends[:, np.minimum(self.paths.edges, ends.shape[1]) - 1]
        return YearFlows(
            loans, self.paths.edges, default, payoff, matured, np.where(ended, 0.0, survival), balance, amount, loss, el, discount
        )  # fmt: skip


def _place(causes: Sequence[str]) -> Ints:
    """Row of each cause in the march: default 0, payoff 1 whether there is one or not, the others after."""
    others = 2
    out = []
    for cause in causes:
        out.append({"default": 0, "payoff": 1}.get(cause, others))
        others += cause not in ("default", "payoff")
    return np.array(out, dtype=np.int64)


def _links(factors: Factors) -> list[str]:
    place = _place(factors.causes)
    out = ["logit"] * (int(place.max()) + 1)
    for p, fit in zip(place, factors.fits, strict=True):
        out[p] = fit.spec.link
    return out


def _after_given(
    fits: Mapping[str, HazardFit], features: FeatureTable, first: int, steps: int
) -> NDArray[np.bool_]:
    """(steps,) whether any feature of the default hazard rests on a value after the last given one."""
    used = [features.names.index(n) for n in fits["default"].feature_names]
    if not used:
        return np.zeros(steps, dtype=np.bool_)
    window = features.flags[first : first + steps]
    return np.asarray((window[:, used] == AFTERWARDS).any(axis=1))


def _part(book: LossBook, first: int, last: int) -> tuple[Book, slice, Ints]:
    """Lanes of runs first .. last - 1, their slots, and the cells that their sums are of."""
    p, whole = book.packing, book.lanes
    chunks = slice(int(p.cut[first]), int(p.cut[last]))
    ends = np.append(p.start, p.loan.size)
    slots = slice(int(ends[chunks.start]), int(ends[chunks.stop]))
    cells, slot = np.unique(p.cell[first:last], return_inverse=True)
    by_slot = {
        n: getattr(whole, n)[slots]
        for n in ("v", "annuity", "scale", "up", "w", "d0", "lgd", "term", "life", "present")
    }
    by_chunk = {n: getattr(whole, n)[chunks] for n in ("size", "row", "steps", "least", "own", "key")}
    part = whole._replace(
        a=np.ascontiguousarray(whole.a[:, slots]), top=np.ascontiguousarray(whole.top[:, chunks]), start=p.start[chunks] - slots.start,
        cut=p.cut[first : last + 1] - chunks.start, slot=slot.astype(np.int64), **by_slot, **by_chunk,
    )  # fmt: skip
    return part, slots, cells


def _lanes(
    portfolio: Portfolio,
    factors: Factors,
    packing: Packing,
    money: LaneMoney | None,
    lgd: LgdSource,
    life: Ints,
    supported_age: int,
) -> Book:
    present = packing.loan >= 0
    loan = np.where(present, packing.loan, 0)
    place = _place(factors.causes)
    a = np.zeros((int(place.max()) + 1, loan.size))
    for p, part in zip(place, factors.parts, strict=True):
        a[p] = np.where(present, np.exp(np.clip(part.s, -LARGEST_SPLIT, LARGEST_SPLIT))[loan], 0.0)
    fixed = lgd.values if isinstance(lgd, StaticLgd) else np.zeros(portfolio.n_loans)
    names = [f.name for f in dataclasses.fields(LaneMoney)]
    values = {n: np.zeros(loan.size) if money is None else getattr(money, n)[loan] for n in names}
    return Book(
        a=a, lgd=fixed[loan], present=present.astype(np.float64),
        term=np.where(present, portfolio.remaining[loan], 1).astype(np.float64),
        life=np.where(present, life[loan], 0).astype(np.float64),
        start=packing.start, size=packing.size, row=packing.row, steps=packing.steps, least=packing.least,
        own=supported_age - factors.row_age[packing.row], key=np.zeros_like(packing.row), top=np.maximum.reduceat(a, packing.start, axis=1),
        cut=packing.cut, slot=packing.cell, **values,
    )  # fmt: skip


def prepare_book(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    loss: Loss,
    *,
    cells: Ints,
    n_cells: int,
    cap: int | None = None,
    lgd: LgdSource | None = None,
) -> LossBook:
    """What the paths of a book share; ``cells`` (n,), ``cap`` and ``lgd`` as for :func:`stresskit.loss.assess.assess`.

    Raises DataError when a loan lacks a column that a hazard or the LGD reads, NumericError without a default hazard.
    """
    check_default(fits)
    life = life_steps(portfolio, cap)
    source = lgd_source(loss.lgd, portfolio) if lgd is None else lgd
    factors, money = factors_of(portfolio, fits), lane_money(loss, portfolio, cap)
    packing = pack(cells, factors.row, life)
    lanes = _lanes(portfolio, factors, packing, money, source, life, fits["default"].supported_age)
    return LossBook(
        portfolio, fits, loss, n_cells, int(life.max()), Money(portfolio, loss, source), money, factors, packing, lanes
    )  # fmt: skip
