"""Person-period rows that are already at risk, one row per loan and age, to a RiskSet.

For data that someone else prepared (published examples, a validator's file, a notebook): no reading,
no quality rules with policies, only checks that the rows can be what they claim to be.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem, UsageError
from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import RiskSet

_NO_EVENT = ("", "0")


def risk_set_from_rows(
    frame: pd.DataFrame,
    *,
    loan: str,
    age: str,
    event: str,
    causes: Sequence[str] = ("default",),
    period: str | None = None,
    weight: str | None = None,
    static: Sequence[str] = (),
    moving: Sequence[str] = (),
    frequency: str | Frequency = "month",
) -> RiskSet:
    """RiskSet of ``frame``, whose every row says: this loan was at risk in this period.

    loan    column of identifiers, compared and sorted as text
    age     column of whole numbers >= 1: periods on book at the end of the row's period
    event   column: 0 (or False, or empty text) for none, k or the cause's name for an exit by causes[k - 1]
    period  column of period labels or ordinals; without it every loan gets origin 0, so period = age
    weight  column of positive numbers, e.g. counts of aggregated rows; without it 1
    static  columns that are constant within a loan: numbers become float64, everything else text
    moving  columns that change along a loan's rows, as known at the START of the row's period

    Rows may come in any order. Consecutive ages form one stay; a hole in the ages, or another weight,
    starts a new one. Raises DataError with every problem found, UsageError for columns that are not there.
    """
    named = [loan, age, event, *([period] if period else []), *([weight] if weight else []), *static, *moving]
    absent = [name for name in named if name not in frame.columns]
    if absent:
        there = ", ".join(map(str, frame.columns))
        raise UsageError(f"no column {', '.join(map(repr, absent))}; the frame has {there}")
    if frame.empty:
        raise DataError("the frame has no rows, so there is no one at risk")
    calendar = frequency if isinstance(frequency, Frequency) else Frequency(frequency)

    checks = _Checks(np.array([str(v) for v in frame[loan].to_numpy(dtype=object)], dtype=object))
    checks.report("missing_loan", "a row has no loan", frame[loan].isna().to_numpy(), "Fill the identifier.")
    loan_ids, code = np.unique(checks.names, return_inverse=True)
    ages = checks.whole(frame[age], "age", lowest=1)
    events = _events(frame[event], tuple(causes), checks)
    weights = _weights(None if weight is None else frame[weight], checks)
    origins = np.zeros(len(code), dtype=np.int64)
    if period is not None:
        origins = _periods(frame[period], calendar, checks) - ages

    order = np.lexsort((ages, code))
    code, ages, events = code[order], ages[order], events[order]
    weights, origins = weights[order], origins[order]
    checks.names, checks.ages = checks.names[order], ages
    same = np.zeros(len(code), dtype=bool)
    same[1:] = code[1:] == code[:-1]
    _check_sequence(same, ages, events, origins, checks)
    static_columns = {c: _static(frame[c], order, same, checks) for c in static}
    moving_columns = {c: _column(frame[c].iloc[order], checks) for c in moving}
    if checks.problems:
        raise DataError("these rows cannot be a risk set", checks.problems)

    follows = same.copy()
    follows[1:] &= (ages[1:] == ages[:-1] + 1) & (weights[1:] == weights[:-1])
    first = np.flatnonzero(~follows)
    last = np.append(first[1:], len(code)) - 1
    head = np.flatnonzero(~same)
    return RiskSet(
        frequency=calendar,
        causes=tuple(causes),
        loan_ids=loan_ids,
        static={c: v[head] for c, v in static_columns.items()},
        stay_loan=code[first].astype(np.int64),
        stay_origin=origins[first],
        stay_entry=ages[first] - 1,
        stay_exit=ages[last],
        stay_cause=events[last],
        weight=weights[first],
        moving=moving_columns,
        count=weight or "",
    )


@dataclass(slots=True)
class _Checks:
    """Names of the rows' loans (and ages, once known), and the problems found with the rows so far."""

    names: NDArray[Any]
    ages: NDArray[np.int64] | None = None
    problems: list[Problem] = field(default_factory=list)

    def report(self, code: str, message: str, bad: NDArray[np.bool_], remedy: str) -> None:
        """Adds a problem when any row is bad."""
        if not bad.any():
            return
        rows = np.flatnonzero(bad)[:5]
        if self.ages is None:
            first = tuple(str(self.names[i]) for i in rows)
        else:
            first = tuple(f"{self.names[i]} @ age {self.ages[i]}" for i in rows)
        self.problems.append(Problem(code, message, int(bad.sum()), first, remedy))

    def whole(self, column: pd.Series[Any], name: str, *, lowest: int | None = None) -> NDArray[np.int64]:
        """A column of whole numbers; 1 stands for what is none."""
        numbers = pd.to_numeric(column, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
        bad = ~np.isfinite(numbers) | (numbers != np.floor(numbers))
        if lowest is not None:
            bad |= numbers < lowest
        wanted = "whole numbers" + (f" from {lowest}" if lowest is not None else "")
        self.report(f"{name}_not_whole", f"{name} is not a whole number in range", bad, f"Expected {wanted}.")
        return np.where(bad, 1, numbers).astype(np.int64)


def _periods(column: pd.Series[Any], calendar: Frequency, checks: _Checks) -> NDArray[np.int64]:
    """Ordinals of a column of labels, dates or ordinals; each distinct label is parsed once."""
    if pd.api.types.is_integer_dtype(column):
        return checks.whole(column, "period")
    labels, code = np.unique(np.array([str(v) for v in column], dtype=object), return_inverse=True)
    ordinals = np.zeros(len(labels), dtype=np.int64)
    wrong = np.zeros(len(labels), dtype=bool)
    for i, label in enumerate(labels):
        try:
            ordinals[i] = parse_period(label, calendar)
        except ValueError:
            wrong[i] = True
    checks.report(
        "period_unreadable", "period cannot be read", wrong[code], "Expected '2025-12' or '2025Q4'."
    )
    return ordinals[code]


def _events(column: pd.Series[Any], causes: tuple[str, ...], checks: _Checks) -> NDArray[np.int64]:
    wanted = f"Expected 0..{len(causes)} or one of {', '.join(causes)}."
    if pd.api.types.is_numeric_dtype(column) or pd.api.types.is_bool_dtype(column):
        numbers = column.to_numpy(dtype=np.float64, na_value=np.nan)
        bad = ~np.isin(numbers, np.arange(len(causes) + 1))
    else:
        lookup = {c: k for k, c in enumerate(causes, 1)} | {str(k): k for k in range(len(causes) + 1)}
        lookup |= dict.fromkeys(_NO_EVENT, 0)
        texts = ["" if pd.isna(v) else str(v).strip() for v in column]
        numbers = np.array([lookup.get(t, np.nan) for t in texts], dtype=np.float64)
        bad = np.isnan(numbers)
    checks.report("unknown_event", "event is neither none nor a known cause", bad, wanted)
    return np.where(bad, 0, numbers).astype(np.int64)


def _weights(column: pd.Series[Any] | None, checks: _Checks) -> NDArray[np.float64]:
    if column is None:
        return np.ones(len(checks.names))
    numbers = pd.to_numeric(column, errors="coerce").to_numpy(dtype=np.float64, na_value=np.nan)
    bad = ~(np.isfinite(numbers) & (numbers > 0))
    checks.report(
        "weight_not_positive", "weight is not a positive number", bad, "Leave rows of weight 0 out."
    )
    return np.where(bad, 1.0, numbers)


def _check_sequence(
    same: NDArray[np.bool_],
    ages: NDArray[np.int64],
    events: NDArray[np.int64],
    origins: NDArray[np.int64],
    checks: _Checks,
) -> None:
    """Within a loan: no age twice, nothing after an exit, one origin."""
    doubled, after, moved = same.copy(), same.copy(), same.copy()
    doubled[1:] &= ages[1:] == ages[:-1]
    after[1:] &= events[:-1] > 0
    moved[1:] &= origins[1:] != origins[:-1]
    checks.report("age_twice", "loan has the same age in two rows", doubled, "One row per loan and age.")
    remedy = "Rows after the first event are not at risk: leave them out."
    checks.report("rows_after_exit", "row follows the loan's exit", after, remedy)
    remedy = "One period on is one age on."
    checks.report("origin_moves", "period minus age is not the same in all rows of the loan", moved, remedy)


def _column(column: pd.Series[Any], checks: _Checks) -> NDArray[Any]:
    """Numbers as float64, everything else as text; missing values are problems."""
    remedy = "Fill it or leave the rows out."
    checks.report("missing_value", f"column {column.name!r} is empty", column.isna().to_numpy(), remedy)
    if pd.api.types.is_numeric_dtype(column) or pd.api.types.is_bool_dtype(column):
        return column.to_numpy(dtype=np.float64, na_value=np.nan)
    return np.array([str(v) for v in column], dtype=object)


def _static(
    column: pd.Series[Any], order: NDArray[np.intp], same: NDArray[np.bool_], checks: _Checks
) -> NDArray[Any]:
    values = _column(column.iloc[order], checks)
    changed = same.copy()
    changed[1:] &= values[1:] != values[:-1]
    remedy = "Name it under moving instead."
    checks.report("static_changes", f"column {column.name!r} changes within a loan", changed, remedy)
    return values
