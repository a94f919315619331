"""The risk set by a plain loop, loan by loan and row by row: another route to what the room does in SQL.

Follows METHOD sections 1 and 2 word by word; knows no rule list and no database. Default policies only.
"""

from __future__ import annotations

import math
from collections import Counter, defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from stresskit.core.period import Frequency, parse_period

Row = Mapping[str, Any]


@dataclass
class Loop:
    """Result of the loop: stays and moving values in order, reason of every row, who is on book."""

    stays: list[tuple[str, int, int, int, int]] = field(default_factory=list)
    moving: list[float] = field(default_factory=list)
    rows: Counter[str] = field(default_factory=Counter)
    defaults: Counter[str] = field(default_factory=Counter)
    payoffs: Counter[str] = field(default_factory=Counter)
    money: defaultdict[str, list[float]] = field(default_factory=lambda: defaultdict(list))
    loans: Counter[str] = field(default_factory=Counter)
    on_book: dict[str, tuple[int, int, float]] = field(default_factory=dict)


def _period(value: Any) -> int | None:
    try:
        return parse_period(value, Frequency.MONTH) if value else None
    except ValueError:
        return None


def _before(earlier: Any, later: Any) -> bool:
    one, other = _period(earlier), _period(later)
    return one is not None and other is not None and one < other


def _number(value: Any) -> float:
    try:
        return math.nan if value is None else float(value)
    except ValueError:
        return math.nan


def walk(
    rows: Sequence[Row],
    *,
    as_of: int,
    observed_until: int | None,
    at_risk_first: bool,
    declared: Sequence[str],
    varying: str | None,
    lagged: str | None,
) -> Loop:
    """rows have id, month, state, opened, matures, owed, interest, and the moving column if there is one."""
    result = Loop()
    by_loan: dict[str, list[Row]] = defaultdict(list)
    for row in rows:
        name = (row["id"] or "").strip()
        if not name:
            _take(result, row, "missing_loan")
        else:
            by_loan[name].append(row)
    for name in sorted(by_loan):
        _loan(
            result,
            name,
            by_loan[name],
            as_of,
            observed_until,
            at_risk_first,
            tuple(declared),
            varying,
            lagged,
        )
    return result


def _take(result: Loop, row: Row, reason: str) -> None:
    result.rows[reason] += 1
    result.defaults[reason] += row["state"] == "D"
    result.payoffs[reason] += row["state"] == "P"
    if not math.isnan(_number(row["owed"])):
        result.money[reason].append(_number(row["owed"]))


def _loan(
    result: Loop, name: str, rows: list[Row], as_of: int, observed_until: int | None, at_risk_first: bool,
    declared: tuple[str, ...], varying: str | None, lagged: str | None,
) -> None:  # fmt: skip
    reasons: list[tuple[int, int, str]] = []  # period, order of reasons, reason

    def leave(row: Row, reason: str) -> None:
        period = _period(row["month"])
        reasons.append((10**6 if period is None else period, ORDER.index(reason), reason))
        _take(result, row, reason)

    groups: dict[int, list[Row]] = defaultdict(list)
    for row in rows:
        period = _period(row["month"])
        if period is None:
            leave(row, "unreadable_period")
        elif period > as_of:
            leave(row, "after_as_of")
        else:
            groups[period].append(row)
    clean: list[tuple[int, Row]] = []
    for period in sorted(groups):
        same = groups[period]
        kinds = {tuple(sorted((k, str(v)) for k, v in row.items())) for row in same}
        if len(kinds) > 1:
            for row in same:
                leave(row, "duplicate_conflicting")
            continue
        for row in same[1:]:
            leave(row, "duplicate_exact")
        row = same[0]
        opened = _period(row["opened"])
        if opened is None:
            leave(row, "missing_origination")
        elif period < opened:
            leave(row, "period_before_origination")
        elif row["state"] not in declared:
            leave(row, "unknown_status")
        else:
            clean.append((period, row))

    used = False
    if any(_before(row["matures"], row["opened"]) for _, row in clean):
        for _, row in clean:
            leave(row, "term_not_positive")
        clean = []
    if len({row["opened"] for _, row in clean}) > 1:
        for _, row in clean:
            leave(row, "origination_changes")
        clean = []
    previous: int | None = None
    before: float = math.nan
    ended = False
    run: list[int] = []
    origin = _period(clean[0][1]["opened"]) if clean else 0
    assert origin is not None
    for period, row in clean:
        age = period - origin + 1
        value = _number(row[varying or lagged]) if (varying or lagged) else 0.0
        known = before if varying else value
        reason = ""
        if observed_until is not None and period > observed_until:
            reason = "after_observed_until"
        elif ended:
            reason = "after_event"
        elif previous is None and age > 1 and not at_risk_first:
            reason = "entry_row"
        elif previous is not None and previous != period - 1:
            reason = "after_gap"
        elif previous is None and varying:
            reason = "no_previous_row"
        elif (varying or lagged) and math.isnan(known):
            reason = "missing_value_in_row: score"
        cause = {"D": 1, "P": 2}.get(row["state"], 0)
        if reason:
            leave(row, reason)
            _close(result, name, origin, run, 0)
        else:
            used = True
            _take(result, row, "used")
            if varying or lagged:
                result.moving.append(known)
            run.append(age)
            if cause:
                _close(result, name, origin, run, cause)
        ended = ended or cause > 0
        previous, before = period, value
    _close(result, name, origin, run, 0)
    result.loans["used" if used else min(reasons)[2]] += 1
    if clean and not ended and clean[-1][0] == as_of:
        last = clean[-1][1]
        matures, owed, rate = _period(last["matures"]), _number(last["owed"]), _number(last["interest"])
        latest = [_period(row["matures"]) for _, row in clean if _period(row["matures"]) is not None]
        matures = latest[-1] if latest else None
        score = _number(last[varying or lagged]) if (varying or lagged) else 0.0
        if (
            matures is not None
            and matures > as_of
            and owed >= 0
            and not math.isnan(rate)
            and not math.isnan(score)
        ):
            result.on_book[name] = (as_of - origin + 1, matures - as_of, owed)


ORDER = [
    "missing_loan", "unreadable_period", "after_as_of", "duplicate_exact", "duplicate_conflicting",
    "missing_origination", "period_before_origination", "unknown_status", "term_not_positive", "origination_changes",
    "after_observed_until", "after_event", "entry_row", "after_gap", "no_previous_row", "missing_value_in_row: score",
]  # fmt: skip


def _close(result: Loop, name: str, origin: int, run: list[int], cause: int) -> None:
    """Ends the stay that is open, if one is."""
    if run:
        result.stays.append((name, origin - 1, run[0] - 1, run[-1], cause))
        run.clear()
