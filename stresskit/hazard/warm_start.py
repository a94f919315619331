"""A start near the maximum for large books: the fit of a fixed few of the blocks that sums go over.

The answer does not depend on it. Newton runs on all rows from there until the same two inequalities hold
(hazard.newton), and the likelihood has one maximum; only the number of passes over all rows is smaller. Which blocks
they are follows from their number, and what is in a block from the canonical order, so that neither the order of
loans nor threads have a say. Where the few cannot be fitted (no events in a level, say) the fit starts where it
starts without them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.newton import Watch, maximise
from stresskit.hazard.sums import Evaluation, LoanSums

Floats = NDArray[np.float64]

#: Every so many blocks; more often where that leaves fewer than so many, and not at all where it is too often.
STEP, FEWEST, LEAST_STEP = 16, 8, 8
#: Scaled gradient at which they have said what they can: their own error is ten times larger.
NEAR = 0.1
#: A book of fewer rows is fitted before a start is found.
LEAST_ROWS = 1 << 21
#: Events in those blocks for each coefficient.
LEAST_EVENTS = 10


class BlockwiseSums(LoanSums, Protocol):
    """Sums that can be had for some of their blocks."""

    @property
    def blocks(self) -> int: ...

    def evaluate_blocks(self, params: Floats, blocks: range) -> Evaluation:
        """:meth:`evaluate` over some blocks alone."""

    def events_in(self, blocks: range) -> float:
        """Weight of the events of some blocks."""


@dataclass(frozen=True, slots=True)
class Part:
    """The sums over some blocks, for a solver."""

    sums: BlockwiseSums
    blocks: range

    def evaluate(self, params: Floats) -> Evaluation:
        return self.sums.evaluate_blocks(params, self.blocks)


def warm_start(sums: BlockwiseSums, rows: int, start: Floats, *, watch: Watch) -> Floats:
    """(k,) where to start; ``start`` itself for small books and blocks that say too little."""
    step = min(STEP, sums.blocks // FEWEST)
    if rows < LEAST_ROWS or step < LEAST_STEP:
        return start
    part = Part(sums, range(step // 2, sums.blocks, step))
    if not sums.events_in(part.blocks) >= LEAST_EVENTS * sums.k:
        return start
    try:
        found = maximise(part, start, part.evaluate(start), watch=watch, near=NEAR).params
    except NumericError:
        return start
    at = sums.evaluate(found)
    return found if np.isfinite(at.llf) and np.isfinite(at.information).all() else start
