"""What a projection asks of contracts, of hazards that read moving columns, and of those who watch it year by year.

Conventions: b loans of one block, H steps; step h stands in column h - 1; ``loans`` are indices into the portfolio.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class ContractPaths(Protocol):
    """What the contracts of a book make of one scenario path: balances, rates, exposures, derived columns.

    Pure functions of their arguments: a block's values do not depend on the blocks asked for before.
    """

    @property
    def names(self) -> tuple[str, ...]:
        """Moving loan columns that :meth:`columns` gives."""

    def balances(self, loans: Ints, steps: int) -> Floats:
        """(b, steps + 1) balance after 0, 1, .. ``steps`` payments of a loan that stays on book."""

    def rates(self, loans: Ints, steps: int) -> Floats:
        """(b, steps) nominal annual rate in step h."""

    def exposures(self, loans: Ints, steps: int) -> Floats:
        """(b, steps) exposure of a default in step h: accrued interest and drawings before default included."""

    def columns(self, loans: Ints, steps: int) -> Mapping[str, Floats]:
        """Moving column -> (b, steps) value known at the START of step h."""


@runtime_checkable
class MovingHazard(Protocol):
    """A hazard that reads moving loan columns."""

    def moving_part(self, values: Mapping[str, Floats]) -> Floats:
        """(b, H) what the moving columns, each (b, H), add to the linear predictor."""
