"""The rows that all specifications share, and the windows on which they are scored.

Specifications are compared by likelihood, so all of them must see the same rows: those of periods in
which every feature of the search is known.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.kernels.blocks import stay_rows
from stresskit.spec.load import Loaded
from stresskit.spec.search import SearchSpec

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def cut(risk_set: RiskSet, first: int, last: int) -> RiskSet:
    """The rows of periods ``first .. last`` (ordinals, both included); an exit after ``last`` is not seen.

    Loans without a row in these periods are not in the result.
    """
    entry = np.maximum(risk_set.stay_entry, first - 1 - risk_set.stay_origin)
    exit_ = np.minimum(risk_set.stay_exit, last - risk_set.stay_origin)
    at = np.flatnonzero(exit_ > entry)
    seen = exit_[at] == risk_set.stay_exit[at]
    loans, stay_loan = np.unique(risk_set.stay_loan[at], return_inverse=True)
    moving = {}
    if risk_set.moving:
        length = risk_set.stay_exit - risk_set.stay_entry
        begins = np.cumsum(length) - length + entry - risk_set.stay_entry
        rows = _runs(begins[at], (exit_ - entry)[at])
        moving = {name: column[rows] for name, column in risk_set.moving.items()}
    return RiskSet(
        frequency=risk_set.frequency,
        causes=risk_set.causes,
        loan_ids=risk_set.loan_ids[loans],
        static={name: column[loans] for name, column in risk_set.static.items()},
        stay_loan=stay_loan.astype(np.int64),
        stay_origin=risk_set.stay_origin[at],
        stay_entry=entry[at],
        stay_exit=exit_[at],
        stay_cause=np.where(seen, risk_set.stay_cause[at], 0),
        weight=risk_set.weight[at],
        moving=moving,
        count=risk_set.count,
    )


def _runs(begins: Ints, lengths: Ints) -> Ints:
    """begins[0], begins[0] + 1, ... for lengths[0] values, then those of the next run."""
    before = np.cumsum(lengths) - lengths
    out: Ints = np.arange(int(lengths.sum()), dtype=np.int64) + np.repeat(begins - before, lengths)
    return out


@dataclass(frozen=True, slots=True, eq=False)
class Window:
    """A refit's rows and the rows it is scored on.

    cutoff  last period of the refit
    length  periods scored: cutoff + 1 .. cutoff + length
    train   rows up to the cut-off
    frame   a row per row at risk after it: loan columns and ``age``, as HazardFit.predict takes them
    period  (r,) ordinal of each row
    event   (r,) bool
    weight  (r,)
    """

    cutoff: int
    length: int
    train: RiskSet
    frame: pd.DataFrame
    period: Ints
    event: NDArray[np.bool_]
    weight: Floats

    @property
    def rows(self) -> float:
        return float(self.weight.sum())

    @property
    def events(self) -> float:
        return float(self.weight[self.event].sum())


@dataclass(frozen=True, slots=True, eq=False)
class Sample:
    """What every specification is fitted to and scored on.

    first, last   periods at risk that are used
    risk_set      rows of these periods
    rows          those of the cause
    rows_before   rows of the cause in the study's risk set, to show how many the common sample leaves out
    binding       features that are known last, which is why the sample starts at ``first``
    """

    frequency: Frequency
    first: int
    last: int
    risk_set: RiskSet
    rows: CauseRows
    rows_before: float
    events_before: float
    binding: tuple[str, ...]
    windows: tuple[Window, ...]


def common_sample(
    loaded: Loaded[SearchSpec], risk_set: RiskSet, features: FeatureTable, columns: Sequence[str]
) -> Sample:
    """Rows with every feature known, and the windows.

    columns  loan columns that predictions on the windows need

    Raises DataError when no row is left, TextError for windows that do not fit.
    """
    cause, frequency = loaded.model.cause, risk_set.frequency
    before = cause_rows(risk_set, cause)
    opens, last = before.first_period, int((before.origin + before.exit).max())
    begin = _known_from(features)
    first = max(opens, int(begin.max(initial=features.start)))
    latest = tuple(n for n, b in zip(features.names, begin, strict=True) if b == first > opens)
    if first > last:
        raise DataError(
            f"search {loaded.model.search!r}: no period at risk has a value of every feature; the last ones known "
            f"are {', '.join(latest[:5])}. Give the macro history an earlier start, or use shorter lags and spans."
        )
    common = cut(risk_set, first, last)
    rows = cause_rows(common, cause)
    made = cutoffs(loaded, first, last, frequency, binding=latest)
    windows = tuple(_window(loaded, common, c, first, columns) for c in made)
    return Sample(
        frequency, first, last, common, rows, before.total_weight, before.event_weight, latest, windows
    )


def _known_from(features: FeatureTable) -> Ints:
    """First period of each feature from which on it is known (features are blank only before)."""
    blank = ~np.isfinite(features.values)
    back = blank[::-1].argmax(axis=0)
    known = np.where(blank.any(axis=0), features.n_periods - back, 0)
    out: Ints = (features.start + known).astype(np.int64)
    return out


def cutoffs(
    loaded: Loaded[SearchSpec], first: int, last: int, frequency: Frequency, *, binding: Sequence[str] = ()
) -> tuple[int, ...]:
    """Last periods of the refits, rising. Raises TextError when a window does not fit between first and last.

    binding  features because of which there is nothing before ``first``, named in the message
    """
    rule = loaded.model.out_of_time
    span = f"rows at risk run from {format_period(first, frequency)} to {format_period(last, frequency)}"
    if binding:
        more = f" and {len(binding) - 3} more" if len(binding) > 3 else ""
        span += f", because earlier ones have no value of {', '.join(binding[:3])}{more}"
    if rule.cutoffs is None:
        folds = 4 if rule.folds is None else rule.folds
        made = tuple(last - rule.window * k for k in range(folds, 0, -1))
        if made[0] < first:
            raise loaded.error(
                ("out_of_time", "folds"),
                f"{folds} windows of {rule.window} {frequency.value}s leave nothing to fit before them: {span}. "
                "Use fewer folds or a shorter window",
            )
        return made
    given: list[int] = []
    for i, text in enumerate(rule.cutoffs):
        period = parse_period(text, frequency)
        problem = _misplaced(text, period, given, span, first, last, rule.window)
        if problem is not None:
            raise loaded.error(("out_of_time", "cutoffs", i), problem)
        given.append(period)
    return tuple(given)


def _misplaced(
    text: str, period: int, given: Sequence[int], span: str, first: int, last: int, window: int
) -> str | None:
    if not first <= period or not period + window <= last:
        return f"the refit up to {text} or the {window} periods after it lie outside the data: {span}"
    if given and period <= given[-1]:
        return f"{text} does not come after the cut-off before it; cut-offs rise"
    if given and period - given[-1] < window:
        return (
            f"{text} comes {period - given[-1]} periods after the cut-off before it, less than the window of {window}: "
            "the windows would overlap and count rows twice"
        )
    return None


def _window(
    loaded: Loaded[SearchSpec], common: RiskSet, cutoff: int, first: int, columns: Sequence[str]
) -> Window:
    length, frequency = loaded.model.out_of_time.window, common.frequency
    train, after = cut(common, first, cutoff), cut(common, cutoff + 1, cutoff + length)
    if train.stay_loan.size == 0 or after.stay_loan.size == 0:
        raise DataError(
            f"{loaded.file}: out_of_time: no rows at risk up to {format_period(cutoff, frequency)}, or none in the "
            f"{length} periods after it; choose other cut-offs"
        )
    rows = cause_rows(after, loaded.model.cause)
    stay, age = stay_rows(rows.entry, rows.exit)
    at = rows.first_row[stay] + age - rows.entry[stay] - 1
    held = {n: rows.moving[n][at] if n in rows.moving else rows.static[n][rows.loan[stay]] for n in columns}
    return Window(
        cutoff=cutoff,
        length=length,
        train=train,
        frame=pd.DataFrame({**held, "age": age}),
        period=rows.origin[stay] + age,
        event=rows.event[stay] & (age == rows.exit[stay]),
        weight=rows.weight[stay],
    )
