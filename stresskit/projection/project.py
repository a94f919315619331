"""Roll every loan forward along one path and keep every step (METHOD: projection).

The plain route, in numpy, for notebooks and for comparison: losses of a whole book are computed in lanes, see
:mod:`stresskit.loss.book`, and agree with this to 1e-12.

Work goes through in tiles of loans that share an age at as_of, so that one row of age and calendar
effects serves the whole tile. A tile holds (loans, steps) arrays; the whole book never does, unless
:func:`project` is asked for it.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError, TextError
from stresskit.core.period import format_period
from stresskit.core.values import FeatureDefinition, FeatureTable, Portfolio, frozen
from stresskit.hazard.result import CellPart, HazardFit, LoanPart
from stresskit.kernels.rollforward import period_odds, roll_forward
from stresskit.projection.interfaces import ContractPaths, MovingHazard

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

TILE_LOANS = 4096


@dataclass(frozen=True, slots=True)
class Tile:
    """Some loans of one cohort, all steps.

    loans          (b,) indices into the portfolio
    age            age of these loans at as_of
    steps          H of the tile: the largest number of steps any of its loans has
    life           (b,) number of steps H_i of each loan, <= H
    survival       (b, H) S(h): neither defaulted nor paid off by the end of step h; constant after H_i
    flows          cause -> (b, H) q_c(h), zero after H_i
    default_alone  (b, H) survival of the default hazard alone, early repayment switched off
    """

    loans: Ints
    age: int
    life: Ints
    survival: Floats
    flows: Mapping[str, Floats]
    default_alone: Floats

    @property
    def steps(self) -> int:
        return int(self.survival.shape[1])


@dataclass(frozen=True, slots=True)
class Projection:
    """The whole book, all steps: for books that fit into memory.

    life (n,), survival (n, H), flows cause -> (n, H), default_alone (n, H): as in :class:`Tile`, in
    the portfolio's order, H the longest life.
    """

    life: Ints
    survival: Floats
    flows: Mapping[str, Floats]
    default_alone: Floats

    def pd_within(self, steps: int) -> Floats:
        """(n,) cumulative incidence of default over the first ``steps`` steps (12 months: 12 or 4)."""
        return np.asarray(self.flows["default"][:, :steps].sum(axis=1))

    def pd_lifetime(self) -> Floats:
        """(n,) cumulative incidence of default to the end of each loan's life."""
        return np.asarray(self.flows["default"].sum(axis=1))

    def pd_no_payoff(self) -> Floats:
        """(n,) lifetime PD if no loan were repaid early: 1 - prod of default survival."""
        return 1.0 - self.default_alone[:, -1]


def life_steps(portfolio: Portfolio, cap: int | None) -> Ints:
    """(n,) number of projected steps of each loan: remaining term, or the cap if that is less."""
    return portfolio.remaining if cap is None else np.minimum(portfolio.remaining, cap)


def check_origin(fits: Mapping[str, HazardFit], features: FeatureTable) -> None:
    """Whether each fit is one of its cause, on this calendar, and read macro features made as these are.

    Where either side does not say how its features were made, that is not compared. Raises TextError.
    """
    for cause, fit in fits.items():
        if fit.cause != cause:
            raise TextError(
                f"the model given for hazards.{cause} was fitted for {fit.cause!r}; models are told apart by their file names: "
                f"restore {cause}.json, or fit again"
            )
        if fit.facts.frequency != features.frequency.value:
            raise TextError(
                f"the model of hazards.{cause} has periods of a {fit.facts.frequency}, the study periods of a "
                f"{features.frequency.value}: its ages and hazards would mean something else. Fit again, or restore the study's text"
            )
        _check_keys(cause, fit, features)
        for name in fit.feature_names:
            fitted, here = fit.definitions.get(name), features.definitions.get(name)
            if fitted is None or here is None or fitted == here:
                continue
            differ = fitted.differences(here)
            raise TextError(
                f"hazards.{cause} was fitted with another macro feature {name!r} ({_told(fitted, differ)}) than the study "
                f"defines ({_told(here, differ)}); fit again, or restore the study's text"
            )


