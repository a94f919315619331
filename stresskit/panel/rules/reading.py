"""Rules on what can be read at all: identifiers, periods, dates, numbers; and duplicates."""

from __future__ import annotations

from collections.abc import Sequence

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Case, Columns, Rule, of_plan, when

MISSING_LOAN = Rule(
    "missing_loan", "row", "no loan identifier", "leave_out", ("leave_out", "reject"), when("k IS NULL"),
    remedy="Fill the identifier.",
)  # fmt: skip

UNREADABLE_PERIOD = Rule(
    "unreadable_period", "row", "the row's period is empty or cannot be read", "leave_out", ("leave_out", "reject"),
    when("t IS NULL"), layouts=("panel",),
    remedy="Write periods as 2025-12, 2025Q4 or 2025-12-31; integer counters need loans.counter_starts.",
)  # fmt: skip

AFTER_AS_OF = Rule(
    "after_as_of", "row", "row lies after as_of", "leave_out", ("leave_out", "reject"),
    of_plan(lambda plan: f"t > {plan.as_of}"), layouts=("panel",), severity="note",
)  # fmt: skip

DUPLICATE_EXACT = Rule(
    "duplicate_exact", "row", "row repeats another in every column that is read", "leave_out", ("leave_out", "reject"),
    when("twin = 1"), left="one of the copies is used", remedy="Remove the copies.",
)  # fmt: skip

DUPLICATE_CONFLICTING = Rule(
    "duplicate_conflicting", "row", "rows of the same loan (and period) contradict each other", "leave_out",
    ("leave_out", "reject"), when("twin = 2"),
    left="all of them: none can be preferred, and an exit among them is lost",
    remedy="Find out which row is right.",
)  # fmt: skip


def _dates(plan: Plan, columns: Columns) -> Sequence[Case]:
    """A panel's maturity is not needed to place a row, so it is left to unreadable_value."""
    spare = plan.columns.maturity if plan.layout == "panel" else None
    return [_bit(columns, name) for name in columns.dates if name not in (spare, plan.columns.period)]


def _values(plan: Plan, columns: Columns) -> Sequence[Case]:
    spare = plan.columns.maturity if plan.layout == "panel" else None
    return [_bit(columns, name) for name in columns.bits if name not in columns.dates or name == spare]


def _bit(columns: Columns, name: str) -> Case:
    return Case(f"(bad & {1 << columns.bits[name]}) <> 0", name)


UNREADABLE_DATE = Rule(
    "unreadable_date", "row", "a date cannot be read", "leave_out", ("leave_out", "reject"), _dates,
    remedy="Write dates as 2025-12-31, 2025-12 or 2025Q4; integer counters need loans.counter_starts.",
)  # fmt: skip

UNREADABLE_VALUE = Rule(
    "unreadable_value", "row", "a value cannot be read as the number or date it should be", "keep",
    ("keep", "leave_out", "reject"), _values, kept="the value counts as missing",
    remedy="Write numbers with a point and without separators or units.",
)  # fmt: skip
