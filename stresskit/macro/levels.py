"""A macro variable itself on model periods, over history and path."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.macro.calendar import positions
from stresskit.macro.features import joined, placed

Floats = NDArray[np.float64]


def levels(
    history: MacroHistory,
    variable: str,
    *,
    model: Frequency,
    start: int,
    end: int,
    path: ScenarioPath | None = None,
) -> Floats:
    """(P,) values of ``variable`` in model periods ``start .. end`` (ordinals, both included), by its ``place`` rule.

    With a path, history counts only up to the period before the path starts. NaN before the variable's
    first value. Raises DataError when history, or the path, ends before ``end``, or lacks the variable.
    """
    return flagged_levels(history, variable, model=model, start=start, end=end, path=path)[0]


def flagged_levels(
    history: MacroHistory,
    variable: str,
    *,
    model: Frequency,
    start: int,
    end: int,
    path: ScenarioPath | None = None,
) -> tuple[Floats, NDArray[np.int64]]:
    """As :func:`levels`, and (P,) the worst flag among the path values that each is made of (0 on history)."""
    series = joined(history, path, variable)
    periods = np.arange(start, end + 1, dtype=np.int64)
    if periods.size == 0:
        return np.empty(0), np.empty(0, dtype=np.int64)
    q, weight = positions(
        periods, model=model, macro=history.frequency, place=history.place.get(variable, "step")
    )
    if int(q.max()) > series.end:
        what = "macro history" if path is None else f"scenario {path.name!r}"
        raise DataError(
            f"{what} ends in {format_period(series.end, history.frequency)}, but {variable!r} is needed up to "
            f"{format_period(end, model)}; supply later values"
        )
    return placed(series, q, weight)


def first_level(history: MacroHistory, model: Frequency) -> int:
    """Ordinal of the first model period that history can say anything about."""
    return history.start if model is history.frequency else 3 * history.start
