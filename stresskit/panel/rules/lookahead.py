"""The rule against looking ahead: a column whose values give the event away.

A column declared ``lagged`` claims to hold what was known at the start of its row's period. If it was in truth
recorded at the end of that period, rows with an event differ from all others: a balance that is zero, days past
due above any other, a code that occurs nowhere else. The same tells a static column that was filled in
afterwards, such as the amount charged off.
"""

from __future__ import annotations

from stresskit.panel.rules.base import Rule

#: Events (or rows of a code) that must agree before chance is ruled out.
LEAST_EVENTS = 5

LOOK_AHEAD = Rule(
    "look_ahead", "end", "the values of a column on event rows give the event away, so they were not known at the start "
    "of the period", "reject", ("reject", "keep"), counts="columns", kept="the column is used as it is",
    remedy="Name a panel column under loans.varying instead of loans.lagged, or leave the column out.",
)  # fmt: skip


def _rows(count: str | None, which: str) -> str:
    """SQL aggregate: how many rows ``which``, by the counts of their lines where there are some."""
    filtered = f" FILTER (WHERE {which})"
    return f"count(*){filtered}" if count is None else f"coalesce(sum({count}){filtered}, 0)"


def number_betrays(*, value: str, event: str, emptied: bool = True, count: str | None = None) -> str:
    """SQL aggregate that is true when a number tells the rows with the event from all others.

    value, event  SQL over the relation's rows, a number and a boolean. True when the values of the two kinds
    of rows do not overlap at all, or (emptied) when event rows are all zero or empty while most others are not.
    count  SQL for the number of loans that a row's line stands for
    """
    e, rest = f"FILTER (WHERE {event})", f"FILTER (WHERE NOT ({event}))"
    nothing = f"coalesce({value}, 0) = 0"
    apart = f"min({value}) {e} > max({value}) {rest} OR max({value}) {e} < min({value}) {rest}"
    gone = (
        f"{_rows(count, f'({event}) AND NOT ({nothing})')} = 0 AND "
        f"{_rows(count, f'NOT ({event}) AND {nothing}')} * 2 < {_rows(count, f'NOT ({event})')}"
    )
    enough = f"{_rows(count, event)} >= {LEAST_EVENTS} AND {_rows(count, f'NOT ({event})')} >= {LEAST_EVENTS}"
    return f"({enough}) AND (coalesce({apart}, false) OR ({gone if emptied else 'false'}))"


def level_betrays(*, event: str, count: str | None = None) -> str:
    """SQL aggregate over the rows of one code: true when it is seen often, and only with the event; ``count`` as above."""
    return f"{_rows(count, 'true')} >= {LEAST_EVENTS} AND count(*) FILTER (WHERE NOT ({event})) = 0"
