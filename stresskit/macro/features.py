"""Macro features on model periods: transform, lag, placement, in this order.

A feature is computed on the macro calendar, over history and (in a projection) the scenario's path
joined to it, then lagged by whole macro periods, then placed on model periods. So a quarterly
change in a monthly study is the quarter's change, wherever in the quarter it is read.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import FeatureDefinition, FeatureTable, KeyedFeature, MacroHistory, ScenarioPath
from stresskit.macro.alignment import alignment_sample
from stresskit.macro.calendar import positions
from stresskit.macro.rules import GROWTH, check_calendars, check_features, not_positive, offsets
from stresskit.spec.study import Feature, Macro

__all__ = ["Series", "alignment_sample", "build_features", "joined", "placed", "transformed"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Series:
    """One variable or feature on the macro calendar.

    start   ordinal of row 0
    values  (n,) float64, NaN only at the head
    flags   (n,) int64, 0 on history
    """

    start: int
    values: Floats
    flags: Ints

    @property
    def end(self) -> int:
        return self.start + int(self.values.shape[0]) - 1


def build_features(
    macro: Macro,
    history: MacroHistory,
    *,
    model: Frequency,
    start: int,
    end: int,
    path: ScenarioPath | None = None,
) -> FeatureTable:
    """Every feature of ``macro`` on model periods ``start .. end`` (ordinals, both included).

    A feature that goes by a loan column has a column for each level.

    With a path, history counts only up to the period before the path starts, whatever it holds
    beyond. Values are NaN where history does not reach back far enough, nowhere else; flags carry
    the worst flag among the path values that a value was computed from.

    Raises DataError when history and path end before the periods asked for, leave a hole between
    them, lack a variable, hold values that a growth rate cannot take, or when a period of the
    path has no value because history is too short for its lags; TextError as in read_history.
    """
    check_calendars(macro, model=model, frequency=history.frequency)
    check_features(macro, frequency=history.frequency)
    periods = np.arange(start, end + 1, dtype=np.int64)
    columns = macro.columns()
    values = np.empty((periods.size, len(columns)))
    flags = np.zeros(values.shape, dtype=np.int64)
    made = {n: _definition(f, history, model=model) for n, f in columns.items()}
    keyed = {n: KeyedFeature(by, tuple(sorted(macro.features[n].of))) for n, by in macro.keys().items()}
    if values.size == 0:
        return FeatureTable(model, start, tuple(columns), values, flags, made, keyed)
    for k, (name, feature) in enumerate(columns.items()):
        variable = feature.variable
        series = transformed(joined(history, path, variable), feature, history.frequency, name=name)
        q, weight = positions(
            periods, model=model, macro=history.frequency, place=history.place.get(variable, "step")
        )
        _demand_reach(q, series, feature, name=name, frequency=history.frequency, path=path)
        values[:, k], flags[:, k] = placed(series, q - feature.lag, weight)
        if path is not None:
            _demand_values(values[:, k], q >= path.start, periods, name=name, model=model, scenario=path.name)
    return FeatureTable(model, start, tuple(columns), values, flags, made, keyed)


def _definition(feature: Feature, history: MacroHistory, *, model: Frequency) -> FeatureDefinition:
    """The feature as it is made here; what two texts may say differently to the same effect is told in one way."""
    yearly = feature.transform == "year_on_year"
    return FeatureDefinition(
        of=feature.variable,
        transform=feature.transform,
        over=history.frequency.per_year if yearly else feature.over,
        lag=feature.lag,
        unit=history.units.get(feature.variable, ""),
        place="step" if model is history.frequency else history.place.get(feature.variable, "step"),
        macro_frequency=history.frequency.value,
    )


def joined(history: MacroHistory, path: ScenarioPath | None, variable: str) -> Series:
    """History up to the path, then the path."""
    observed = history.values.get(variable)
    if observed is None:
        there = ", ".join(history.values) or "none"
        raise DataError(f"macro history has no variable {variable!r}; it has {there}")
    if path is None:
        return Series(history.start, observed, np.zeros(observed.shape, dtype=np.int64))
    if path.frequency is not history.frequency:
        raise DataError(
            f"scenario {path.name!r} is on a {path.frequency.value} calendar, "
            f"macro history on a {history.frequency.value} calendar"
        )
    kept = path.start - history.start
    if not 0 < kept <= history.n_periods:
        first, begins, ends = (
            format_period(p, history.frequency) for p in (path.start, history.start, history.end)
        )
        raise DataError(
            f"scenario {path.name!r} starts in {first}, macro history runs from {begins} to {ends}: "
            "the period before the scenario's first must be in history"
        )
    if variable not in path.values:
        there = ", ".join(path.values) or "none"
        raise DataError(f"scenario {path.name!r} has no path of {variable!r}; it has {there}")
    values = np.concatenate([observed[:kept], path.values[variable]])
    flags = np.concatenate([np.zeros(kept, dtype=np.int64), path.flags[variable]])
    return Series(history.start, values, flags)


def transformed(series: Series, feature: Feature, frequency: Frequency, *, name: str) -> Series:
    """The feature's transform on the macro calendar, before lag and placement.

    Raises DataError for growth rates of values at or below zero and for results beyond float64.
    """
    x, n = series.values, series.values.shape[0]
    if feature.transform in GROWTH and (bad := not_positive(x)).size:
        first = ", ".join(f"{format_period(series.start + int(i), frequency)}: {x[i]:g}" for i in bad[:5])
        raise DataError(
            f"macro feature {name!r} takes growth of {feature.variable!r}, which is at or below zero "
            f"in {bad.size} periods (first {first}); use transform: difference"
        )
    back = offsets(feature, frequency)
    values = np.full(n, np.nan)
    flags = np.zeros(n, dtype=np.int64)
    reach = back[-1]
    if reach < n:
        # row r of the window holds x[t - back[r]] for every t >= reach
        window = np.stack([x[reach - b : n - b] for b in back])
        with np.errstate(over="ignore", invalid="ignore"):
            values[reach:] = _combined(window, feature)
        flags[reach:] = np.stack([series.flags[reach - b : n - b] for b in back]).max(axis=0)
        lost = np.flatnonzero(~np.isfinite(values[reach:]) & np.isfinite(window).all(axis=0))
        if lost.size:
            label = format_period(series.start + reach + int(lost[0]), frequency)
            raise DataError(
                f"macro feature {name!r} of {feature.variable!r} is too large to compute in {label}"
            )
    return Series(series.start, values, flags)


def _combined(window: Floats, feature: Feature) -> Floats:
    newest, oldest = window[0], window[-1]
    out: Floats
    if feature.transform == "level":
        out = newest
    elif feature.transform == "difference":
        out = newest - oldest
    elif feature.transform == "log_growth":
        out = np.log(newest / oldest)
    elif feature.transform == "moving_average":
        out = window.mean(axis=0)
    else:
        out = newest / oldest - 1.0
    return out


def placed(series: Series, q: Ints, weight: Floats) -> tuple[Floats, Ints]:
    """Values and flags at macro periods ``q``, interpolated towards the period before where weight < 1."""
    current, current_flag = _taken(series, q)
    before, before_flag = _taken(series, q - 1)
    between = weight < 1.0
    # where a value stands alone, a NaN before it must not touch it
    values = np.where(between, before + weight * (current - before), current)
    flags = np.where(between, np.maximum(before_flag, current_flag), current_flag)
    return values, flags.astype(np.int64)


def _taken(series: Series, q: Ints) -> tuple[Floats, Ints]:
    i = q - series.start
    inside = (i >= 0) & (i < series.values.shape[0])
    safe = np.where(inside, i, 0)
    return np.where(inside, series.values[safe], np.nan), np.where(inside, series.flags[safe], 0)


def _demand_reach(
    q: Ints, series: Series, feature: Feature, *, name: str, frequency: Frequency, path: ScenarioPath | None
) -> None:
    needed = int(q.max()) - feature.lag
    if needed > series.end:
        what = "macro history" if path is None else f"scenario {path.name!r}"
        raise DataError(
            f"{what} ends in {format_period(series.end, frequency)}, but feature {name!r} "
            f"(lag {feature.lag}) needs {feature.variable!r} up to {format_period(needed, frequency)}; "
            "supply later values, or use a longer lag"
        )


def _demand_values(
    values: Floats, on_path: NDArray[np.bool_], periods: Ints, *, name: str, model: Frequency, scenario: str
) -> None:
    lacking = periods[on_path & np.isnan(values)]
    if lacking.size:
        raise DataError(
            f"feature {name!r} has no value in {lacking.size} periods of scenario {scenario!r} "
            f"(first {format_period(int(lacking[0]), model)}): macro history begins too late for "
            "its lag and span; supply earlier values"
        )
