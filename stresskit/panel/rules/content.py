"""Rules on the loan columns that later rooms use: changes, missing values, levels."""

from __future__ import annotations

from collections.abc import Sequence

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Case, Columns, Rule


def _changes(plan: Plan, columns: Columns) -> Sequence[Case]:
    return [Case(f"moved{i}", name) for name, i in columns.static.items() if i != columns.count]


def _missing_category(plan: Plan, columns: Columns) -> Sequence[Case]:
    return [Case(f"c{i} IS NULL", name) for name, i in columns.static.items() if name not in columns.numbers]


def _missing_static(plan: Plan, columns: Columns) -> Sequence[Case]:
    used = {c.name for c in plan.carried if c.at_risk and c.kind != "date"}
    return [
        Case(f"c{i} IS NULL", name)
        for name, i in columns.static.items()
        if name in columns.numbers and name in used
    ]


def _missing_moving(plan: Plan, columns: Columns) -> Sequence[Case]:
    used = {c.name for c in plan.carried if c.at_risk and c.kind != "date"}
    return [
        Case(f"m{i} IS NULL", name)
        for name, i in columns.moving.items()
        if name in columns.numbers and name in used
    ]


def _missing_moving_category(plan: Plan, columns: Columns) -> Sequence[Case]:
    return [Case(f"m{i} IS NULL", name) for name, i in columns.moving.items() if name not in columns.numbers]


def _once(plan: Plan, columns: Columns) -> Sequence[Case]:
    """The window counts loans per level."""
    return [Case(f"once{i}", name) for name, i in columns.static.items() if name not in columns.numbers]


STATIC_CHANGES = Rule(
    "static_changes", "loan", "a column that should stay the same changes within the loan", "keep",
    ("keep", "leave_out", "reject"), _changes, layouts=("panel",), counts="loans",
    kept="the value in the loan's first row is used", remedy="Name it under loans.varying or loans.lagged.",
)  # fmt: skip

MISSING_CATEGORY = Rule(
    "missing_category", "loan", "a category is empty", "keep", ("keep", "leave_out", "reject"), _missing_category,
    counts="loans", kept='it becomes the category "(missing)"', remedy="Fill it.",
)  # fmt: skip

MISSING_CATEGORY_IN_ROW = Rule(
    "missing_category_in_row", "observed", "a moving category is empty", "keep", ("keep", "leave_out", "reject"),
    _missing_moving_category, layouts=("panel",), kept='it becomes the category "(missing)"', remedy="Fill it.",
)  # fmt: skip

MISSING_VALUE = Rule(
    "missing_value", "loan", "a number that a hazard uses is missing", "leave_out", ("leave_out", "reject"),
    _missing_static, counts="loans", remedy="Fill it, or drop the term.",
)  # fmt: skip

MISSING_VALUE_IN_ROW = Rule(
    "missing_value_in_row", "observed", "a moving number that a hazard uses is missing at the start of the row's period",
    "leave_out", ("leave_out", "reject"), _missing_moving, layouts=("panel",), remedy="Fill it, or drop the term.",
)  # fmt: skip

CATEGORY_ONCE = Rule(
    "category_once", "loan", "a category is seen in a single loan", "keep", ("keep", "leave_out", "reject"), _once,
    counts="loans", kept="it stays a category of its own, with nothing to estimate it from",
    remedy="Merge it with another.",
)  # fmt: skip

SEGMENT_WITHOUT_DEFAULTS = Rule(
    "segment_without_defaults", "end", "a segment or category has rows at risk but no default", "keep",
    ("keep", "reject"), counts="levels", kept="its own effect on default cannot be estimated",
    remedy="Merge it with another, or drop the term.",
)  # fmt: skip

CATEGORY_NOT_IN_HISTORY = Rule(
    "category_not_in_history", "end", "a loan of the book has a category that no row at risk has", "leave_out",
    ("leave_out", "keep", "reject"), counts="loans", left="the loan is not projected",
    kept="the loan is in the book, and a hazard that uses the category will refuse it", remedy="Merge the category.",
)  # fmt: skip

BOOK_CONTRADICTS_HISTORY = Rule(
    "book_contradicts_history", "end", "a loan of portfolio.file defaulted or was paid off in the loan history", "keep",
    ("keep", "leave_out", "reject"), counts="loans", kept="it is projected", left="the loan is not projected",
    remedy="Take it out of the book if it ended, or give a new contract a new identifier.",
)  # fmt: skip

BOOK_DUPLICATE = Rule(
    "book_duplicate", "end", "portfolio.file has more than one row of the loan", "leave_out", ("leave_out", "reject"),
    counts="loans", left="exact copies count once, of rows that contradict each other none is projected",
    remedy="One row per loan.",
)  # fmt: skip