def _check_keys(cause: str, fit: HazardFit, features: FeatureTable) -> None:
    """TextError where a feature goes by a loan column in the fit or in the study, and not by the same in the other."""
    fitted = {term.source: term for term in fit.design.keys.terms}
    for name in fit.design.features:
        there = name in features.features
        now, then = features.keyed.get(name), fitted.get(name)
        if there and (now.by if now else None) != (then.by if then else None):
            raise TextError(
                f"hazards.{cause} was fitted with macro feature {name!r} "
                f"{f'by loan column {then.by!r}' if then else 'the same for all loans'}, the study has it "
                f"{f'by {now.by!r}' if now else 'the same for all loans'}; fit again, or restore the study's text"
            )
        lost = sorted(set(then.levels) - set(now.levels)) if now and then else []
        if lost:
            raise TextError(
                f"hazards.{cause} was fitted with macro feature {name!r} for {then.by if then else ''} "
                f"{', '.join(map(repr, lost[:5]))}, for which the study names no variable; fit again, or restore the study's text"
            )


def _told(definition: FeatureDefinition, differ: Sequence[str]) -> str:
    """The whole definition, with what differs in front."""
    names = [*differ, *(f.name for f in dataclasses.fields(definition) if f.name not in differ)]
    return ", ".join(f"{name}: {getattr(definition, name)}" for name in names)


def check_default(fits: Mapping[str, HazardFit]) -> None:
    """Raises NumericError when there is no default hazard."""
    if "default" not in fits:
        raise NumericError("a projection needs a fit for 'default'")


def check_path(
    fits: Mapping[str, HazardFit],
    features: FeatureTable,
    portfolio: Portfolio,
    steps: int,
    contracts: ContractPaths | None = None,
) -> None:
    """Whether the path has all that the hazards read in every projected period.

    Raises NumericError for a macro feature without a value, TextError for a moving loan column without a declared
    path or what :func:`check_origin` refuses.
    """
    check_default(fits)
    check_origin(fits, features)
    _check_moving(fits, contracts)
    for cause, fit in fits.items():
        lacking = [n for n in fit.feature_names if n not in features.names]
        if lacking:
            raise NumericError(
                f"hazards.{cause} needs macro features that the path lacks: {', '.join(lacking)}"
            )
        first = portfolio.as_of + 1 - features.start
        if fit.feature_names and (first < 0 or first + steps > features.n_periods):
            raise NumericError(
                f"macro features cover {features.n_periods} periods from {format_period(features.start, features.frequency)}; "
                f"the projection needs {steps} from {format_period(portfolio.as_of + 1, portfolio.frequency)}"
            )
        for name in fit.feature_names:
            column = features.column(name)[first : first + steps]
            if not np.isfinite(column).all():
                bad = int(np.flatnonzero(~np.isfinite(column))[0])
                period = format_period(portfolio.as_of + 1 + bad, portfolio.frequency)
                raise NumericError(
                    f"macro feature {name} has no value in {period}, which the projection needs"
                )


def _check_moving(fits: Mapping[str, HazardFit], contracts: ContractPaths | None) -> None:
    """Whether every moving column that a hazard reads has a path. Raises TextError."""
    known = () if contracts is None else contracts.names
    for cause, fit in fits.items():
        lacking = [name for name in fit.moving_columns if name not in known]
        if lacking or (fit.moving_columns and not isinstance(fit, MovingHazard)):
            raise TextError(
                f"hazards.{cause} uses loan columns that change over time ({', '.join(lacking or fit.moving_columns)}) and no path is "
                "declared for them: a projection would have to guess. Declare how they move under moving, or leave them out of "
                "the hazard."
            )


def _path_values(fit: HazardFit, features: FeatureTable, first: int, steps: int) -> Floats:
    columns = [features.column(n)[first : first + steps] for n in fit.feature_names]
    return np.stack(columns, axis=1) if columns else np.empty((steps, 0))


