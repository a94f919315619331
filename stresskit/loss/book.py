"""A book made ready for paths: what does not depend on the path is worked out once, each path then costs one march.

Routes: where all causes factor and neither contracts nor LGD move, lanes need tables alone; else the values that have no
table are computed block by block for every loan and step. Both give the same figures (1e-12).
Blocks are cut by the data alone and added up in their order, so results are the same bits for any number of threads.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.ratio import Ratio
from stresskit.core.values import AFTERWARDS, FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit, LoanPart, MovingTerm
from stresskit.kernels.blocks import in_order
from stresskit.kernels.lanes import YEAR_ROWS, Dense, Out, Paths, Ratios
from stresskit.kernels.march import march
from stresskit.kernels.odds import LINK_CODES
from stresskit.loss.interfaces import OnYears, YearFlows
from stresskit.loss.lanes import Lanes, place_of
from stresskit.loss.lgd import LgdSource, StaticLgd, lgd_source
from stresskit.loss.money import Money, has_recursion, period_rate
from stresskit.loss.result import CELL_MEASURES, LOAN_MEASURES, NUMBERS, LossResult
from stresskit.projection.factors import Factors, exp_eta, factors_of
from stresskit.projection.interfaces import ContractPaths, OneMovingTerm, PlainContracts
from stresskit.projection.packing import Packing, pack
from stresskit.projection.project import check_default, check_path, life_steps
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Slots of a block: with tables alone, and with values of its own for every loan and step.
BLOCK, DENSE_BLOCK = 8192, 256


class Side(NamedTuple):
    """What one hazard reads along a path."""

    features: FeatureTable
    contracts: ContractPaths | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Route:
    """One path and what belongs to it: macro features, contracts along it, who is told year by year, an LGD of its own.

    own  cause -> what its hazard reads instead of ``features`` and ``contracts``: another path; features start alike
    shift   cause -> (H,) what is added to the linear predictor of every loan in each step; none where it is not named
    """

    features: FeatureTable
    contracts: ContractPaths | None = None
    on_years: OnYears | None = None
    lgd: LgdSource | None = None
    shift: Mapping[str, Floats] | None = None
    own: Mapping[str, Side] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for cause, side in self.own.items():
            if side.features.start != self.features.start:
                raise ValueError(f"Route: features of {cause!r} start elsewhere than those of the path")

    def side(self, cause: str) -> Side:
        """What the hazard of a cause reads."""
        return self.own.get(cause) or Side(self.features, self.contracts)


class _Moved(NamedTuple):
    """What moves in a cause (its place among the causes) and is worked out on the way."""

    cause: int
    term: MovingTerm
    ratio: Ratio


@dataclass(frozen=True, slots=True, eq=False)
class _Tables:
    """Of one path: z (C, R, H) and V of each cause, e^z as the march wants it, what factors, after (keys, H), what moves
    on the way."""

    z: Floats
    v: list[Floats]
    b: Floats
    factoring: NDArray[np.bool_]
    after: NDArray[np.bool_]
    moved: list[_Moved]

    def goes_with(self, other: _Tables) -> bool:
        """Whether two paths that need tables alone can go through the march together."""
        return len(self.moved) == len(other.moved) and all(
            a.ratio.like(b.ratio) for a, b in zip(self.moved, other.moved, strict=True)
        )


@dataclass(frozen=True, slots=True, eq=False)
class _Found:
    """A block's share: cells (k,) with sums (S, k, CELL_ROWS, H), years by path."""

    cells: Ints
    sums: Floats
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
    factors: Factors
    packing: Packing
    lanes: Lanes

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

        Entries that stand for several loans are marched as one with the amounts of all; a second march, in which each
        stands for its count, then gives the numbers of loans in cells. One march is all where the book was made with
        weights of its own: see :func:`prepare_book`.

        Raises what :func:`stresskit.projection.project.check_path` raises.
        """
        if self.portfolio.count is None or self.lanes.weight is not None:
            return self._along(routes, years, threads, progress)
        half = _halves(progress)
        found = self._along(routes, years, threads, half[0])
        lanes = dataclasses.replace(self.lanes, weight=self.portfolio.count)
        silent = [dataclasses.replace(route, on_years=None) for route in routes]
        counted = dataclasses.replace(self, lanes=lanes)._along(silent, None, threads, half[1])
        return [
            LossResult(r.loans, MappingProxyType({**r.cells, **{m: c.cells[m] for m in NUMBERS}}))
            for r, c in zip(found, counted, strict=True)
        ]

    def _along(
        self,
        routes: Sequence[Route],
        years: Sequence[int] | None,
        threads: int,
        progress: Callable[[int, int], None] | None,
    ) -> list[LossResult]:
        """One march of each path."""
        edges = np.asarray(() if years is None else years, dtype=np.int64)
        sums = np.zeros((len(routes), len(CELL_MEASURES), self.n_cells, self.horizon))
        loans = np.empty((len(routes), self.portfolio.n_loans, len(LOAN_MEASURES)))
        jobs = self._jobs(routes, edges, loans, threads)
        done, whole = 0, sum(job.blocks for job in jobs)
        for job in jobs:
            for found in in_order(job.block, job.blocks, threads):
                for k, s in enumerate(job.at):
                    sums[s][:, found.cells] += found.sums[k].swapaxes(0, 1)
                for k, flows in enumerate(found.years):
                    tell = job.routes[k].on_years
                    if tell is not None:
                        tell(flows)
                done += 1
                if progress is not None:
                    progress(done, whole)
        return [self._result(loans[s], sums[s]) for s in range(len(routes))]

    def remembering(self) -> LossBook:
        """The same book, which keeps the tables of a path's features for as long as it lives: for paths asked again."""
        return self._with_factors(dataclasses.replace(self.factors, kept={}))

    def with_coefficients(self, fits: Mapping[str, HazardFit], parts: Mapping[str, LoanPart]) -> LossBook:
        """The same book under fits of the same designs with other coefficients: nothing is packed again.

        parts  cause -> the loan sides that go with these coefficients, s (n,) and U as they were
        """
        chosen = tuple(parts[c] for c in self.factors.causes)
        factors = dataclasses.replace(
            self.factors,
            fits=tuple(fits[c] for c in self.factors.causes),
            parts=chosen,
            largest=np.array([np.abs(part.s).max(initial=0.0) for part in chosen]),
            kept=None,
        )
        return dataclasses.replace(self._with_factors(factors), fits=fits)

    def _with_factors(self, factors: Factors) -> LossBook:
        return dataclasses.replace(
            self, factors=factors, lanes=dataclasses.replace(self.lanes, factors=factors)
        )

    def with_static_lgd(self, lgd: Floats) -> LossBook:
        """The same book with an LGD (n,) of each loan that no path changes."""
        source = StaticLgd(lgd)
        return dataclasses.replace(
            self,
            money=dataclasses.replace(self.money, lgd=source),
            lanes=dataclasses.replace(self.lanes, lgd=source),
        )

    def _jobs(self, routes: Sequence[Route], edges: Ints, loans: Floats, threads: int = 1) -> list[_Job]:
        """Paths for which tables are all they need go together; others one by one. Each writes its part of ``loans``."""
        tables = list(in_order(lambda s: self._tables(routes[s]), len(routes), threads))
        light = [self._light(r, t) for r, t in zip(routes, tables, strict=True)]
        together = all(light) and all(t.goes_with(tables[0]) for t in tables[1:])
        groups = [list(range(len(routes)))] if together else [[s] for s in range(len(routes))]
        links = np.array([LINK_CODES[x] for x in _links(self.factors)], dtype=np.int64)
        out = []
        for group in groups:
            mine = [tables[s] for s in group]
            paths = Paths(
                np.stack([t.b for t in mine]), links, np.stack([t.after for t in mine]), self.portfolio.frequency.per_year, edges
            )  # fmt: skip
            cuts = self.packing.blocks(BLOCK if light[group[0]] else DENSE_BLOCK)
            out.append(
                _Job(
                    self,
                    group,
                    [routes[s] for s in group],
                    mine,
                    paths,
                    cuts,
                    loans[group[0] : group[-1] + 1],
                )
            )
        return out

    def _light(self, route: Route, tables: _Tables) -> bool:
        """Whether tables are all that the path needs."""
        return bool(tables.factoring.all()) and not self._own_money(route)

    def _own_money(self, route: Route) -> bool:
        """Whether money is worked out loan by loan and step by step."""
        moves = route.lgd is not None or not isinstance(self.money.lgd, StaticLgd)
        plain = route.contracts is None or (
            isinstance(route.contracts, PlainContracts) and route.contracts.plain
        )
        return moves or not plain or not self.lanes.schedule

    def _moved(self, route: Route) -> list[_Moved]:
        """Causes in which one balance over a value moves, on contracts that lanes work out themselves."""
        out: list[_Moved] = []
        if self._own_money(route):
            return out
        for c, (cause, fit) in enumerate(zip(self.factors.causes, self.factors.fits, strict=True)):
            contracts = route.side(cause).contracts
            if not isinstance(contracts, PlainContracts):
                continue
            term = fit.moving_term() if fit.moving_columns and isinstance(fit, OneMovingTerm) else None
            ratio = None if term is None else contracts.ratio(term.column, self.horizon)
            if term is not None and ratio is not None:
                out.append(_Moved(c, term, ratio))
        return out

    def _tables(self, route: Route) -> _Tables:
        first = self.portfolio.as_of + 1 - route.features.start
        for side in (Side(route.features, route.contracts), *route.own.values()):
            check_path(self.fits, side.features, self.portfolio, self.horizon, side.contracts)
        z, v = self.factors.tables(
            route.features, first, self.horizon, own={c: side.features for c, side in route.own.items()}
        )
        for k, cause in enumerate(self.factors.causes):
            if route.shift is not None and cause in route.shift:
                z[k] += route.shift[cause][: self.horizon]
        moved, moving = self._moved(route), np.zeros(len(v), dtype=np.bool_)
        moving[[m.cause for m in moved]] = True
        factoring = self.factors.factoring(z, moving)
        if not factoring.all():
            factoring, moved = self.factors.factoring(z, np.zeros_like(moving)), []
        shift = np.zeros(len(v))
        for m in moved:
            shift[m.cause] = m.term.slope * m.term.centre
        b = np.zeros((len(_links(self.factors)), *z.shape[1:]))
        for c in np.flatnonzero(factoring):
            b[place_of(self.factors.causes)[c]] = np.exp(z[c] - shift[c])
        read = route.side("default")
        after = _after_given(self.fits["default"], read.features, first, self.horizon)
        if read.contracts is not None:
            after |= read.contracts.afterwards[: self.horizon]
        return _Tables(z, v, b, factoring, after, moved)

    def _result(self, loans: Floats, sums: Floats) -> LossResult:
        """Rows (n, LOAN_MEASURES) and sums of one path under their names, matured added up along the steps."""
        columns, cells = list(loans.T), dict(zip(CELL_MEASURES, sums, strict=True))
        np.cumsum(cells["matured"], axis=1, out=cells["matured"])
        for array in (loans, *columns, *sums):
            array.setflags(write=False)
        return LossResult(
            MappingProxyType(dict(zip(LOAN_MEASURES, columns, strict=True))), MappingProxyType(cells)
        )


