"""Shapes of shocks and of what comes afterwards: plain arithmetic on arrays, row 0 is the path's first period."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def continued(values: Floats, n: int, tail: float | None) -> Floats:
    """``values`` cut or continued to ``n`` rows: by the last value, or by ``tail``. Shape (n,)."""
    out = np.full(n, values[-1] if tail is None else tail)
    kept = min(n, values.shape[0])
    out[:kept] = values[:kept]
    return out


def added(values: Floats, change: Floats) -> Floats:
    """``values`` plus ``change``, the same bits where the change is zero (-0.0 + 0.0 would be 0.0)."""
    out: Floats = np.where(change == 0.0, values, values + change)
    return out


def there_and_back(n: int, at: int, back_by: int | None) -> Floats:
    """Share of a peak change, (n,): 0 in the period before row 0, straight up to 1 in row ``at``, straight
    back to 0 in row ``back_by`` (None: stays at 1), 0 from there on.
    """
    rows = np.arange(n, dtype=np.float64)
    up = (rows + 1.0) / (at + 1.0)
    if back_by is None:
        return np.minimum(up, 1.0)
    down = (back_by - rows) / (back_by - at)
    out: Floats = np.where(rows <= at, up, np.maximum(down, 0.0))
    return out


def reverting(start: float, target: float, over: int, n: int) -> Floats:
    """The ``n`` values after ``start`` that go straight to ``target`` in ``over`` steps and stay there. (n,)

    The target is reached exactly, not up to rounding.
    """
    step = np.arange(1, n + 1, dtype=np.float64)
    out: Floats = np.where(step >= over, target, start + (target - start) * (step / over))
    return out