def _eta(loan: LoanPart, cell: CellPart, rows: Ints) -> Floats:
    eta = loan.s[rows, None] + cell.z[None, :]
    if loan.U.shape[1]:
        # einsum, not a library product: its order of addition does not depend on threads.
        eta += np.einsum("ik,jk->ij", loan.U[rows], cell.V)
    return eta


def _tile_rows(portfolio: Portfolio, life: Ints) -> Iterator[Ints]:
    """Loan indices tile by tile: equal age, similar life, a fixed order that depends on data only."""
    order = np.lexsort((np.arange(portfolio.n_loans), life, portfolio.age))
    ages = portfolio.age[order]
    cuts = np.flatnonzero(np.diff(ages)) + 1
    for run in np.split(order, cuts):
        for start in range(0, run.shape[0], TILE_LOANS):
            yield run[start : start + TILE_LOANS]


def tiles(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    features: FeatureTable,
    *,
    cap: int | None = None,
    contracts: ContractPaths | None = None,
) -> Iterator[Tile]:
    """The book, tile by tile.

    portfolio  loans performing at as_of
    fits       cause -> fit; "default" is needed, others compete with it
    features   macro features on model periods, covering every projected period
    cap        largest number of steps, default: contract maturity
    contracts  where hazards read moving loan columns, the contracts along this path

    Raises what :func:`check_path` raises.
    """
    if portfolio.n_loans == 0:
        return
    life = life_steps(portfolio, cap)
    longest = int(life.max())
    check_path(fits, features, portfolio, longest, contracts)
    first = portfolio.as_of + 1 - features.start
    loan_parts = {
        c: f.loan_part(portfolio.static, portfolio.n_loans, portfolio.loan_ids) for c, f in fits.items()
    }
    paths = {c: _path_values(f, features, first, longest) for c, f in fits.items()}
    for rows in _tile_rows(portfolio, life):
        age, steps = int(portfolio.age[rows[0]]), int(life[rows].max())
        ages = age + 1 + np.arange(steps)
        alive = np.arange(steps)[None, :] < life[rows][:, None]
        odds = {}
        for cause, fit in fits.items():
            cell = fit.cell_part(ages, paths[cause][:steps], fit.feature_names)
            eta = _eta(loan_parts[cause], cell, rows)
            if contracts is not None and isinstance(fit, MovingHazard) and fit.moving_columns:
                moving = contracts.tile(rows, steps).columns()
                eta += fit.moving_part({name: moving[name] for name in fit.moving_columns})
            odds[cause] = period_odds(eta, fit.spec.link) * alive
        survival, flows = roll_forward(list(odds.values()))
        alone = np.cumprod(1.0 / (1.0 + odds["default"]), axis=1, dtype=np.float64)
        yield Tile(rows, age, life[rows], survival, dict(zip(odds, flows, strict=True)), alone)


def project(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    features: FeatureTable,
    *,
    cap: int | None = None,
    contracts: ContractPaths | None = None,
) -> Projection:
    """The whole book in memory; see :func:`tiles` for arguments and errors."""
    life = life_steps(portfolio, cap)
    n, steps = portfolio.n_loans, int(life.max()) if portfolio.n_loans else 0
    survival, alone = np.ones((n, steps)), np.ones((n, steps))
    flows = {c: np.zeros((n, steps)) for c in fits}
    for tile in tiles(portfolio, fits, features, cap=cap, contracts=contracts):
        h = tile.steps
        for whole, part in ((survival, tile.survival), (alone, tile.default_alone)):
            whole[tile.loans, :h] = part
            whole[tile.loans, h:] = part[:, -1:]
        for cause, part in tile.flows.items():
            flows[cause][tile.loans, :h] = part
    return Projection(frozen(life), frozen(survival), {c: frozen(f) for c, f in flows.items()}, frozen(alone))
