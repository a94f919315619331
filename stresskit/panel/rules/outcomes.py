"""Rules on how a row or a loan ended."""

from __future__ import annotations

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Rule, of_plan, when
from stresskit.spec.study import FlagOutcome, SpellOutcome

UNKNOWN_STATUS = Rule(
    "unknown_status", "row", "the status is empty or none of those declared", "leave_out", ("leave_out", "reject"),
    when("out IS NULL"), left="what the loan did then counts as not observed",
    remedy="Declare the code under loans.outcome, or correct it.",
)  # fmt: skip

TWO_EXITS = Rule(
    "two_exits", "row", "default and payoff are flagged in the same row", "keep", ("keep", "leave_out", "reject"),
    of_plan(lambda plan: "two_exits" if isinstance(plan.outcome, FlagOutcome) and plan.outcome.payoff_flag else None),
    layouts=("panel",), kept="it counts as default", remedy="Clear one of the flags.",
)  # fmt: skip

EVENT_WITHOUT_DATE = Rule(
    "event_without_date", "row", "the loan defaulted but has no default date", "leave_out", ("leave_out", "reject"),
    when("out = 1 AND dd IS NULL"), layouts=("spells",), remedy="Fill the date.",
)  # fmt: skip

DATE_WITHOUT_EVENT = Rule(
    "date_without_event", "row", "the loan has the date of an exit that its status denies", "leave_out",
    ("leave_out", "keep", "reject"), when("(out <> 1 AND dd IS NOT NULL) OR (out = 0 AND pd IS NOT NULL)"),
    layouts=("spells",), kept="the status counts, the date does not", remedy="Correct the status or clear the date.",
)  # fmt: skip

LAST_SEEN_MISSING = Rule(
    "last_seen_missing", "row", "a loan without an exit has no last_seen, so it is not known how long it was there",
    "reject", ("reject", "leave_out", "keep"),
    of_plan(lambda plan: "out = 0 AND seen IS NULL" if plan.columns.last_seen else None), layouts=("spells",),
    kept="it counts as there to its contract end, observed_until or as_of, and as on book at as_of",
    remedy="Fill last_seen.",
)  # fmt: skip

UNDATED_PAYOFF = Rule(
    "undated_payoff", "row", "the loan was paid off but has no payoff date", "reject", ("keep", "leave_out", "reject"),
    when("out = 2 AND pd IS NULL"), layouts=("spells",), study="loans.outcome.undated_payoff",
    kept="it counts as performing until its contract end; there is no payoff event",
    remedy="Fill the date, or choose loans.outcome.undated_payoff: observed_to_maturity or leave_out.",
)  # fmt: skip


def _no_end(plan: Plan) -> str | None:
    observed = (
        isinstance(plan.outcome, SpellOutcome) and plan.outcome.undated_payoff == "observed_to_maturity"
    )
    return "out = 2 AND pd IS NULL AND mat IS NULL" if observed else None


UNDATED_PAYOFF_WITHOUT_END = Rule(
    "undated_payoff_without_end", "loan", "the loan was paid off without a date and its contract end is unknown too",
    "leave_out", ("leave_out", "reject"), of_plan(_no_end), layouts=("spells",), counts="loans", remedy="Fill one of the two.",
)  # fmt: skip

DEFAULT_AFTER_MATURITY = Rule(
    "default_after_maturity", "row", "the default is dated after the contract end", "reject",
    ("keep", "leave_out", "reject"), when("out = 1 AND dd > mat"), layouts=("spells",),
    study="loans.outcome.default_after_maturity", kept="it counts",
    remedy="Choose loans.outcome.default_after_maturity: date_at_maturity, keep or leave_out.",
)  # fmt: skip

PAYOFF_AT_MATURITY = Rule(
    "payoff_at_maturity", "observed", "a payoff in or after the last contract period, which is no early repayment",
    "keep", ("keep", "reject"),
    of_plan(lambda plan: "out = 2 AND " + ("t" if plan.layout == "panel" else "exit_t") + " >= mat"),
    kept="it counts as a payoff like any other", remedy="Give contractual repayments a status that is not a payoff.",
    severity="note",
)  # fmt: skip

NEVER_AT_RISK = Rule(
    "never_at_risk", "observed", "the loan's observed life is over before it begins (originated or entered after the "
    "last observed period or after its exit)", "leave_out", ("leave_out", "reject"), when("exit_age <= entry_age"),
    layouts=("spells",), severity="note",
)  # fmt: skip
