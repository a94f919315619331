"""From what a table states to levels: plain arithmetic, row 0 is the first projected period.

Sums and products of published decimals are taken in decimal arithmetic and rounded once, so that 4.1 and
1.5 points make 5.6 and not 5.6000000000000005. Growth is compounded in binary floating point.
"""

from __future__ import annotations

from decimal import Decimal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def _decimal(value: float) -> Decimal:
    return Decimal(repr(float(value)))


def converted(values: Floats, table_unit: str, unit: str) -> Floats:
    """Levels in ``unit`` (percent or fraction) of values in ``table_unit``; NaN stays NaN. (n,)"""
    if table_unit == unit:
        return values
    factor = Decimal(100) if unit == "percent" else Decimal("0.01")
    return np.array([x if np.isnan(x) else float(_decimal(x) * factor) for x in values])


def grown(growth: Floats, form: str, past: Floats, per_year: int) -> Floats:
    """Levels after ``past`` that have this growth (fractions), (n,).

    per_period    x(t) = x(t-1) (1 + g)
    annualised    x(t) = x(t-1) (1 + g)^(1 / per_year)
    year_on_year  x(t) = x(t - per_year) (1 + g)

    past  levels up to the period before row 0, newest last: at least 1, for year_on_year per_year of them
    """
    back = per_year if form == "year_on_year" else 1
    power = 1.0 / per_year if form == "annualised" else 1.0
    levels = [float(x) for x in past[-back:]]
    for g in growth:
        levels.append(levels[-back] * (1.0 + float(g)) ** power)
    return np.array(levels[back:])


def deviated(base: Floats, amounts: Floats, kind: str) -> Floats:
    """``base`` plus points, or plus percent or fractions of itself. (n,)"""
    share = {"percent": Decimal("0.01"), "fraction": Decimal(1)}.get(kind)
    out = []
    for level, amount in zip(base, amounts, strict=True):
        b, a = _decimal(level), _decimal(amount)
        out.append(float(b + a if share is None else b + b * a * share))
    return np.array(out)


def spliced(levels: Floats, own: float, history: float) -> Floats:
    """The table's levels on the base of history: history's value times the table's growth since as_of. (n,)"""
    return history * (levels / own)


def spread(years: Floats, rule: str, past: float, per_year: int) -> Floats:
    """Annual values on quarters or months, (n * per_year,).

    step    every period has its year's value
    linear  the year's value is that of its last period; equal steps from the year before (``past`` before the first)
    growth  the same at constant growth within the year
    """
    if rule == "step":
        return np.repeat(years, per_year)
    out = []
    before = past
    for year in years:
        for i in range(1, per_year):
            share = i / per_year
            out.append(
                before + (year - before) * share if rule == "linear" else before * (year / before) ** share
            )
        out.append(float(year))
        before = float(year)
    return np.array(out)
