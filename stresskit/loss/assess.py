"""Expected loss of a book under one path: per loan, and per cell of the finest breakdown and step."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.collateral import CollateralShortfall
from stresskit.contract.paths import ContractPaths
from stresskit.core.errors import NumericError
from stresskit.core.values import AFTERWARDS, FeatureTable, Portfolio, frozen_columns
from stresskit.hazard.result import HazardFit
from stresskit.loss.interfaces import OnYears
from stresskit.loss.money import TileMoney, lgd_per_loan, period_rate, tile_money
from stresskit.loss.years import tile_years
from stresskit.projection.project import Tile, life_steps, tiles
from stresskit.spec.exposure import CollateralLgd
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

LOAN_MEASURES = (
    "pd_12m",
    "pd_lifetime",
    "pd_no_payoff",
    "payoff_lifetime",
    "el_12m",
    "el_lifetime",
    "exposed_lifetime",
    "extrapolated",
    "beyond_path",
)
CELL_MEASURES = ("on_book", "matured", "default", "payoff", "balance", "default_amount", "exposed", "el")


@dataclass(frozen=True, slots=True)
class LossResult:
    """One path's losses.

    loans  measure -> (n,): probabilities; el_* and exposed_lifetime (sum of q_d * EAD * D, the
           denominator of the loss-weighted LGD) are amounts; extrapolated and beyond_path are the parts of
           pd_lifetime from ages beyond the last supported one and from steps after the last given path value
    cells  measure -> (cells, H): on_book and matured are expected numbers of loans at the END of the step,
           default and payoff numbers leaving in it; balance is the expected performing balance at its
           START; default_amount is q_d * EAD, exposed the same discounted, el the discounted loss
    """

    loans: Mapping[str, Floats]
    cells: Mapping[str, Floats]


def _after_given(fit: HazardFit, features: FeatureTable, first: int, steps: int) -> NDArray[np.bool_]:
    """(keys, steps) whether any feature of the default hazard, as loans of a key read it, rests on a value after the
    last given one. One key where no feature goes by a loan column."""
    keys, window = fit.design.keys, features.flags[first : first + steps]
    out = np.zeros((keys.count, steps), dtype=bool)
    for key in range(keys.count):
        others = keys.not_read(key)
        used = [features.names.index(n) for n in fit.feature_names if n not in others]
        out[key] = (window[:, used] == AFTERWARDS).any(axis=1)
    return out


def _beyond_path(default: Floats, key: Ints, after: NDArray[np.bool_]) -> Floats:
    """(b,) default flow in the steps that rest on values after the last given one; key (b,) row of ``after``."""
    if after.shape[0] == 1:
        return np.asarray(default[:, after[0, : default.shape[1]]].sum(axis=1))
    out = np.zeros(default.shape[0])
    for mine in np.unique(key):
        at = key == mine
        out[at] = default[at][:, after[mine, : default.shape[1]]].sum(axis=1)
    return out


def _loan_measures(
    tile: Tile, money: TileMoney, year: int, supported_age: int, beyond: Floats
) -> dict[str, Floats]:
    default = tile.flows["default"]
    ages = tile.age + 1 + np.arange(tile.steps)
    zero = np.zeros(tile.loans.shape[0])
    return {
        "pd_12m": default[:, :year].sum(axis=1),
        "pd_lifetime": default.sum(axis=1),
        "pd_no_payoff": 1.0 - tile.default_alone[:, -1],
        "payoff_lifetime": tile.flows["payoff"].sum(axis=1) if "payoff" in tile.flows else zero,
        "el_12m": money.loss[:, :year].sum(axis=1),
        "el_lifetime": money.loss.sum(axis=1),
        "exposed_lifetime": (default * money.exposure * money.discount).sum(axis=1),
        "extrapolated": default[:, ages > supported_age].sum(axis=1),
        "beyond_path": beyond,
    }


def _cell_measures(tile: Tile, money: TileMoney, remaining: Ints) -> dict[str, Floats]:
    """(b, H) summands of CELL_MEASURES."""
    steps = np.arange(1, tile.steps + 1)[None, :]
    # A contract that ends inside the horizon leaves the book as matured; one cut off by the cap does not.
    over = steps >= remaining[tile.loans][:, None]
    before = np.concatenate([np.ones((tile.loans.shape[0], 1)), tile.survival[:, :-1]], axis=1)
    default = tile.flows["default"]
    return {
        "on_book": tile.survival * ~over,
        "matured": tile.survival * over,
        "default": default,
        "payoff": tile.flows.get("payoff", np.zeros_like(default)),
        "balance": before * money.balance,
        "default_amount": default * money.exposure,
        "exposed": default * money.exposure * money.discount,
        "el": money.loss,
    }


def assess(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    features: FeatureTable,
    loss: Loss,
    *,
    cells: Ints,
    n_cells: int,
    cap: int | None = None,
    contracts: ContractPaths | None = None,
    collateral: CollateralShortfall | None = None,
    years: Sequence[int] | None = None,
    on_years: OnYears | None = None,
) -> LossResult:
    """Project the book along one path and put money on it.

    cells    (n,) index of each loan's cell in the finest breakdown, 0 <= cell < n_cells
    cap      largest number of steps
    contracts, collateral   what the contracts and the collateral make of this path, where the study declares it
    years    last steps of the buckets of which on_years is told, ascending; on_years is called block by block,
             always in the same order, with every loan once

    Sums run over loans in the portfolio's canonical order inside a fixed order of tiles, so the result does
    not depend on threads. Raises what :func:`stresskit.projection.project.tiles` raises.
    """
    life = life_steps(portfolio, cap)
    horizon = int(life.max()) if portfolio.n_loans else 0
    year = portfolio.frequency.per_year
    rate = period_rate(loss, portfolio)
    lgd: Floats | CollateralShortfall
    if isinstance(loss.lgd, CollateralLgd):
        if collateral is None:
            raise NumericError("loss.lgd.collateral needs the collateral along the path")
        lgd = collateral
    else:
        lgd = lgd_per_loan(loss.lgd, portfolio)
    fit = fits["default"]
    after = _after_given(fit, features, portfolio.as_of + 1 - features.start, horizon)
    if contracts is not None:
        after |= contracts.afterwards[:horizon]
    key = fit.design.keys.of_loans(portfolio.static, portfolio.n_loans, portfolio.loan_ids)
    loans = {m: np.zeros(portfolio.n_loans) for m in LOAN_MEASURES}
    totals = {m: np.zeros((n_cells, horizon)) for m in CELL_MEASURES}
    edges = np.asarray(() if years is None else years, dtype=np.int64)
    for tile in tiles(portfolio, fits, features, cap=cap, contracts=contracts):
        money = tile_money(tile, portfolio, loss, lgd, rate)
        beyond = _beyond_path(tile.flows["default"], key[tile.loans], after)
        for name, values in _loan_measures(tile, money, year, fit.supported_age, beyond).items():
            loans[name][tile.loans] = values
        if on_years is not None:
            if isinstance(lgd, CollateralShortfall):
                raise NumericError("the year view does not know collateral along the path yet")
            on_years(tile_years(tile, money, portfolio, loss, edges=edges, lgd=lgd, rate=rate))
        parts = _cell_measures(tile, money, portfolio.remaining)
        tile_cells = cells[tile.loans]
        for cell in np.unique(tile_cells):
            rows = tile_cells == cell
            for name, part in parts.items():
                totals[name][cell, : tile.steps] += part[rows].sum(axis=0)
                if name in ("on_book", "matured"):  # states persist after the tile's last step
                    totals[name][cell, tile.steps :] += part[rows, -1].sum()
    return LossResult(frozen_columns(loans), frozen_columns(totals))
