"""Rules on a loan's rows one after the other (layout panel)."""

from __future__ import annotations

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Rule, of_plan, when

_GAP = "t_before <> t - 1"


def _entry(plan: Plan) -> str | None:
    return "is_first AND age > 1" if plan.first_row == "entry" else None


def _event_in_entry(plan: Plan) -> str | None:
    condition = _entry(plan)
    return None if condition is None else f"({condition}) AND NOT after_exit AND out > 0"


AFTER_OBSERVED_UNTIL = Rule(
    "after_observed_until", "observed", "row lies after loans.observed_until", "leave_out", ("leave_out", "reject"),
    of_plan(lambda plan: None if plan.observed_until is None else f"t > {plan.observed_until}"), layouts=("panel",),
    severity="note",
)  # fmt: skip

AFTER_EVENT = Rule(
    "after_event", "observed", "row follows the loan's first default or payoff", "leave_out", ("leave_out", "reject"),
    when("after_exit"), layouts=("panel",), severity="note",
    remedy="A loan that starts anew needs a new identifier.",
)  # fmt: skip

EVENT_IN_FIRST_ROW = Rule(
    "event_in_first_row", "observed", "default or payoff in the first row of a loan seen late, when it was not yet "
    "known to be at risk", "leave_out", ("leave_out", "reject"), of_plan(_event_in_entry), layouts=("panel",),
    left="the event is lost, counted under entry_row", reason=False,
    remedy="Choose loans.first_row: at_risk if first rows show a period the loan was at risk in.",
)  # fmt: skip

ENTRY_ROW = Rule(
    "entry_row", "observed", "first row of a loan seen late: it shows that the loan was there and is not at risk",
    "leave_out", ("leave_out", "reject"), of_plan(_entry), layouts=("panel",), severity="note",
)  # fmt: skip

EVENT_AFTER_GAP = Rule(
    "event_after_gap", "observed", "default or payoff in the row after a gap: its period is not known", "leave_out",
    ("leave_out", "reject"), when(f"{_GAP} AND NOT after_exit AND out > 0"), layouts=("panel",), reason=False,
    left="the event is lost, counted under after_gap", remedy="Fill the missing periods.",
)  # fmt: skip

AFTER_GAP = Rule(
    "after_gap", "observed", "row follows one or more missing periods: the loan counts as entering anew", "leave_out",
    ("leave_out", "reject"), when(_GAP), layouts=("panel",), remedy="Fill the missing periods.",
)  # fmt: skip

NO_PREVIOUS_ROW = Rule(
    "no_previous_row", "observed", "first row, so the value of loans.varying columns at its start is not known",
    "leave_out", ("leave_out", "reject"),
    of_plan(lambda plan: "t_before IS NULL" if any(c.moves == "varying" for c in plan.carried) else None),
    layouts=("panel",), severity="note",
)  # fmt: skip
