"""Loss given default as what the sale of the collateral leaves uncovered, in each period of a path.

LGD(h) = max(floor, 1 - value x index(h)/index(when valued) x (1 - haircut) x (1 - cost) / EAD(h)), the index at the
END of the default period. Where nothing is owed, the LGD is the floor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.index import IndexLevels, MacroLevels, index_levels
from stresskit.contract.paths import index_ratio
from stresskit.core.values import MacroHistory, Portfolio, ScenarioPath
from stresskit.spec.exposure import Collateral

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class CollateralShortfall:
    """LGD of a book along one path.

    proceeds  (n,) value x (1 - haircut) x (1 - cost), of the value as it was taken
    levels    of the index; None: the value stays
    """

    book: Portfolio
    collateral: Collateral
    proceeds: Floats
    levels: IndexLevels | None

    def tile(self, loans: Ints, steps: int, exposure: Floats) -> Floats:
        """(b, steps) loss as a fraction of EAD for a default in step h; ``exposure`` (b, steps) is EAD."""
        value = self.proceeds[loans][:, None]
        if self.levels is not None:
            base, moved = index_ratio(
                self.levels, self.book, loans, np.arange(1, steps + 1), self.collateral.valued
            )
            value = (value / base) * moved
        owed = exposure > 0.0
        covered = np.divide(value, exposure, out=np.ones(exposure.shape), where=owed)
        return np.maximum(self.collateral.floor, 1.0 - covered)


def collateral_shortfall(
    collateral: Collateral,
    portfolio: Portfolio,
    *,
    history: MacroHistory | None,
    path: ScenarioPath | None,
    horizon: int,
) -> CollateralShortfall:
    """The LGD that ``loss.lgd.collateral`` declares, of a book along a path. Raises what contract_paths raises."""
    levels = None
    if collateral.index is not None:
        source = MacroLevels(history, path, portfolio.frequency, portfolio.as_of + horizon)
        levels = index_levels(
            collateral.index, source, portfolio.static.__getitem__, lambda: portfolio.loan_ids,
            place="loss.lgd.collateral.index", n=portfolio.n_loans,
        )  # fmt: skip
    value = np.asarray(portfolio.static[collateral.value], dtype=np.float64)
    left = (1.0 - collateral.haircut) * (1.0 - collateral.cost)
    return CollateralShortfall(portfolio, collateral, value * left, levels)
