"""Columns of loans as rows of stays: eight columns of a stay lie side by side."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Columns written in one pass over the stays.
AT_ONCE = 8


@compiled
def put(columns: tuple[Floats, ...], used: int, at: Ints, out: Floats, first: int, stop: int) -> None:
    """Writes to the columns first .. stop - 1 of out (m, w) the first ``used`` of AT_ONCE columns (n,) at ``at`` (m,), and
    zeros beyond them; to column 0 ones."""
    for i in range(at.size):
        k = at[i]
        out[i, 0] = 1.0
        for j in range(used):
            out[i, first + j] = columns[j][k]
        for j in range(first + used, stop):
            out[i, j] = 0.0
