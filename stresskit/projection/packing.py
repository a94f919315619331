"""Which loan goes into which lane: loans of one cell and one table row side by side, long lives last."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels import packs
from stresskit.kernels.blocks import block_cuts
from stresskit.kernels.lanes import LANES, PAD, RUN_CHUNKS

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Combinations of cell and row that are counted however few loans there are.
_ROOM = 1 << 20


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


def _keys(cell: Ints, row: Ints) -> tuple[NDArray[np.int32], Ints, Ints]:
    """(key (n,) of cell and row together, ascending in both; cell and row of each key)."""
    width = int(row.max()) + 1
    bound = (int(cell.max()) + 1) * width
    if bound <= _ROOM + 2 * cell.size:
        every = np.arange(bound)
        return packs.crossed(cell, row, width), every // width, every % width
    found, key = np.unique(cell * width + row, return_inverse=True)
    return key.astype(np.int32), found // width, found % width


def pack(cell: Ints, row: Ints, life: Ints) -> Packing:
    """Loans with cell, table row and life, each (n,), n >= 1, into lanes."""
    key, key_cell, key_row = _keys(cell, row)
    order = np.empty(0, dtype=np.int32)
    if life.min() < life.max():
        order, _ = packs.counting_order(life.astype(np.int32), int(life.max()) + 1, order)
    order, loans = packs.counting_order(key, key_cell.size, order)
    chunks = -(-loans // LANES)
    of_key = np.repeat(np.arange(loans.size), chunks)
    within = np.arange(of_key.size) - np.repeat(np.cumsum(chunks) - chunks, chunks)
    count = np.minimum(loans[of_key] - within * LANES, LANES)
    size = -(-count // PAD) * PAD
    start, first = np.cumsum(size) - size, np.cumsum(count) - count
    of_chunk = key_cell[of_key]
    begins = np.flatnonzero(np.diff(of_chunk, prepend=-1))
    of_cell = np.diff(begins, append=of_chunk.size)
    at = np.arange(of_chunk.size) - np.repeat(begins, of_cell)
    run = np.flatnonzero(at % RUN_CHUNKS == 0)
    return Packing(
        packs.spread_out(order, start, count, int(size.sum())), start, size, key_row[of_key],
        life[order[first + count - 1]], life[order[first]], np.append(run, of_chunk.size), of_chunk[run],
    )  # fmt: skip
