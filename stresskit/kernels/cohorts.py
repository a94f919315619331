"""Running sums along cohorts, and tiles of stays by cells.

Cells lie track after track, ages ascending; a track is one cohort (of one group of loans). The first
cell of a track is a boundary: nothing happens in it, it stands for "before the first age at risk".
A stay covers the cells enter + 1 .. leave of its track, so a sum over a stay is C[leave] - C[enter]
with C the running sum along the track, and the mass at risk in a cell is the mass of the stays that
leave at or after it less the mass of those that enter at or after it.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from stresskit.kernels.blocks import stable_order

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Elements of a tile: three float64 matrices of this size stay in the cache of one core.
TILE = 1 << 15


#: Tracks are padded to the longest one and summed in one call when that makes at most this many times their cells.
PADDING = 4


def running(values: Floats, starts: Ints) -> Floats:
    """Cumulative sums along every track; values (cells,) or (cells, k), starts (tracks + 1,)."""
    out = np.empty_like(values)
    width = np.diff(starts)
    longest = int(width.max())
    if width.size * longest > PADDING * values.shape[0]:
        for a, b in zip(starts[:-1].tolist(), starts[1:].tolist(), strict=True):
            np.cumsum(values[a:b], axis=0, out=out[a:b])
        return out
    # Step by step for all tracks at once: the n-th cells of all tracks lie side by side.
    padded = np.zeros((longest, width.size, *values.shape[1:]))
    flat = padded.reshape(longest * width.size, *values.shape[1:])
    track = np.repeat(np.arange(width.size), width)
    at = (np.arange(values.shape[0]) - starts[track]) * width.size + track
    flat[at] = values
    for step in range(1, longest):
        np.add(padded[step - 1], padded[step], out=padded[step])
    return np.asarray(np.take(flat, at, axis=0, out=out, mode="clip"))


def remaining(values: Floats, starts: Ints) -> Floats:
    """Sums from each cell to the end of its track; shapes as in :func:`running`."""
    backwards = starts[-1] - starts[::-1]
    return running(values[::-1], backwards)[::-1]


@dataclass(frozen=True, slots=True, eq=False)
class Ends:
    """Where the stays of a block leave (+) and enter (-), as the pattern of a sparse matrix (size, stays).

    matrix  entries cell by cell, columns are stays; its data are written anew in every call
    sign    (entries,)

    Entries at a track's boundary cell are left out: no sum ever reads them.
    """

    matrix: sparse.csr_array
    sign: NDArray[np.int8]

    def spread(self, mass: Floats, columns: Floats) -> Floats:
        """(size, k) sum of mass * columns (stays, k) of those leaving less those entering, per cell.

        Not for several threads at a time: the pattern holds the masses while they are multiplied.
        """
        np.multiply(self.sign, mass[self.matrix.indices], out=self.matrix.data)
        return np.asarray(self.matrix @ columns)

    def add(self, columns: Floats) -> Floats:
        """(size, k) the same of the columns alone."""
        self.matrix.data[:] = self.sign
        return np.asarray(self.matrix @ columns)


def ends(enter: Ints, leave: Ints, boundary: NDArray[np.bool_]) -> Ends:
    """Pattern of stays whose cells are counted from the block's first cell; boundary (size,)."""
    n = enter.size
    cell = np.concatenate([leave, enter])
    sign = np.repeat(np.array([1, -1], dtype=np.int8), n)
    inner = np.flatnonzero(~boundary[cell])
    order = inner[stable_order((cell[inner], boundary.size))]
    indptr = np.zeros(boundary.size + 1, dtype=np.int32)
    indptr[1:] = np.cumsum(np.bincount(cell[inner], minlength=boundary.size))
    stay, sign = (order % n).astype(np.int32), sign[order]
    return Ends(sparse.csr_array((sign.astype(np.float64), stay, indptr), shape=(boundary.size, n)), sign)


@dataclass(frozen=True, slots=True, eq=False)
class Tile:
    """Stays ``rows`` by cells ``cells``; ``outside`` marks pairs not at risk, None when all are."""

    rows: slice
    cells: slice
    outside: NDArray[np.bool_] | None

    def outer(self, stay: Floats, cell: Floats) -> Floats:
        """stay x cell products, 0 where not at risk."""
        out: Floats = np.multiply.outer(stay[self.rows], cell[self.cells])
        if self.outside is not None:
            out[self.outside] = 0.0
        return out


def tiles(enter: Ints, leave: Ints, track: NDArray[Any]) -> Iterator[Tile]:
    """Cuts stays, sorted by track and then by the last cell, into tiles of about TILE elements."""
    n = enter.size
    edges = np.flatnonzero(np.concatenate(([True], track[1:] != track[:-1], [True])))
    for a, b in zip(edges[:-1].tolist(), edges[1:].tolist(), strict=True):
        at = a
        while at < b:
            low = int(enter[at:b].min())
            count = max(1, TILE // max(1, int(leave[at:b].max()) - low))
            upto = min(b, at + count)
            low, high = int(enter[at:upto].min()), int(leave[at:upto].max())
            if high > low:
                cell = np.arange(low + 1, high + 1)
                whole = bool((enter[at:upto] == low).all() and (leave[at:upto] == high).all())
                mask = None
                if not whole:
                    mask = (cell <= enter[at:upto, None]) | (cell > leave[at:upto, None])
                yield Tile(slice(at, upto), slice(low + 1, high + 1), mask)
            at = upto
    if n and edges[-1] != n:
        raise ValueError("tiles: stays are not covered")


#: Factors multiplied before one logarithm is taken; the product of so many above 1e-30 does not underflow.
FACTORS = 8


def log_of_products(q: Floats, *, small: bool) -> Floats:
    """(n,) sums over each row of log q for q in (0, 1], (n, c); ``small`` says that some q may be below 1e-30."""
    c = q.shape[1]
    full = c - c % FACTORS
    if full == 0 or small:
        return np.asarray(np.log(q).sum(axis=1))
    step = full // FACTORS
    product = q[:, :step].copy()
    for f in range(1, FACTORS):
        product *= q[:, f * step : (f + 1) * step]
    out: Floats = np.log(product).sum(axis=1) + np.log(q[:, full:]).sum(axis=1)
    return out
