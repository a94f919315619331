"""Calendar years of a projection: where they end, and what one tile says about them."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.kernels.schedule import balance_after
from stresskit.loss.interfaces import YearFlows
from stresskit.loss.money import TileMoney
from stresskit.projection.project import Tile
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def year_edges(as_of: int, frequency: Frequency, horizon: int) -> Ints:
    """(Y,) last step of each calendar year that holds a step 1 .. ``horizon``; the last one may lie past it."""
    k = frequency.per_year
    first = k - (as_of + 1) % k
    return np.arange(first, max(horizon, 1) + k, k, dtype=np.int64)[: 1 + max(0, -(-(horizon - first) // k))]


def tile_years(
    tile: Tile, money: TileMoney, portfolio: Portfolio, loss: Loss, *, edges: Ints, lgd: Floats, rate: Floats
) -> YearFlows:
    """The years of one tile that end in ``edges``; ``lgd`` and ``rate`` (per period, for discounting) are (n,) for the book."""
    rows, steps = tile.loans, tile.steps
    default = tile.flows["default"]
    amount = default * money.exposure

    def years(values: Floats) -> Floats:
        before = np.concatenate([[0], edges[:-1]])
        parts = [values[:, a:b].sum(axis=1) for a, b in zip(before, edges, strict=True)]
        return np.stack(parts, axis=1)

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
