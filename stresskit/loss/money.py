"""Money on one tile of the projection: balance, exposure at default, LGD, discount factor, loss."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.collateral import CollateralShortfall
from stresskit.core.errors import DataError, Problem
from stresskit.core.values import Portfolio
from stresskit.kernels.schedule import balance_path
from stresskit.projection.project import Tile
from stresskit.spec.study import ConstantLgd, Loss, SegmentLgd

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class TileMoney:
    """All (b, H), zero after a loan's life.

    balance   outstanding at the START of the step if the loan is still performing
    exposure  balance plus accrued interest: EAD of a default in the step
    discount  factor from the step's default date to as_of
    loss      q_d * LGD * EAD * D: expected loss of the step, discounted
    """

    balance: Floats
    exposure: Floats
    discount: Floats
    loss: Floats


def lgd_per_loan(lgd: ConstantLgd | SegmentLgd, portfolio: Portfolio) -> Floats:
    """(n,) loss given default of each loan, a fraction of EAD. Raises DataError for a value without an LGD."""
    if isinstance(lgd, ConstantLgd):
        return np.full(portfolio.n_loans, lgd.constant)
    column = portfolio.static[lgd.by].astype(str)
    unknown = ~np.isin(column, list(lgd.values))
    if unknown.any():
        values = sorted({str(v) for v in column[unknown]})
        raise DataError(
            f"loss.lgd gives no value for some loans: {lgd.by} has {', '.join(map(repr, values[:5]))}",
            [
                Problem(
                    "lgd_missing",
                    f"loans whose {lgd.by} has no LGD",
                    int(unknown.sum()),
                    tuple(map(str, portfolio.loan_ids[unknown][:5])),
                    f"Add the values under loss.lgd.values; it has {sorted(lgd.values)}.",
                )
            ],
        )
    return np.array([lgd.values[v] for v in column], dtype=np.float64)


def period_rate(loss: Loss, portfolio: Portfolio) -> Floats:
    """(n,) discount rate per period: each loan's effective rate, one annual effective rate, or none.

    A nominal annual rate r paid k times a year has the effective rate r/k per period.
    """
    k = portfolio.frequency.per_year
    if loss.discount in ("rate", "rate_path"):
        return portfolio.rate / k
    annual = 0.0 if loss.discount == "none" else float(loss.discount)
    return np.full(portfolio.n_loans, np.expm1(np.log1p(annual) / k))


def path_discount(rates: Floats, timing: str) -> Floats:
    """(b, H) factor from each step's default date to as_of, of rates (b, H) per period in force in each step."""
    force = np.log1p(rates)
    whole = np.cumsum(force, axis=1)
    return np.asarray(np.exp(-(whole - 0.5 * force if timing == "mid" else whole)))


def tile_money(
    tile: Tile, portfolio: Portfolio, loss: Loss, lgd: Floats | CollateralShortfall, discount_rate: Floats
) -> TileMoney:
    """Money for the loans of one tile; ``lgd`` and ``discount_rate`` are (n,) for the whole book."""
    rows, steps = tile.loans, tile.steps
    alive = np.arange(steps)[None, :] < tile.life[:, None]
    if tile.contract is None:
        rate = portfolio.rate[rows] / portfolio.frequency.per_year
        path = balance_path(
            portfolio.balance[rows], rate, portfolio.remaining[rows], steps, loss.exposure.schedule
        )
        balance = path[:, :steps] * alive
        exposure = balance * (1.0 + loss.exposure.accrued * np.maximum(rate, 0.0))[:, None]
    else:
        balance = tile.contract.balances()[:, :steps] * alive
        exposure = tile.contract.exposures() * alive
    if loss.discount == "rate_path" and tile.contract is not None:
        rates = tile.contract.rates() / portfolio.frequency.per_year
        discount = path_discount(rates, loss.timing) * alive
    else:
        when = np.arange(1, steps + 1) - (0.5 if loss.timing == "mid" else 0.0)
        discount = np.exp(-np.log1p(discount_rate[rows])[:, None] * when[None, :]) * alive
    given = lgd[rows][:, None] if isinstance(lgd, np.ndarray) else lgd.tile(rows, steps, exposure)
    return TileMoney(balance, exposure, discount, tile.flows["default"] * exposure * discount * given)