@dataclass(frozen=True, slots=True, eq=False)
class _Job:
    """Paths that go through the march together: their places ``at`` among all, their tables, and the blocks' cuts."""

    book: LossBook
    at: list[int]
    routes: list[Route]
    tables: list[_Tables]
    paths: Paths
    cuts: Ints
    loans: Floats

    @property
    def blocks(self) -> int:
        return int(self.cuts.size) - 1

    def block(self, block: int) -> _Found:
        """The runs of one block along all paths of the job."""
        whole, count = self.book, len(self.routes)
        first, last = int(self.cuts[block]), int(self.cuts[block + 1])
        lanes, cells = whole.lanes.part(first, last)
        loans, present, edges = lanes.loan, lanes.present > 0, self.paths.edges
        dense, ends = self._dense(np.where(present, loans, loans[0]), int(lanes.steps.max()))
        out = Out(
            self.loans,
            np.zeros((count, cells.size, len(CELL_MEASURES), whole.horizon)),
            np.zeros((count, edges.size, len(YEAR_ROWS), loans.size)),
        )
        march(lanes, self.paths, dense, self._ratios(np.where(present, loans, loans[0])), out)
        years = []
        if edges.size:
            here, ends = loans[present], None if ends is None else ends[present]
            years = [self._years(here, y[:, :, present], ends) for y in out.years]
        return _Found(cells, out.sums, years)

    def _ratios(self, loans: Ints) -> Ratios:
        """What moves on the way, for the loans in some slots."""
        moved, shape = self.tables[0].moved, (0, loans.size)
        place = place_of(self.book.factors.causes)
        if not moved:
            none, ints = np.zeros(0), np.zeros(shape, dtype=np.int64)
            return Ratios(
                np.zeros(0, np.int64),
                none,
                np.zeros(0, np.bool_),
                np.zeros((1, *shape)),
                ints,
                ints,
                np.zeros((1, 0, 0, 0)),
            )
        most = max(m.ratio.inverse.shape[0] for m in moved)
        inverse = np.zeros((len(self.tables), len(moved), most, self.book.horizon))
        for s, tables in enumerate(self.tables):
            for k, m in enumerate(tables.moved):
                inverse[s, k, : m.ratio.inverse.shape[0]] = m.ratio.inverse
        return Ratios(
            place[[m.cause for m in moved]], np.array([m.term.slope for m in moved]), np.array([m.term.logged for m in moved]),
            np.array([[m.ratio.c[loans] for m in t.moved] for t in self.tables]), np.stack([m.ratio.which[loans] for m in moved]),
            np.stack([m.ratio.first[loans] for m in moved]), inverse,
        )  # fmt: skip

    def _dense(self, loans: Ints, steps: int) -> tuple[Dense, Floats | None]:
        """Values of every slot and step that no table gives, and (slots, H) discount factors at the steps' ends."""
        book, route, tables = self.book, self.routes[0], self.tables[0]
        causes = len(_links(book.factors))
        at, place = np.full(causes, -1, dtype=np.int64), place_of(book.factors.causes)
        x: list[Floats] = []
        whole = tables.factoring.all() and not book._own_money(route)
        contracts = None if whole or route.contracts is None else route.contracts.tile(loans, steps)
        if not tables.factoring.all():
            columns = None if contracts is None else contracts.columns()
            for c in np.flatnonzero(~tables.factoring):
                at[place[c]] = len(x)
                own = route.own.get(book.factors.causes[c])
                moving = columns
                if own is not None and own.contracts is not None:
                    moving = own.contracts.tile(loans, steps).columns()
                eta = book.factors.eta(int(c), loans, tables.z[c, :, :steps], tables.v[c][:, :steps], moving)
                x.append(np.ascontiguousarray(exp_eta(eta).T))
        stack = np.stack(x) if x else np.zeros((0, 0, 0))
        top = stack.max(axis=2, initial=0.0)
        if not book._own_money(route):
            none = np.zeros((0, 0))
            return Dense(stack, at, top, none, none, none, none), None
        money = book.money if route.lgd is None else dataclasses.replace(book.money, lgd=route.lgd)
        m = money.block(loans, steps, contracts)
        turned = [np.ascontiguousarray(a.T) for a in (m.balance, m.exposure, m.discount, m.lgd)]
        return Dense(stack, at, top, *turned), m.ends if self.paths.edges.size else None

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


