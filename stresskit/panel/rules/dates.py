"""Rules on a loan's own dates: origination, maturity, term."""

from __future__ import annotations

from stresskit.panel.rules.base import Rule, when

MISSING_ORIGINATION = Rule(
    "missing_origination", "row", "no origination date, so no age", "leave_out", ("leave_out", "reject"),
    when("o IS NULL"), remedy="Fill the origination.",
)  # fmt: skip

PERIOD_BEFORE_ORIGINATION = Rule(
    "period_before_origination", "row", "row lies before the loan's origination", "leave_out",
    ("leave_out", "reject"), when("t < o"), layouts=("panel",), remedy="Correct the origination or the period.",
)  # fmt: skip

EVENT_BEFORE_ORIGINATION = Rule(
    "event_before_origination", "row", "the exit is dated before the origination", "leave_out",
    ("leave_out", "reject"), when("(out = 1 AND dd < o) OR (out = 2 AND pd < o)"), layouts=("spells",),
    remedy="Correct one of the two dates.",
)  # fmt: skip

TERM_NOT_POSITIVE = Rule(
    "term_not_positive", "loan", "the term is zero, negative or not a whole number of months, or the maturity lies "
    "before the origination", "leave_out", ("leave_out", "keep", "reject"), when("term_bad"), counts="loans",
    kept="the contract end counts as unknown", remedy="Correct the term or the maturity.",
)  # fmt: skip

#: Years after as_of beyond which a contract end is taken for a mistake or for "without end".
FARTHEST_END = 60

CONTRACT_END_FAR = Rule(
    "contract_end_far", "end", f"the contract end lies more than {FARTHEST_END} years after as_of", "leave_out",
    ("leave_out", "keep", "reject"), counts="loans", left="the loan is not projected",
    kept="it is projected to that end, which takes long",
    remedy="Correct the maturity (is it a placeholder such as 9999-12-31?), or give the loan the end it is to be "
    "projected to.",
)  # fmt: skip

ORIGINATION_CHANGES = Rule(
    "origination_changes", "loan", "the origination differs between the loan's rows, so its age would jump or run "
    "backwards", "leave_out", ("leave_out", "keep", "reject"), when("o_moves"), layouts=("panel",), counts="loans",
    kept="the origination in the loan's first row is used throughout",
    remedy="Give a loan one origination, or a new identifier when it is a new contract.",
)  # fmt: skip

PERIOD_AFTER_MATURITY = Rule(
    "period_after_maturity", "observed", "row lies after the loan's contract end", "keep",
    ("keep", "leave_out", "reject"), when("t > mat"), layouts=("panel",),
    kept="the row is at risk like any other", remedy="Correct the maturity if the loan was extended.",
)  # fmt: skip
