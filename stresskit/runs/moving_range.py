"""Whether moving columns stay, along a path, in the range on which the hazards were estimated."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio, RiskSet
from stresskit.projection.interfaces import ContractPaths

#: Loans that are looked at; of a larger book every k-th, which is chosen by its order alone.
MOST_LOANS = 2000
#: Below this share of loan-periods nothing is said.
LEAST_SHARE = 0.0005


def moving_cautions(
    scenario: str,
    contracts: ContractPaths | None,
    risk_set: RiskSet,
    portfolio: Portfolio,
    life: NDArray[np.int64],
) -> tuple[str, ...]:
    """A sentence per moving column that leaves its range in a share of the loans' projected periods; ``life`` (n,) steps.

    Where entries of the book stand for several loans the share is that of the loans.
    """
    if contracts is None or not contracts.names:
        return ()
    rows = np.arange(0, portfolio.n_loans, -(-portfolio.n_loans // MOST_LOANS))
    steps = int(life[rows].max())
    alive = np.arange(steps)[None, :] < life[rows][:, None]
    each = "loans" if portfolio.count is None else "lines"
    sample = f" of {rows.size:,} {each} looked at" if rows.size < portfolio.n_loans else ""
    out = []
    for name, values in contracts.tile(rows, steps).columns().items():
        seen = risk_set.moving[name]
        low, high = float(seen.min()), float(seen.max())
        far = np.where(alive, np.maximum(low - values, values - high), 0.0)
        # rounding is no extrapolation
        outside = far > 1e-9 * max(high - low, abs(high), abs(low))
        share = _share(outside, alive, None if portfolio.count is None else portfolio.count[rows])
        if share >= LEAST_SHARE:
            width = f" ({far.max() / (high - low):.0%} of its width)" if high > low else ""
            out.append(
                f"Scenario {scenario}: moving column {name} leaves the range on which hazards were estimated ({low:.3g} to {high:.3g}) in "
                f"{share:.1%} of loan-periods{sample}, by up to {far.max():.3g}{width}."
            )
    return tuple(out)


def _share(outside: NDArray[np.bool_], alive: NDArray[np.bool_], count: NDArray[np.float64] | None) -> float:
    """Share of loan-periods outside, of (b, H) periods of b loans, or of lines that stand for ``count`` (b,) loans."""
    if count is None:
        return float(outside.sum() / alive.sum())
    return float((count * outside.sum(axis=1)).sum() / (count * alive.sum(axis=1)).sum())
