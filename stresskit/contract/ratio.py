"""A moving column that projections can work out on the way: balance over an indexed value."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Ratio:
    """A moving column that is the scheduled balance over a value with an index, for all loans of a book.

    c (n,)       index when the value was taken, over the value
    which (n,)   row of the index; first (n,) step before which it does not move
    inverse (G, H)  1 / index at the start of each step
    """

    c: Floats
    which: Ints
    first: Ints
    inverse: Floats

    def like(self, other: Ratio) -> bool:
        """Whether the two differ by the index's values alone."""
        mine, theirs = (self.which, self.first), (other.which, other.first)
        return self.inverse.shape == other.inverse.shape and all(map(np.array_equal, mine, theirs))
