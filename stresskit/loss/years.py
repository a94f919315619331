"""Calendar years of a projection: where they end."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency

Ints = NDArray[np.int64]


def year_edges(as_of: int, frequency: Frequency, horizon: int) -> Ints:
    """(Y,) last step of each calendar year that holds a step 1 .. ``horizon``; the last one may lie past it."""
    k = frequency.per_year
    first = k - (as_of + 1) % k
    return np.arange(first, max(horizon, 1) + k, k, dtype=np.int64)[: 1 + max(0, -(-(horizon - first) // k))]
