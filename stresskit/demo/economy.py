"""The invented country's quarterly history, and the few transforms that the truth needs.

These transforms are written apart from the ``macro`` room on purpose: the demo's truth must not
inherit a mistake of the engine that is judged by it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import PchipInterpolator

from stresskit.core.period import Frequency, format_period, parse_period

Floats = NDArray[np.float64]

FIRST_QUARTER = "2006Q1"
LAST_QUARTER = "2025Q4"

#: Turning points: a downturn before the loan window, a deep recession in 2017-2019 inside it, a
#: house-price correction without job losses in 2020-2021, and a soft patch in 2023. The correction
#: keeps house prices and unemployment from moving as one, so that both effects can be estimated.
_TURNS: Mapping[str, tuple[tuple[str, float], ...]] = MappingProxyType(
    {
        "unemployment_rate": (
            ("2006Q1", 5.6), ("2007Q4", 4.9), ("2009Q3", 7.7), ("2012Q4", 5.6), ("2016Q2", 4.7),
            ("2017Q2", 4.6), ("2018Q4", 8.8), ("2019Q2", 9.2), ("2021Q2", 6.2), ("2022Q3", 5.3),
            ("2023Q3", 6.3), ("2024Q4", 5.3), ("2025Q4", 5.0),
        ),
        "house_price_index": (
            ("2006Q1", 100.0), ("2007Q3", 111.0), ("2009Q4", 98.0), ("2013Q4", 113.0), ("2016Q4", 140.0),
            ("2017Q2", 141.0), ("2018Q4", 116.0), ("2019Q2", 115.0), ("2020Q3", 129.0), ("2021Q3", 121.0),
            ("2023Q1", 137.0), ("2023Q4", 135.0), ("2025Q4", 150.0),
        ),
        "policy_rate": (
            ("2006Q1", 4.0), ("2007Q3", 4.75), ("2009Q2", 1.5), ("2011Q1", 1.25), ("2015Q1", 2.0),
            ("2017Q2", 3.5), ("2018Q3", 1.0), ("2019Q2", 0.5), ("2020Q4", 0.75), ("2022Q3", 3.0),
            ("2023Q2", 3.5), ("2024Q2", 3.25), ("2025Q1", 2.5), ("2025Q4", 2.5),
        ),
    }
)  # fmt: skip

#: Size of the quarterly wobble around the turning points (standard deviation), and what is published:
#: unemployment to a tenth, the index to a tenth, the policy rate in quarter points.
_WOBBLE_AND_STEP: Mapping[str, tuple[float, float]] = MappingProxyType(
    {"unemployment_rate": (0.10, 0.1), "house_price_index": (0.9, 0.1), "policy_rate": (0.0, 0.25)}
)


@dataclass(frozen=True, slots=True)
class Economy:
    """Quarterly history: ``values[variable]`` is (n,) float64 as published, row 0 is quarter ``start``."""

    start: int
    values: Mapping[str, Floats]

    def labels(self) -> list[str]:
        n = len(next(iter(self.values.values())))
        return [format_period(self.start + i, Frequency.QUARTER) for i in range(n)]


def invent_economy(rng: np.random.Generator) -> Economy:
    """The history: smooth between its turning points, wobbling around them, exact at both ends."""
    start = parse_period(FIRST_QUARTER, Frequency.QUARTER)
    end = parse_period(LAST_QUARTER, Frequency.QUARTER)
    quarters = np.arange(start, end + 1)
    # the wobble dies out towards the ends, so that scenarios join a known last value
    fade = np.minimum(1.0, np.minimum(quarters - start, end - quarters) / 4.0)
    values: dict[str, Floats] = {}
    for variable, turns in _TURNS.items():
        at = [parse_period(label, Frequency.QUARTER) for label, _ in turns]
        smooth = PchipInterpolator(at, [value for _, value in turns])(quarters)
        size, step = _WOBBLE_AND_STEP[variable]
        exact = smooth + fade * size * _wobble(rng, quarters.size)
        values[variable] = np.round(np.round(exact / step) * step, 2)
    return Economy(start, MappingProxyType(values))


def _wobble(rng: np.random.Generator, n: int) -> Floats:
    """Autoregression with coefficient 0.5 and unit standard deviation, (n,)."""
    shocks = rng.standard_normal(n)
    out = np.empty(n)
    out[0] = shocks[0]
    for i in range(1, n):
        out[i] = 0.5 * out[i - 1] + np.sqrt(0.75) * shocks[i]
    return out


def difference(series: Floats, over: int) -> Floats:
    """x[q] - x[q - over], NaN where history does not reach."""
    out = np.full(series.shape, np.nan)
    out[over:] = series[over:] - series[:-over]
    return out


def log_growth(series: Floats, over: int) -> Floats:
    """log x[q] - log x[q - over], NaN where history does not reach."""
    return difference(np.log(series), over)


def lagged(series: Floats, lag: int) -> Floats:
    """x[q - lag], NaN where history does not reach."""
    out = np.full(series.shape, np.nan)
    out[lag:] = series[: series.size - lag]
    return out


def place_linear(series: Floats, first_quarter: int, start: int, end: int) -> Floats:
    """Quarterly values on months ``start..end``: each stands at its quarter's last month, straight lines between."""
    months = np.arange(start, end + 1)
    before, thirds = np.divmod(months - 2, 3)
    row = before - first_quarter
    if row[0] < 0 or row[-1] + (thirds[-1] > 0) >= series.size:
        raise ValueError("months outside the quarterly history cannot be placed")
    after = np.minimum(row + 1, series.size - 1)
    share = thirds / 3.0
    # a month that ends its quarter takes that quarter alone: no NaN from the neighbour
    between = (1.0 - share) * series[row] + share * series[after]
    return np.asarray(np.where(thirds == 0, series[row], between), dtype=np.float64)
