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


def halving(start: float, target: float, half_life: float, n: int) -> Floats:
    """The ``n`` values after ``start`` whose distance to ``target`` halves every ``half_life`` steps. (n,)"""
    step = np.arange(1, n + 1, dtype=np.float64)
    out: Floats = target + (start - target) * 0.5 ** (step / half_life)
    return out


def there_and_halving(n: int, at: int, half_life: float) -> Floats:
    """Share of a peak change, (n,): straight up to 1 in row ``at``, then half every ``half_life`` rows."""
    rows = np.arange(n, dtype=np.float64)
    after = 0.5 ** (np.maximum(rows - at, 0.0) / half_life)
    out: Floats = np.where(rows <= at, (rows + 1.0) / (at + 1.0), after)
    return out


def grown(rates: Floats, kind: str, before: Floats, n: int) -> Floats:
    """Levels that grow by ``rates`` (fractions) after the values of the year ``before``, then stay. Shape (n,).

    kind    per_period | annualised (over a period, as if for a year) | year_on_year
    before  (periods per year,) newest last; only the newest counts but for year_on_year
    """
    per_year, kept = before.size, min(n, rates.size)
    factors = 1.0 + rates[:kept]
    if kind == "year_on_year":
        known = list(before)
        for factor in factors:
            known.append(known[-per_year] * factor)
        levels = np.array(known[per_year:])
    else:
        if kind == "annualised":
            factors = factors ** (1.0 / per_year)
        levels = before[-1] * np.cumprod(factors)
    return continued(levels, n, None)


def growing_on(start: float, yearly: float, per_year: int, n: int) -> Floats:
    """The ``n`` values after ``start`` at a growth of ``yearly`` (fraction) per year. (n,)"""
    step = np.arange(1, n + 1, dtype=np.float64)
    out: Floats = start * (1.0 + yearly) ** (step / per_year)
    return out
