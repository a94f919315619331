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

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
Places = NDArray[np.int32]


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


@compiled
def _ordered(order: Places, key: NDArray[np.integer[Any]], keys: int) -> Places:
    """Stable order by ``key`` (n,), 0 <= key < keys, of what is in ``order`` already: counted, then put in place."""
    place = np.zeros(keys + 1, dtype=np.int64)
    for i in range(key.size):
        place[key[i] + 1] += 1
    for k in range(keys):
        place[k + 1] += place[k]
    out = np.empty_like(order)
    for i in order:
        k = key[i]
        out[place[k]] = i
        place[k] += 1
    return out


@compiled
def laid_out(
    track: Ints, tracks: int, entry: Ints, exit_: Ints, event: Flags, survived: bool
) -> tuple[Ints, Ints, Ints, Ints, Ints, Ints, Ints]:
    """Stays (m,) in the order of (track, last age, entry), and the cells of their tracks.

    survived  the last age is the last one without event
    Returns order, track, enter, last and leave of the stays in that order, low (tracks,) the age of each track's first cell, and
    starts (tracks + 1,).
    """
    n, ages, stays = entry.size, 0, np.zeros(tracks, dtype=np.int64)
    low, high = np.full(tracks, np.iinfo(np.int64).max), np.zeros(tracks, dtype=np.int64)
    for i in range(n):
        t = track[i]
        low[t], high[t] = min(low[t], entry[i]), max(high[t], exit_[i])
        ages = max(ages, entry[i] + 1)
        stays[t] += 1
    starts = np.zeros(tracks + 1, dtype=np.int64)
    for t in range(tracks):
        starts[t + 1] = starts[t] + high[t] - low[t] + 1
    # Cells ascend by track and age, so that the cell of the last age stands for both.
    order, last = np.empty(n, dtype=np.int32), np.empty(n, dtype=np.int32)
    for i in range(n):
        order[i], last[i] = i, starts[track[i]] - low[track[i]] + exit_[i] - (survived & event[i])
    order = _ordered(_ordered(order, entry, ages), last, starts[tracks])
    out, begin = np.empty((5, n), dtype=np.int64), 0
    for t in range(tracks):
        first, end = starts[t] - low[t], begin + stays[t]
        for k in range(begin, end):
            i = order[k]
            out[0, k], out[1, k], out[2, k], out[3, k] = i, t, first + entry[i], last[i]
            out[4, k] = last[i] + (survived & event[i])
        begin = end
    return out[0], out[1], out[2], out[3], out[4], low, starts
