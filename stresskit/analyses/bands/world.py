"""A book, whole or compressed, on which draws are projected along every scenario."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.bands.compress import snapped
from stresskit.analyses.bands.draws import Draw, Spreads
from stresskit.analyses.bands.lgd import CurveSpread, HazardSpread, StatedSpread, static_recovery
from stresskit.contract.paths import ContractPaths
from stresskit.core.errors import DataError, NumericError
from stresskit.core.values import FeatureTable, Portfolio, ScenarioPath
from stresskit.hazard.result import HazardFit, LoanColumns
from stresskit.loss.book import LossBook, Route
from stresskit.loss.lgd import LgdSource
from stresskit.loss.result import LossResult
from stresskit.loss.years import year_edges
from stresskit.recovery.regression import CURED, RECOVERED
from stresskit.runs.contracts import along
from stresskit.runs.recovery import recovery_lgd
from stresskit.runs.setting import Setting
from stresskit.spec.study import RecoveryLgd

Floats = NDArray[np.float64]
Kept = dict[tuple[str, ...], Any]


@dataclass(frozen=True, slots=True, eq=False)
class World:
    """Make one with :func:`world_of`.

    setting    its portfolio may be one in which loans stand for others
    paths      scenarios, the reference among them
    lgd_book   the book as the recovery regressions read it
    lgd_values drawn number -> (n,) LGD, where LGD varies and does not depend on the path
    columns    cause -> loan side of the hazard
    counts     (n,) for how many loans alike each entry of the portfolio stands; None: for itself
    """

    setting: Setting
    paths: tuple[ScenarioPath, ...]
    spreads: Spreads
    book: LossBook
    lgd_book: Portfolio
    lgd_values: Callable[[Any], Floats] | None
    columns: Mapping[str, LoanColumns]
    counts: Floats | None = None
    centre: Kept = field(default_factory=dict)

    def results(
        self, draw: Draw | None, active: frozenset[str], kept: Kept | None = None
    ) -> list[LossResult]:
        """Losses along each path with these sources drawn, the others at their centre; ``kept``: a dictionary for the draw."""
        mine: Kept = {} if kept is None else kept
        book = self._book(draw, active, mine)
        shift = draw.shocks if draw is not None and "periods" in active else None
        moved = draw if "macro" in active else None
        routes = []
        for path in self.paths:
            along_path = self._once(("path", path.name), moved, mine, partial(self._path, path, moved))
            lgd = self._lgd(path, along_path, draw, active, mine)
            routes.append(Route(along_path.features, along_path.contracts, None, lgd, shift))
        return book.along(routes, threads=1)

    def figures(self, results: Sequence[LossResult]) -> Floats:
        """(S, cells, 3 + Y) of :func:`columns_of`; numbers of defaults go by the counts."""
        out = columns_of(results, edges_of(self.setting), self.setting.file.frequency.per_year)
        if self.counts is not None:
            codes, size = self.setting.cells.codes, self.setting.cells.count
            for found, columns in zip(results, out, strict=True):
                for k, measure in enumerate(("pd_12m", "pd_lifetime")):
                    columns[:, k] = np.bincount(codes, found.loans[measure] * self.counts, size)
        return out

    def _once(self, key: tuple[str, ...], draw: Draw | None, kept: Kept, make: Callable[[], Any]) -> Any:
        """Made once: for the draw, or, at the centre (no draw), for all of them."""
        store = self.centre if draw is None else kept
        if key not in store:
            store[key] = make()
        return store[key]

    def _book(self, draw: Draw | None, active: frozenset[str], kept: Kept) -> LossBook:
        book = self.book
        if draw is not None and "coefficients" in active:
            book = self._once(("book",), draw, kept, partial(self._with_coefficients, draw))
        elif draw is not None:
            book = self._once(("centre book",), draw, kept, self.book.remembering)
        if draw is not None and "lgd" in active and self.lgd_values is not None:
            book = book.with_static_lgd(self._once(("lgd",), draw, kept, partial(self.lgd_values, draw.lgd)))
        return book

    def _with_coefficients(self, draw: Draw) -> LossBook:
        assert self.spreads.coefficients is not None
        assert draw.normal is not None
        drawn = self.spreads.coefficients.at(draw.normal, draw.chi2)
        fits = {c: replace(f, coefficients=drawn[c]) for c, f in self.book.fits.items()}
        parts = {c: self.columns[c].part(drawn[c]) for c in fits}
        return self.book.with_coefficients(fits, parts).remembering()

    def _path(self, path: ScenarioPath, draw: Draw | None) -> Along:
        setting = self.setting
        if draw is not None:
            assert self.spreads.macro is not None
            assert draw.path is not None
            path = self.spreads.macro[path.name].at(draw.path)
        try:
            contracts, collateral = along(
                setting.file.study, setting.portfolio, setting.data.history, path,
                horizon=setting.data.horizon, frames=setting.data.schedules,
            )  # fmt: skip
            return Along(setting.features(path), contracts, collateral)
        except DataError as error:
            if draw is None:
                raise
            raise NumericError(
                f"a path drawn around scenario {path.name!r} cannot be used: {error}. Declare the variable as log_difference under "
                "macro.var.variables, or give it a floor under macro.var.floors"
            ) from None

    def _lgd(
        self, path: ScenarioPath, found: Along, draw: Draw | None, active: frozenset[str], kept: Kept
    ) -> LgdSource | None:
        """The LGD that a path brings; None where it does not depend on the path."""
        setting = self.setting
        rule, recovery = setting.file.study.loss.lgd, setting.recovery
        if recovery is None or not isinstance(rule, RecoveryLgd) or rule.recovery == "curve":
            return found.collateral
        varied = draw if "lgd" in active and isinstance(self.spreads.lgd, HazardSpread) else None
        moved = draw if "macro" in active else None

        def make() -> LgdSource:
            fits = setting.fitted
            if varied is not None:
                fits = self._once(("recovery fits",), varied, kept, partial(self._recovery_fits, varied))
            return recovery_lgd(
                rule, recovery, fits, self.lgd_book, found.features, horizon=setting.data.horizon
            )

        key = ("recovery", path.name, "drawn" if varied else "", "moved" if moved else "")
        source: LgdSource = self._once(key, varied or moved, kept, make)
        return source

    def _recovery_fits(self, draw: Draw) -> Mapping[str, HazardFit]:
        assert isinstance(self.spreads.lgd, HazardSpread)
        drawn = self.spreads.lgd.spread.at(draw.lgd, 1.0)
        fits = self.spreads.lgd.fits
        return {c: replace(fits[c], coefficients=drawn[c]) for c in fits}


@dataclass(frozen=True, slots=True, eq=False)
class Along:
    """What a path makes: macro features, contracts, and LGD where it is a collateral shortfall."""

    features: FeatureTable
    contracts: ContractPaths | None
    collateral: LgdSource | None


def world_of(setting: Setting, paths: Sequence[ScenarioPath], spreads: Spreads, *, snap: bool) -> World:
    """``snap``: whether recovery regressions may read numbers put to group means, which costs less and is nearly the same."""
    book, lgd_book = setting.portfolio, setting.portfolio
    ready, values = setting.book, None
    rule = setting.file.study.loss.lgd
    if isinstance(rule, RecoveryLgd) and rule.recovery == "curve":
        ready = ready.with_static_lgd(static_recovery(setting))
    if isinstance(spreads.lgd, StatedSpread | CurveSpread):
        values = spreads.lgd.values(setting)
    if snap and isinstance(rule, RecoveryLgd) and rule.recovery == "hazard":
        read = [
            name for c in (RECOVERED, CURED) if c in setting.fitted for name in setting.fitted[c].loan_columns
        ]
        lgd_book = snapped(book, list(dict.fromkeys(read)))
    columns = {
        c: f.loan_columns_of(book.static, book.n_loans, book.loan_ids) for c, f in setting.fits.items()
    }
    if book.count is not None:
        # numbers of loans follow from PDs and counts (World.figures): a march of amounts is enough for a draw
        ready = replace(ready, portfolio=replace(ready.portfolio, count=None))
    return World(setting, tuple(paths), spreads, ready, lgd_book, values, columns, book.count)


def edges_of(setting: Setting) -> NDArray[np.int64]:
    """(Y,) last step of each calendar year of the projection."""
    return year_edges(setting.portfolio.as_of, setting.file.frequency, setting.book.horizon)


def columns_of(results: Sequence[LossResult], edges: NDArray[np.int64], year: int) -> Floats:
    """(S, cells, 3 + Y) defaults in the first ``year`` steps and in all, loss in the first ``year``, loss in each calendar year."""
    out = []
    for found in results:
        default, el = found.cells["default"], found.cells["el"]
        parts = [default[:, :year].sum(axis=1), default.sum(axis=1), el[:, :year].sum(axis=1)]
        first = 0
        for last in edges:
            parts.append(el[:, first:last].sum(axis=1))
            first = int(last)
        out.append(np.stack(parts, axis=1))
    return np.stack(out)
