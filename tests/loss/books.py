"""Small books for the tests of staging, capital and years."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio


def book(
    n: int, *, balance: float | Sequence[float] = 1000.0, as_of: int = 24_311, **static: Sequence[Any]
) -> Portfolio:
    """n monthly loans of age 12 with 60 months to go."""
    columns = {
        name: np.array(v, dtype=object) if isinstance(v[0], str) else np.array(v, dtype=float)
        for name, v in static.items()
    }
    return Portfolio(
        Frequency.MONTH, as_of, np.array([f"L{i}" for i in range(n)], dtype=object), np.full(n, 12), np.full(n, 60),
        np.broadcast_to(np.asarray(balance, dtype=float), (n,)), np.full(n, 0.05), columns,
    )  # fmt: skip
