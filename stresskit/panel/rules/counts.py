"""Rules on the column that says for how many loans alike a line stands."""

from __future__ import annotations

from collections.abc import Sequence

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Case, Columns, Rule


def count_bad(columns: Columns) -> str:
    """SQL over parsed rows: the row's count is none that a line can have."""
    return f"(c{columns.count} IS NULL OR c{columns.count} <= 0)"


def _bad(plan: Plan, columns: Columns) -> Sequence[Case]:
    return () if columns.count is None else (Case("count_bad", plan.columns.count),)


def _changes(plan: Plan, columns: Columns) -> Sequence[Case]:
    return () if columns.count is None else (Case(f"moved{columns.count}", plan.columns.count),)


COUNT_NOT_POSITIVE = Rule(
    "count_not_positive", "loan", "the number of loans that the line stands for is missing, zero, negative or no number",
    "reject", ("reject", "leave_out"), _bad, counts="loans", left="the line and all loans that it stands for",
    remedy="Fill it in every row; a line that stands for no loan does not belong in the file.",
)  # fmt: skip

COUNT_CHANGES = Rule(
    "count_changes", "loan", "the number of loans that the line stands for changes between its rows, so that loans come "
    "or go without an entry or an exit", "reject", ("reject", "leave_out"), _changes, layouts=("panel",), counts="loans",
    left="the line and all loans that it stands for",
    remedy="Give the loans that leave, or that come later, a line of their own with its own identifier and outcome.",
)  # fmt: skip
