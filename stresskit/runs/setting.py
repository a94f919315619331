"""A study set up for many projections: the book in lanes, the fits, the recovery; a path then costs one march."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.paths import ContractPaths
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import FeatureTable, Portfolio, ScenarioPath, no_features
from stresskit.hazard.result import HazardFit
from stresskit.kernels.blocks import processors
from stresskit.loss.book import LossBook, Route, prepare_book
from stresskit.loss.interfaces import OnYears
from stresskit.loss.lgd import LgdSource
from stresskit.loss.result import LossResult
from stresskit.macro.features import build_features
from stresskit.runs.contracts import along
from stresskit.runs.inputs import Prepared, StudyFile
from stresskit.runs.recovery import RecoveryResult, estimate_recovery, reach_of_recovery, recovery_lgd
from stresskit.runs.tables import Cells, make_cells
from stresskit.spec.base import meant
from stresskit.spec.study import RecoveryLgd

Floats = NDArray[np.float64]
Say = Callable[[str], None]


def _silent(_: str) -> None:
    return None


@dataclass(frozen=True, slots=True, eq=False)
class Setting:
    """What all projections of a study share. Make one with :func:`set_up`.

    fitted    every fitted model, those of the recovery too
    fits      those of the exits: default, payoff
    recovery  what the study's workouts say; None without workouts
    cells     the finest breakdown by the study's segments
    book      the loans of as_of made ready
    """

    file: StudyFile
    data: Prepared
    fitted: Mapping[str, HazardFit]
    fits: Mapping[str, HazardFit]
    recovery: RecoveryResult | None
    cells: Cells
    book: LossBook

    @property
    def portfolio(self) -> Portfolio:
        return self.book.portfolio

    def path(self, name: str) -> ScenarioPath:
        """The scenario of that name. Raises UsageError with the nearest name."""
        names = [p.name for p in self.data.paths]
        if name not in names:
            raise UsageError(f"no scenario {name!r}{meant(name, names)} (scenarios: {', '.join(names)})")
        return self.data.paths[names.index(name)]

    def reference(self) -> ScenarioPath:
        """The scenario called baseline, or the first one: what differences are taken to."""
        names = [p.name for p in self.data.paths]
        return self.data.paths[names.index("baseline") if "baseline" in names else 0]

    def features(self, path: ScenarioPath) -> FeatureTable:
        """Macro features along a path, as far as losses and recoveries after them reach."""
        steps = self.data.horizon + reach_of_recovery(self.file.study)
        start, end = self.file.as_of + 1, self.file.as_of + steps
        study, history = self.file.study, self.data.history
        if study.macro is None or history is None:
            return no_features(self.file.frequency, start, steps)
        return build_features(
            study.macro, history, model=self.file.frequency, start=start, end=end, path=path
        )

    def terms(
        self, path: ScenarioPath, features: FeatureTable
    ) -> tuple[ContractPaths | None, LgdSource | None]:
        """What contracts make of a path, and where LGD along it comes from; None each where the path does not matter."""
        contracts, lgd = along(
            self.file.study, self.portfolio, self.data.history, path,
            horizon=self.data.horizon, frames=self.data.schedules,
        )  # fmt: skip
        rule = self.file.study.loss.lgd
        if self.recovery is not None and isinstance(rule, RecoveryLgd):
            steps = self.data.horizon
            return contracts, recovery_lgd(
                rule, self.recovery, self.fitted, self.portfolio, features, horizon=steps
            )
        return contracts, lgd

    def route(self, path: ScenarioPath, *, on_years: OnYears | None = None) -> Route:
        """A path with everything that belongs to it, for :meth:`LossBook.along`."""
        features = self.features(path)
        contracts, lgd = self.terms(path, features)
        return Route(features, contracts, on_years, lgd)

    def along(self, paths: Sequence[ScenarioPath], *, threads: int | None = None) -> list[LossResult]:
        """Losses along each path: one projection each; the same bits for any number of threads."""
        return self.book.along([self.route(p) for p in paths], threads=threads or processors())

    def with_fits(self, fitted: Mapping[str, HazardFit]) -> Setting:
        """The same study and book under other fits, all of them given. The fits are not compared with the study's text."""
        fits = _exits(self.file, fitted)
        return replace(
            self, fitted=fitted, fits=fits, book=_book(self.file, self.portfolio, fits, self.cells)
        )


def _exits(file: StudyFile, fitted: Mapping[str, HazardFit]) -> dict[str, HazardFit]:
    return {str(name): f for name, f in fitted.items() if name in file.study.hazards}


def _book(
    file: StudyFile,
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    cells: Cells,
    threads: int | None = None,
) -> LossBook:
    return prepare_book(
        portfolio, fits, file.study.loss, cells=cells.codes, n_cells=cells.count, cap=file.study.horizon,
        threads=threads or processors(),
    )  # fmt: skip


def set_up(
    file: StudyFile,
    data: Prepared,
    fitted: Mapping[str, HazardFit],
    *,
    say: Say = _silent,
    threads: int | None = None,
) -> Setting:
    """``threads``: default as many as there are processors; the figures do not depend on it.

    Raises NumericError when no loan is left to project, DataError when loans lack a column that a hazard reads."""
    portfolio = data.loans.portfolio
    if portfolio.n_loans == 0:
        raise NumericError(
            f"no loan is left to project at {file.study.as_of}: {len(data.loans.not_projected):,} were left out, "
            "see the reasons that `stresskit check` prints"
        )
    fits = _exits(file, fitted)
    recovery = None
    if data.workouts is not None:
        recovery = estimate_recovery(file.study, data.workouts, say=say)
    cells = make_cells(portfolio, file.study.loans.segments)
    return Setting(file, data, fitted, fits, recovery, cells, _book(file, portfolio, fits, cells, threads))
