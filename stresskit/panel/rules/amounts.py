"""Rules on amounts and rates. Estimation does not need them; the book to project does."""

from __future__ import annotations

from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Rule, of_plan


def _money(plan: Plan) -> str:
    return "bal" if plan.columns.balance else "amount"


MISSING_AMOUNT = Rule(
    "missing_amount", "observed", "no balance (or amount)", "keep", ("keep", "leave_out", "reject"),
    of_plan(lambda plan: f"{_money(plan)} IS NULL"), kept="used for estimation; at as_of the loan is not projected",
    remedy="Fill the amount.",
)  # fmt: skip

NEGATIVE_AMOUNT = Rule(
    "negative_amount", "observed", "a negative balance (or amount)", "keep", ("keep", "leave_out", "reject"),
    of_plan(lambda plan: f"{_money(plan)} < 0"), kept="used for estimation; at as_of the loan is not projected",
    remedy="Correct the sign.",
)  # fmt: skip


def _rate(plan: Plan) -> str | None:
    """Row by row, or for the one rate that the study assumes."""
    if plan.columns.rate:
        return "rate > 1 OR rate < -0.1"
    return "true" if plan.assumed_rate is not None and not -0.1 <= plan.assumed_rate <= 1 else None


RATE_IMPLAUSIBLE = Rule(
    "rate_implausible", "observed", "a rate above 100 % or below -10 % a year", "keep", ("keep", "leave_out", "reject"),
    of_plan(_rate), kept="the rate is used as it is",
    remedy="Is loans.rate_unit right (fraction or percent)?",
)  # fmt: skip
