"""What a projection asks of contracts, of hazards that read moving columns, and of those who watch it year by year.

Conventions: b loans of one block, H steps; step h stands in column h - 1; ``loans`` are indices into the portfolio.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.ratio import Ratio
from stresskit.hazard.result import MovingTerm

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class ContractTile(Protocol):
    """The contracts of some loans over some steps; what its values share is worked out once."""

    def balances(self) -> Floats:
        """(b, steps + 1) balance after 0, 1, .. ``steps`` payments of a loan that stays on book."""

    def rates(self) -> Floats:
        """(b, steps) nominal annual rate in step h."""

    def exposures(self) -> Floats:
        """(b, steps) exposure of a default in step h: accrued interest and drawings before default included."""

    def columns(self) -> Mapping[str, Floats]:
        """Moving column -> (b, steps) value known at the START of step h."""


class ContractPaths(Protocol):
    """What the contracts of a book make of one scenario path: balances, rates, exposures, derived columns.

    A pure function of its arguments: a block's values do not depend on the blocks asked for before. Tiles may be asked
    for on several threads; one tile is used by one thread.
    """

    @property
    def names(self) -> tuple[str, ...]:
        """Moving loan columns that a tile's ``columns`` gives."""

    @property
    def afterwards(self) -> NDArray[np.bool_]:
        """(horizon,) whether what hazards read in a step rests on path values past the last given one."""

    def tile(self, loans: Ints, steps: int) -> ContractTile:
        """Loans (b,) over ``steps``."""


class StandingTile(Protocol):
    """Contracts that are replaced like for like, over some steps: the balance of as_of stands, rates and indices move."""

    def rates(self) -> Floats:
        """(b, steps) nominal annual rate in step h."""

    def exposures(self) -> Floats:
        """(b, steps) exposure of a default in step h."""

    def columns(self) -> Mapping[str, Floats]:
        """Moving column -> (b, steps) value known at the START of step h."""


class StandingContracts(ContractPaths, Protocol):
    """Contracts that can also be held constant."""

    def standing(self, loans: Ints, steps: int) -> StandingTile:
        """Loans (b,) and what replaces them, over ``steps``, which may go past contract ends."""


@runtime_checkable
class MovingHazard(Protocol):
    """A hazard that reads moving loan columns."""

    def moving_part(self, values: Mapping[str, Floats]) -> Floats:
        """(b, H) what the moving columns, each (b, H), add to the linear predictor."""


@runtime_checkable
class OneMovingTerm(Protocol):
    """A hazard that says when all that moves in it is one number."""

    def moving_term(self) -> MovingTerm | None:
        """None where more moves, or in another way."""


@runtime_checkable
class PlainContracts(Protocol):
    """Contracts that say when they are the study's schedule at fixed rates and columns are ratios of its balances."""

    def ratio(self, name: str, steps: int) -> Ratio | None:
        """A moving column over ``steps``; None where it, or any contract, is something else."""

    @property
    def plain(self) -> bool:
        """Whether rates are fixed and balances and exposures those of the study's schedule."""
