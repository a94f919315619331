"""What the projection says about each calendar year, loan by loan, a block of loans at a time."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.kernels.schedule import balance_after
from stresskit.loss.money import TileMoney
from stresskit.projection.project import Tile
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class YearFlows:
    """One block of b loans over Y calendar-year buckets; the first one runs from as_of + 1 to the end of its year.

    loans           (b,) indices into the portfolio
    edges           (Y,) last step of each bucket
    default, payoff, matured   (b, Y) probability of leaving in the bucket, seen from as_of
    survival        (b, Y) probability of being on book at the bucket's end
    balance         (b, Y) expected performing balance at the bucket's end: survival x scheduled balance
    default_amount  (b, Y) sum of q_d * EAD
    loss            (b, Y) sum of q_d * EAD * LGD, undiscounted
    el              (b, Y) the same discounted to as_of
    discount        (b, Y) discount factor from the bucket's end to as_of
    """

    loans: Ints
    edges: Ints
    default: Floats
    payoff: Floats
    matured: Floats
    survival: Floats
    balance: Floats
    default_amount: Floats
    loss: Floats
    el: Floats
    discount: Floats


OnYears = Callable[[YearFlows], None]


def year_edges(as_of: int, frequency: Frequency, horizon: int) -> Ints:
    """(Y,) last step of each calendar year that holds a step 1 .. ``horizon``; the last one may lie past it."""
    k = frequency.per_year
    first = k - (as_of + 1) % k
    return np.arange(first, max(horizon, 1) + k, k, dtype=np.int64)[: 1 + max(0, -(-(horizon - first) // k))]


def tile_years(
    tile: Tile, money: TileMoney, portfolio: Portfolio, loss: Loss, *, lgd: Floats, rate: Floats
) -> YearFlows:
    """The years of one tile; ``lgd`` and ``rate`` (per period, for discounting) are (n,) for the whole book."""
    rows, steps = tile.loans, tile.steps
    edges = year_edges(portfolio.as_of, portfolio.frequency, steps)
    starts = np.concatenate([[0], edges[:-1]])
    default = tile.flows["default"]
    amount = default * money.exposure

    def years(values: Floats) -> Floats:
        return np.add.reduceat(values, starts, axis=1)

    remaining = portfolio.remaining[rows][:, None]
    last = np.minimum(edges, steps) - 1
    reached = tile.survival[:, last]
    ended = tile.survival[np.arange(rows.size), tile.life - 1][:, None] * (remaining <= edges[None, :])
    on_book = np.where(edges[None, :] >= remaining, 0.0, reached)
    scheduled = balance_after(
        portfolio.balance[rows][:, None], portfolio.rate[rows][:, None] / portfolio.frequency.per_year,
        remaining, edges[None, :], loss.exposure.schedule,
    )  # fmt: skip
    return YearFlows(
        loans=rows,
        edges=edges,
        default=years(default),
        payoff=years(tile.flows["payoff"]) if "payoff" in tile.flows else np.zeros(on_book.shape),
        matured=np.diff(ended, axis=1, prepend=0.0),
        survival=on_book,
        balance=on_book * scheduled,
        default_amount=years(amount),
        loss=years(amount) * lgd[rows][:, None],
        el=years(money.loss),
        discount=np.exp(-np.log1p(rate[rows])[:, None] * edges[None, :]),
    )
