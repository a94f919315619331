"""How the macro calendar and the model calendar meet."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, convert

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


def infer_frequency(months: Sequence[int]) -> Frequency | None:
    """Frequency of rows that are dated by month, from the spacing of the dates.

    months  distinct month ordinals, ascending

    Neighbours one month apart make a monthly calendar, three months (with holes of whole quarters)
    a quarterly one; None when the spacing is neither or a single row shows no spacing.
    """
    steps = [later - earlier for earlier, later in pairwise(months)]
    if not steps:
        return None
    if min(steps) == 1:
        return Frequency.MONTH
    if min(steps) == 3 and all(step % 3 == 0 for step in steps):
        return Frequency.QUARTER
    return None


def first_after(as_of: int, *, model: Frequency, macro: Frequency) -> int:
    """Ordinal of the first macro period that ends after model period ``as_of``: where a scenario starts.

    A quarter that is still running at ``as_of`` has not been observed yet, so it is this one.
    """
    return int(convert(as_of + 1, model, macro))


def last_needed(as_of: int, horizon: int, *, model: Frequency, macro: Frequency) -> int:
    """Ordinal of the macro period that holds model period ``as_of + horizon``."""
    return int(convert(as_of + horizon, model, macro))


def positions(periods: Ints, *, model: Frequency, macro: Frequency, place: str) -> tuple[Ints, Floats]:
    """Where model periods lie on the macro calendar: containing macro period, and weight on it, each (P,).

    The value in a model period is ``weight * x[q] + (1 - weight) * x[q - 1]``. Under ``linear`` a
    quarter's value stands at the quarter's last month, so its months weigh 1/3, 2/3 and 1; under
    ``step``, and where the calendars are the same, the weight is 1.
    """
    q = np.asarray(convert(periods, model, macro), dtype=np.int64)
    if model is macro or place != "linear":
        return q, np.ones(q.shape)
    return q, (periods % 3 + 1) / 3.0
