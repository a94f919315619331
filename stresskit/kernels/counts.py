"""What is at risk by age and by calendar period, from stays, in one pass."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.compiled import compiled

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]


@compiled
def at_risk_and_events(
    shift: Ints, entry: Ints, exit_: Ints, event: Flags, weight: Floats, sizes: tuple[int, int]
) -> tuple[Floats, Floats, Floats, Floats]:
    """(at risk by age, events by age, at risk by period, events by period) of stays over ages entry + 1 .. exit.

    shift (m,) of each stay from ages to periods;  sizes = (ages, periods), indices below them
    """
    ages, periods = sizes
    by_age, by_period = np.zeros(ages + 1), np.zeros(periods + 1)
    age_out, period_out = np.zeros(ages + 1), np.zeros(periods + 1)
    age_events, period_events = np.zeros(ages), np.zeros(periods)
    for i in range(weight.size):
        w, a, b = weight[i], entry[i] + 1, exit_[i]
        by_age[a] += w
        age_out[b + 1] += w
        by_period[shift[i] + a] += w
        period_out[shift[i] + b + 1] += w
        if event[i]:
            age_events[b] += w
            period_events[shift[i] + b] += w
    return (
        np.cumsum(by_age - age_out)[:ages], age_events,
        np.cumsum(by_period - period_out)[:periods], period_events,
    )  # fmt: skip
