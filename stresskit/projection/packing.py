"""Which loan goes into which lane: loans of one cell and one table row side by side, long lives last."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.blocks import block_cuts, stable_order
from stresskit.kernels.lanes import LANES, PAD, RUN_CHUNKS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Packing:
    """Lanes, chunks and runs as in :mod:`stresskit.kernels.lanes`, for a whole book.

    loan (slots,)            index of the loan in a slot, -1 for padding
    start, size, row, steps, least (chunks,)   as in Book; least is the shortest life
    cut (runs + 1,), cell (runs,)              chunks of each run, and its cell

    A function of the data alone: of cell, table row, life and, among equals, place in the portfolio.
    """

    loan: Ints
    start: Ints
    size: Ints
    row: Ints
    steps: Ints
    least: Ints
    cut: Ints
    cell: Ints

    def blocks(self, target: int) -> Ints:
        """Run indices 0 = c0 < c1 < ... that cut the book into blocks of about ``target`` slots."""
        ends = np.append(self.start, self.loan.size)[self.cut]
        return block_cuts(np.diff(ends), np.arange(self.cell.size), target)


def _first_of(*keys: Ints) -> NDArray[np.bool_]:
    """Where a run of equal keys begins."""
    first = np.zeros(keys[0].size, dtype=np.bool_)
    first[:1] = True
    for key in keys:
        first[1:] |= key[1:] != key[:-1]
    return first


def _within(first: NDArray[np.bool_]) -> Ints:
    """Position within the run that begins at the last True."""
    at = np.arange(first.size)
    return at - np.maximum.accumulate(np.where(first, at, 0))


def pack(cell: Ints, row: Ints, life: Ints) -> Packing:
    """Loans with cell, table row and life, each (n,), n >= 1, into lanes."""
    bounds = [(k, int(k.max()) + 1) for k in (cell, row, life)]
    order = stable_order(*bounds)
    cell, row, life = cell[order], row[order], life[order]
    first = _within(_first_of(cell, row)) % LANES == 0
    chunk = np.cumsum(first) - 1
    starts = np.flatnonzero(first)
    count = np.diff(np.append(starts, order.size))
    size = -(-count // PAD) * PAD
    start = np.cumsum(size) - size
    loan = np.full(int(size.sum()), -1, dtype=np.int64)
    loan[start[chunk] + np.arange(order.size) - starts[chunk]] = order
    of_chunk = cell[starts]
    run = np.flatnonzero(_within(_first_of(of_chunk)) % RUN_CHUNKS == 0)
    return Packing(
        loan, start, size, row[starts], life[starts + count - 1], life[starts],
        np.append(run, starts.size), of_chunk[run],
    )  # fmt: skip
