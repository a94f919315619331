"""What is at risk by age, by calendar period and by loan, from stays, in one pass."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
Codes = NDArray[np.int32]


@compiled
def ends(origin: Ints, entry: Ints, exit_: Ints) -> tuple[int, int, int, int, int]:
    """(first period, last period, largest age, smallest number of rows, all rows) of stays over ages entry + 1 .. exit."""
    none = np.iinfo(np.int64)
    first, last, oldest, fewest, rows = none.max, none.min, none.min, none.max, 0
    for i in range(origin.size):
        first, last = min(first, origin[i] + entry[i] + 1), max(last, origin[i] + exit_[i])
        oldest, fewest = max(oldest, exit_[i]), min(fewest, exit_[i] - entry[i])
        rows += exit_[i] - entry[i]
    return first, last, oldest, fewest, rows


@compiled
def at_risk_and_events(
    loan: Ints,
    origin: Ints,
    entry: Ints,
    exit_: Ints,
    event: Flags,
    weight: Floats,
    sizes: tuple[int, int, int, int],
) -> tuple[Floats, Floats, Floats, Floats, Floats, Floats]:
    """(at risk, events) by age, by period and by loan, of stays over ages entry + 1 .. exit.

    sizes = (first period, periods, ages, loans)
    """
    first, periods, ages, loans = sizes
    by_age, by_period = np.zeros(ages + 1), np.zeros(periods + 1)
    age_out, period_out = np.zeros(ages + 1), np.zeros(periods + 1)
    age_events, period_events = np.zeros(ages), np.zeros(periods)
    by_loan, loan_events = np.zeros(loans), np.zeros(loans)
    for i in range(weight.size):
        w, a, b, shift = weight[i], entry[i] + 1, exit_[i], origin[i] - first
        by_age[a] += w
        age_out[b + 1] += w
        by_period[shift + a] += w
        period_out[shift + b + 1] += w
        by_loan[loan[i]] += w * (b + 1 - a)
        if event[i]:
            age_events[b] += w
            period_events[shift + b] += w
            loan_events[loan[i]] += w
    return (
        np.cumsum(by_age - age_out)[:ages], age_events,
        np.cumsum(by_period - period_out)[:periods], period_events,
        by_loan, loan_events,
    )  # fmt: skip


@compiled
def by_level(level: Codes, weight: Floats, size: int) -> Floats:
    """(size,) sum of ``weight`` (n,) over the cases of each level, added in the order given."""
    out = np.zeros(size)
    for i in range(level.size):
        out[level[i]] += weight[i]
    return out
