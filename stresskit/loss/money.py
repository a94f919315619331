"""Money of a book: what balances, exposures and discount factors come from, in lanes or loan by loan and step by step."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.core.values import Portfolio
from stresskit.kernels.schedule import balance_path
from stresskit.loss.lgd import LgdSource
from stresskit.projection.interfaces import ContractTile
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Largest n * ln(v) of a schedule with a negative rate that is worked out by powers of v.
_POWER = 600.0


def period_rate(loss: Loss, portfolio: Portfolio) -> Floats:
    """(n,) discount rate per period: each loan's effective rate, one annual effective rate, or none.

    A nominal annual rate r paid k times a year has the effective rate r/k per period.
    """
    return _per_period(loss, portfolio.rate, portfolio.frequency.per_year)


def _per_period(loss: Loss, rate: Floats, k: int) -> Floats:
    if _own_rate(loss):
        return rate / k
    annual = 0.0 if loss.discount == "none" else float(loss.discount)
    return np.full(rate.shape, np.expm1(np.log1p(annual) / k))


def _own_rate(loss: Loss) -> bool:
    return loss.discount in ("rate", "rate_path")


@dataclass(frozen=True, slots=True, eq=False)
class LaneMoney:
    """(b,) each, meanings as in :class:`stresskit.kernels.lanes.Book`."""

    v: Floats
    annuity: Floats
    scale: Floats
    up: Floats
    w: Floats
    d0: Floats


def has_recursion(loss: Loss, portfolio: Portfolio) -> bool:
    """Whether :func:`lane_money` holds for every loan: no negative rate would grow past all numbers on the way."""
    rate = portfolio.rate / portfolio.frequency.per_year
    if loss.exposure.schedule != "annuity" or rate.min(initial=0.0) >= 0.0:
        return True
    return bool((rate > -1.0).all() and (-np.log1p(rate) * portfolio.remaining <= _POWER).all())


def lane_money(
    loss: Loss, balance: Floats, nominal: Floats, term: Floats, *, cap: int | None, per_year: int
) -> LaneMoney:
    """What the schedule recursion of some loans needs, all (b,); see :func:`has_recursion`.

    Annuity (Kellison 2008, ch. 5, prospective method): balance after k of n payments = B A(n - k) / A(n) with
    A(j) = 1 + v + .. + v^(j - 1), which A(j + 1) = 1 + v A(j) adds up without cancellation for every rate.
    """
    rate, one = nominal / per_year, np.ones(term.size)
    left = np.zeros(term.size) if cap is None else np.maximum(term - cap, 0.0)
    force: Floats | None = None
    if loss.exposure.schedule == "bullet":
        v, annuity, whole = 0.0 * one, (left > 0.0).astype(np.float64), one
    elif loss.exposure.schedule == "linear":
        v, annuity, whole = one, left, term
    else:
        force = np.log1p(rate)
        v, annuity, whole = 1.0 / (1.0 + rate), *_annuities(force, left, term)
    accrued = loss.exposure.accrued
    up = 1.0 + accrued * np.maximum(rate, 0.0) if accrued else one
    if force is None or not _own_rate(loss):
        force = np.log1p(_per_period(loss, nominal, per_year))
    d0 = np.exp(0.5 * force) if loss.timing == "mid" else one
    return LaneMoney(v, annuity, balance / whole, up, np.exp(-force), d0)


def _annuities(force: Floats, *terms: Floats) -> list[Floats]:
    """1 + v + .. + v^(n - 1) for each n (b,), v = e^-force."""
    back, none = -force, force == 0.0
    per_step = np.expm1(back)
    if none.any():
        per_step[none] = 1.0
    out = []
    for n in terms:
        some = back * n
        np.expm1(some, out=some)
        some /= per_step
        if none.any():
            some[none] = n[none]
        out.append(some)
    return out


@dataclass(frozen=True, slots=True, eq=False)
class BlockMoney:
    """Loan by loan and step by step; zero after a loan's life.

    balance (b, H + 1) after 0, 1, .. payments; exposure, discount, lgd (b, H) of a default in step h; growth (b, H) log of
    what one unit is worth at the end of step h
    """

    balance: Floats
    exposure: Floats
    discount: Floats
    lgd: Floats
    growth: Floats

    @property
    def ends(self) -> Floats:
        """(b, H) discount factor of the end of step h."""
        return np.asarray(np.exp(-self.growth))


@dataclass(frozen=True, slots=True, eq=False)
class Money:
    """Where the money of a book comes from: its contracts, or the study's schedule where there are none."""

    portfolio: Portfolio
    loss: Loss
    lgd: LgdSource

    def block(self, loans: Ints, steps: int, contracts: ContractTile | None) -> BlockMoney:
        """Money of some loans over ``steps``. Raises NumericError for values that are no numbers or of another shape."""
        book, shape = self.portfolio, (loans.size, steps)
        alive = np.arange(steps + 1)[None, :] < book.remaining[loans, None]
        if contracts is None:
            rate = book.rate[loans] / book.frequency.per_year
            balance = balance_path(
                book.balance[loans], rate, book.remaining[loans], steps, self.loss.exposure.schedule
            )
            up = 1.0 + self.loss.exposure.accrued * np.maximum(rate, 0.0)
            exposure: Floats = balance[:, :steps] * up[:, None]
        else:
            balance = _of_shape(contracts.balances(), (loans.size, steps + 1), "balances")
            exposure = _of_shape(contracts.exposures(), shape, "exposures")
        force = self._force(loans, steps, contracts)
        growth = np.cumsum(force, axis=1)
        when = growth - 0.5 * force if self.loss.timing == "mid" else growth
        exposure = np.where(alive[:, :steps], exposure, 0.0)
        lgd = np.asarray(self.lgd.tile(loans, steps, exposure), dtype=np.float64)
        lgd = _of_shape(np.broadcast_to(lgd[:, None] if lgd.ndim == 1 else lgd, shape), shape, "LGD")
        return BlockMoney(np.where(alive, balance, 0.0), exposure, np.exp(-when), lgd, growth)

    def _force(self, loans: Ints, steps: int, contracts: ContractTile | None) -> Floats:
        """(b, steps) log of one plus the discount rate of each step: that of as_of, or the one in force."""
        if contracts is not None and self.loss.discount == "rate_path":
            rates = _of_shape(contracts.rates(), (loans.size, steps), "rates")
            return np.log1p(rates / self.portfolio.frequency.per_year)
        book = self.portfolio
        own = np.log1p(_per_period(self.loss, book.rate[loans], book.frequency.per_year))
        return np.broadcast_to(own[:, None], (loans.size, steps))


def _of_shape(values: Any, shape: tuple[int, int], what: str) -> Floats:
    out = np.asarray(values, dtype=np.float64)
    if out.shape != shape or not np.isfinite(out).all():
        bad = "numbers that are not finite" if out.shape == shape else f"shape {out.shape}"
        raise NumericError(
            f"{what} along the path have {bad}; expected {shape[0]:,} loans x {shape[1]:,} finite numbers"
        )
    return out
