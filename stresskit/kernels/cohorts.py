"""Running sums along cohorts: what stays take from cells, and what cells take from stays, without rows.

Cells lie track after track, ages ascending; a track is one cohort (of one group of loans). The first
cell of a track is a boundary: nothing happens in it, it stands for "before the first age at risk".
A stay covers the cells enter + 1 .. last of its track, so a sum over a stay is C[last] - C[enter]
with C the running sum along the track, and the mass at risk in a cell is the mass of the stays that
leave at or after it less the mass of those that enter at or after it.

Conventions: n stays, ``enter`` and ``last`` (n,) int64 cells, counted from ``base``; q columns; arrays are
C-contiguous float64; ``starts`` (tracks + 1,) first cells of the tracks, counted from 0.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@compiled
def at_risk(leaving: Floats, starts: Ints) -> None:
    """In place: masses that leave less those that enter (cells, q) become the mass at risk; 0 in boundary cells."""
    q = leaving.shape[1]
    for t in range(starts.size - 1):
        for c in range(starts[t + 1] - 2, starts[t], -1):
            for j in range(q):
                leaving[c, j] += leaving[c + 1, j]
        for j in range(q):
            leaving[starts[t], j] = 0.0


@compiled
def by_label(label: Ints, values: Floats, size: int) -> Floats:
    """(size, q) sums of the rows of ``values`` (n, q) of each label, added in the order given."""
    out = np.zeros((size, values.shape[1]))
    q = values.shape[1]
    for i in range(label.size):
        g = label[i]
        for j in range(q):
            out[g, j] += values[i, j]
    return out
