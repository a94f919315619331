"""Features the slow way: one model period at a time, by recursion over labelled periods.

Nothing here is shared with the engine: periods are (year, part) pairs, values lie in a dictionary,
and a missing value is None.
"""

from __future__ import annotations

import math

Key = tuple[int, int]


def back(key: Key, steps: int, per_year: int) -> Key:
    year, part = key
    for _ in range(steps):
        part -= 1
        if part == 0:
            year, part = year - 1, per_year
    return year, part


def transformed(data: dict[Key, float], key: Key, transform: str, over: int, per_year: int) -> float | None:
    def at(steps: int) -> float | None:
        value = data.get(back(key, steps, per_year))
        return None if value is None or math.isnan(value) else value

    if transform == "moving_average":
        values = [at(s) for s in range(over)]
        return None if any(v is None for v in values) else math.fsum(values) / over  # type: ignore[arg-type]
    if transform == "level":
        return at(0)
    new, old = at(0), at(per_year if transform == "year_on_year" else over)
    if new is None or old is None:
        return None
    if transform == "difference":
        return new - old
    if transform == "log_growth":
        return math.log(new) - math.log(old)
    return (new - old) / old


def month_feature(
    data: dict[Key, float], month: Key, transform: str, over: int, lag: int, *, quarterly: bool, linear: bool
) -> float | None:
    """The feature in a month, from monthly data or from quarterly data placed on months."""
    if not quarterly:
        return transformed(data, back(month, lag, 12), transform, over, 12)
    year, number = month
    quarter = (year, (number + 2) // 3)
    place_in_quarter = number - 3 * (quarter[1] - 1)
    here = transformed(data, back(quarter, lag, 4), transform, over, 4)
    if not linear or place_in_quarter == 3:
        return here
    before = transformed(data, back(quarter, lag + 1, 4), transform, over, 4)
    if here is None or before is None:
        return None
    return (before * (3 - place_in_quarter) + here * place_in_quarter) / 3