def _halves(
    progress: Callable[[int, int], None] | None,
) -> tuple[Callable[[int, int], None] | None, Callable[[int, int], None] | None]:
    """What two marches of the same blocks tell as one."""
    if progress is None:
        return None, None
    tell = progress
    return (lambda done, whole: tell(done, 2 * whole)), (lambda done, whole: tell(whole + done, 2 * whole))


def _links(factors: Factors) -> list[str]:
    place = place_of(factors.causes)
    out = ["logit"] * (int(place.max()) + 1)
    for p, fit in zip(place, factors.fits, strict=True):
        out[p] = fit.spec.link
    return out


def _after_given(fit: HazardFit, features: FeatureTable, first: int, steps: int) -> NDArray[np.bool_]:
    """(keys, steps) whether any feature of the default hazard, as loans of a key read it, rests on a value after the
    last given one. One key where no feature goes by a loan column."""
    keys, window = fit.design.keys, features.flags[first : first + steps]
    out = np.zeros((keys.count, steps), dtype=np.bool_)
    for key in range(keys.count):
        others = keys.not_read(key)
        used = [features.names.index(n) for n in fit.feature_names if n not in others]
        if used:
            out[key] = (window[:, used] == AFTERWARDS).any(axis=1)
    return out


def prepare_book(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    loss: Loss,
    *,
    cells: Ints,
    n_cells: int,
    cap: int | None = None,
    lgd: LgdSource | None = None,
    threads: int = 1,
    weight: Floats | None = None,
) -> LossBook:
    """What the paths of a book share; ``cells`` (n,), ``cap``, ``lgd`` and ``threads`` as for
    :func:`stresskit.loss.assess.assess`.

    weight  (n,) > 0: for how many loans each one stands, by default one. Results of cells and loans are then those of
            all for which it stands (its no-payoff PD apart, which stays a probability), amounts being those of one.
            Where the portfolio has counts, for how many such entries: their amounts are then those of all their loans,
            and numbers in cells are of entries

    Raises DataError when a loan lacks a column that a hazard or the LGD reads, NumericError without a default hazard.
    """
    check_default(fits)
    life = life_steps(portfolio, cap)
    source = lgd_source(loss.lgd, portfolio) if lgd is None else lgd
    factors = factors_of(portfolio, fits, threads)
    packing = pack(cells, factors.row, life)
    own = fits["default"].supported_age - factors.row_age
    lanes = Lanes(portfolio, factors, loss, source, packing, own, cap, has_recursion(loss, portfolio), weight)
    return LossBook(
        portfolio,
        fits,
        loss,
        n_cells,
        int(life.max()),
        Money(portfolio, loss, source),
        factors,
        packing,
        lanes,
    )
