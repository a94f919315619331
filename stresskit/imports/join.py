"""How a path meets history: what the two say about as_of, and whether the first step is larger than any seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import Problem
from stresskit.macro.table import problem_of
from stresskit.spec.imports import SHARES

Floats = NDArray[np.float64]
#: Rounding in published tables is no disagreement.
_ROUNDING = 1e-6


@dataclass(frozen=True, slots=True)
class Past:
    """A variable's history up to and including as_of.

    calendar  year, quarter or month
    values    (n,) finite, newest last; n may be 0
    source    what messages call it
    own       whether it is the table's own
    digest    SHA-256 of its file, "" when it is the table's own
    """

    calendar: str
    values: Floats
    source: str
    own: bool
    digest: str = ""

    @property
    def last(self) -> float | None:
        return float(self.values[-1]) if self.values.size else None


@dataclass(frozen=True, slots=True)
class Meeting:
    """Where one variable's path meets history.

    first     the path's first value (after splicing), first_label its period
    own       the table's own value in as_of, as published; None when it has none
    declared  whether the mapping says how the variable joins (splice)
    direct    whether the first value is a level taken from the table as published
    """

    variable: str
    unit: str
    first: float
    first_label: str
    as_of: str
    own: float | None
    declared: str | None
    direct: bool


def judge(meeting: Meeting, past: Past) -> tuple[list[str], Problem | None]:
    """Cautions, and the problem that levels do not join, naming both values.

    A level counts as not joining when it lies farther from history than history's largest one-period move.
    With one value in history only what the table itself says about as_of can be compared, with none nothing.
    """
    if not past.values.size:
        return [], None
    relative = meeting.unit not in SHARES and bool((past.values > 0).all()) and meeting.first > 0
    # one value shows no move: nothing to hold a first step against, but the two may still differ about as_of
    largest = max(_moves(past.values, relative), key=abs, default=0.0)
    last = float(past.values[-1])
    cautions: list[str] = []
    agreed = past.own
    if meeting.own is not None and not past.own and meeting.declared is None and meeting.direct:
        apart = _change(last, meeting.own, relative)
        words = f"{meeting.variable} is {meeting.own:.10g} in {meeting.as_of} in the table, {last:.10g} in {past.source}"
        if abs(apart) > abs(largest) * (1 + _ROUNDING) and meeting.unit not in SHARES:
            return [], _does_not_join(words, largest, relative)
        if abs(meeting.own - last) > _ROUNDING * max(1.0, abs(last)):
            cautions.append(f"{words}; the path is taken as published.")
        agreed = True
    move = _change(last, meeting.first, relative)
    if past.values.size == 1 or abs(move) <= abs(largest) * (1 + _ROUNDING):
        return cautions, None
    words = (
        f"{meeting.variable} goes from {last:.10g} in {meeting.as_of} ({past.source}) to {meeting.first:.10g} in "
        f"{meeting.first_label} ({_size(move, relative)})"
    )
    if meeting.direct and meeting.declared is None and meeting.unit not in SHARES and not agreed:
        return cautions, _does_not_join(words, largest, relative)
    return [
        *cautions,
        f"{words}, more than history's largest one-period move ({_size(largest, relative)}).",
    ], None


def _does_not_join(words: str, largest: float, relative: bool) -> Problem:
    remedy = (
        "On another index base declare splice: growth, which continues history by the table's own growth; splice: none takes "
        "the values as published."
    )
    message = f"levels that do not join history (its largest one-period move is {_size(largest, relative)})"
    return problem_of("level_does_not_join", message, [words], remedy)


def _change(old: float, new: float, relative: bool) -> float:
    return new / old - 1.0 if relative else new - old


def _moves(values: Floats, relative: bool) -> Sequence[float]:
    return [_change(float(a), float(b), relative) for a, b in pairwise(values)]


def _size(change: float, relative: bool) -> str:
    return f"{change:+.1%}" if relative else f"{change:+.3g}"


def unit_problem(variable: str, values: Floats, *, kind: str, unit: str) -> Problem | None:
    """Values that look as if they were in another unit: 0.05 declared as percent, 5 as fraction.

    kind  level, growth or deviation; unit  percent or fraction (points and indices are not judged)
    """
    known = values[np.isfinite(values)]
    if not known.size or unit not in SHARES:
        return None
    size = float(np.abs(known).max())
    small = {"level": 0.5, "growth": 0.1, "deviation": 0.5}[kind]
    large = {"level": 1.5, "growth": 1.0, "deviation": 1.0}[kind]
    if unit == "percent" and 0 < size <= small:
        other, words = "fraction", "small for percent (5 is 5 %)"
    elif unit == "fraction" and size > large:
        other, words = "percent", "large for fraction (0.05 is 5 %)"
    else:
        return None
    key = "table_unit" if kind == "level" else "amounts"
    cases = [f"all between {known.min():.6g} and {known.max():.6g}"]
    remedy = f"Declare {key}: {other} if that is what the column holds; if the unit is right, say sure: true."
    what = "values" if kind == "level" else kind
    return problem_of("unit_doubtful", f"{what} of {variable}, {words}", cases, remedy)
