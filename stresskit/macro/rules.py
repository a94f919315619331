"""What a study's macro section must say for a given macro calendar, and which values its features accept."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import Frequency
from stresskit.spec.study import Feature, Macro

#: Transforms that divide by a past value and so need values above zero.
GROWTH = ("growth", "log_growth", "year_on_year")


def used_by(macro: Macro) -> Mapping[str, tuple[str, ...]]:
    """Variable -> names of the features that use it; only variables that one uses."""
    users: dict[str, tuple[str, ...]] = {}
    for name, feature in macro.features.items():
        for variable in feature.variables:
            users[variable] = (*users.get(variable, ()), name)
    return users


def growth_users(macro: Macro, variable: str) -> tuple[str, ...]:
    """Features that take a growth rate of ``variable``."""
    return tuple(n for n, f in macro.features.items() if variable in f.variables and f.transform in GROWTH)


def check_calendars(macro: Macro, *, model: Frequency, frequency: Frequency) -> None:
    """Refuse calendars that do not meet: monthly macro in a quarterly model, quarters on months by no rule.

    Raises DataError (the table must change) or TextError (the study must say more).
    """
    if model is Frequency.QUARTER and frequency is Frequency.MONTH:
        raise DataError(
            "the macro table is monthly and the study is quarterly: how months become a quarter (last, "
            "mean, sum) cannot be declared yet, and stresskit does not choose silently. Supply a quarterly "
            "table, or set frequency: month"
        )
    if model is Frequency.MONTH and frequency is Frequency.QUARTER:
        bare = [v for v in used_by(macro) if macro.variables[v].place is None]
        if bare:
            raise TextError(
                f"macro.variables: {', '.join(bare)} {'is' if len(bare) == 1 else 'are'} quarterly in a "
                "monthly study; say how quarters become months: place: linear (straight lines between the "
                "quarters' last months) or place: step (every month takes its quarter's value)"
            )


def check_features(macro: Macro, *, frequency: Frequency) -> None:
    """Refuse a span that its transform would not use. Raises TextError."""
    for name, feature in macro.features.items():
        if feature.transform == "level" and feature.over != 1:
            raise TextError(
                f"macro.features.{name}: transform {feature.transform} takes one value and has no use for "
                f"over: {feature.over}; leave over out, or choose difference, growth, log_growth or "
                "moving_average"
            )
        if feature.transform == "year_on_year" and feature.over not in (1, frequency.per_year):
            raise TextError(
                f"macro.features.{name}: year_on_year spans one year, {frequency.per_year} periods of this "
                f"table, not over: {feature.over}; leave over out, or choose growth"
            )


def span(feature: Feature, frequency: Frequency) -> int:
    """Macro periods between the oldest and the newest value that the transform reads."""
    if feature.transform == "level":
        return 0
    if feature.transform == "year_on_year":
        return frequency.per_year
    return feature.over - 1 if feature.transform == "moving_average" else feature.over


def offsets(feature: Feature, frequency: Frequency) -> tuple[int, ...]:
    """How many macro periods back the transform reads, newest first, before any lag."""
    reach = span(feature, frequency)
    if feature.transform == "moving_average":
        return tuple(range(reach + 1))
    return (0,) if reach == 0 else (0, reach)


def not_positive(values: NDArray[np.float64]) -> NDArray[np.int64]:
    """Rows whose value is zero or below (blanks do not count)."""
    return np.flatnonzero(values <= 0).astype(np.int64)
