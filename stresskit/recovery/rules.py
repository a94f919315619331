"""Quality rules of workouts: what each looks for, its default policy, and the collection of what was found."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem, TextError
from stresskit.spec.base import meant
from stresskit.spec.recovery import CasePolicy

Bools = NDArray[np.bool_]
_SHOWN = 5


@dataclass(frozen=True, slots=True)
class WorkoutRule:
    """One rule on workouts.

    code     key under recovery.rules and reason in the reconciliation
    says     what was found
    default  policy unless recovery.rules names another; ``allowed``: those that can be named there
    kept     what "keep" does
    """

    code: str
    says: str
    default: CasePolicy
    allowed: tuple[CasePolicy, ...]
    remedy: str
    kept: str = ""


_ANY: tuple[CasePolicy, ...] = ("reject", "leave_out", "keep")
_OUT: tuple[CasePolicy, ...] = ("reject", "leave_out")

CASE_RULES = (
    WorkoutRule("missing_case", "a row without a case identifier", "leave_out", _OUT, "Fill the identifier."),
    WorkoutRule(
        "case_copied", "a case that stands in the table again, word for word", "leave_out", _OUT,
        "Remove the copy.",
    ),
    WorkoutRule(
        "case_twice", "a case with two rows that differ", "reject", _OUT,
        "One row per case; leave_out takes all rows of such a case out.",
    ),
    WorkoutRule("default_unreadable", "no readable date of default", "leave_out", _OUT, "Fill the date."),
    WorkoutRule(
        "amount_not_positive", "an amount at default that is missing, not a number, zero or negative", "leave_out", _OUT,
        "Fill the amount owed at default.",
    ),
    WorkoutRule("kind_unknown", "a kind of closing that recovery.kinds does not list", "reject", _OUT, "List the code under recovery.kinds."),
    WorkoutRule(
        "kind_missing", "a closing date without a kind of closing", "reject", _ANY,
        "Say how the case was closed.", "taken as written off",
    ),
    WorkoutRule(
        "closing_missing", "a kind of closing without a readable date", "reject", _OUT, "Fill the closing date."
    ),
    WorkoutRule("closed_before_default", "a closing before the default", "reject", _OUT, "Correct the dates."),
    WorkoutRule("rate_unreadable", "no readable discount rate", "leave_out", _OUT, "Fill the rate, or state recovery.discount as a number."),
    WorkoutRule("column_missing", "no value in a segment or static column", "leave_out", _OUT, "Fill the column."),
    WorkoutRule("loss_out_of_range", "a final loss below zero or above the amount at default", "reject", _ANY, "Correct the loss.", "the loss is cut to between zero and the amount"),
    WorkoutRule("entry_unreadable", "an entry into observation that is no date, or before the default", "reject", _OUT, "Correct the date, or leave it blank."),
    WorkoutRule("closed_before_entry", "a closing before the case came under observation", "leave_out", _OUT, "Nothing to do: such a case is seen only because it was closed."),
    WorkoutRule(
        "not_observed", "a default in the last observed period or later: no workout period is observed yet", "leave_out", ("leave_out",),
        "Nothing to do: such cases say nothing about recovery.",
    ),
    WorkoutRule(
        "closed_later", "a closing after the last observed period", "keep", _ANY,
        "Is recovery.observed_until right?", "the case counts as open",
    ),
    WorkoutRule(
        "open_past_end", "an open case older than the declared end of workout", "keep", _ANY,
        "Is recovery.end long enough?", "what it has not recovered by then counts as lost",
    ),
)  # fmt: skip

FLOW_RULES = (
    WorkoutRule("flow_without_case", "a cash flow of a case that the case table does not have", "leave_out", _OUT, "Add the case."),
    WorkoutRule("flow_unreadable", "a cash flow whose date or amounts cannot be read", "reject", _OUT, "Correct the row."),
    WorkoutRule("flow_negative", "a negative recovery or cost", "reject", _OUT, "Correct the sign; book a reversal in the period of the flow it reverses."),
    WorkoutRule(
        "flow_before_default", "a cash flow before the default", "reject", _ANY,
        "Correct the dates.", "counted in the first workout period, not discounted",
    ),
    WorkoutRule("flow_after_closing", "a cash flow after the case was closed", "keep", _ANY, "Is the closing date right?", "used: late recoveries count"),
    WorkoutRule("flow_before_entry", "a cash flow before the case came under observation", "leave_out", _OUT, "The amount owed at entry is net of it."),
    WorkoutRule("flow_not_observed", "a cash flow after the last observed period", "leave_out", _OUT, "Is recovery.observed_until right?"),
    WorkoutRule("flow_past_end", "a cash flow after the declared end of workout", "leave_out", _OUT, "Is recovery.end long enough?"),
    WorkoutRule(
        "recovered_above_amount", "a case that recovered more than it owed", "keep", _ANY,
        "Is the amount at default right?", "recoveries are cut off where the amount is reached",
    ),
)  # fmt: skip

WORKOUT_RULES = {rule.code: rule for rule in (*CASE_RULES, *FLOW_RULES)}


@dataclass(slots=True)
class Found:
    """What the rules found so far, by policy.

    findings  (code, policy, count, first cases, message)
    """

    policies: Mapping[str, CasePolicy]
    findings: list[tuple[str, str, int, tuple[str, ...], str]] = field(default_factory=list)
    problems: list[Problem] = field(default_factory=list)

    def apply(self, code: str, bad: Bools, names: NDArray[Any], reason: NDArray[Any]) -> Bools:
        """Files ``bad`` rows that no earlier rule took; returns those the policy keeps.

        reason  (n,) object of str, "" while a row is used; rows left out get the code
        """
        rule, policy = WORKOUT_RULES[code], self.policies[code]
        hit: Bools = bad & (reason == "")
        if not hit.any():
            return hit
        count = int(hit.sum())
        first = tuple(sorted(str(v) or "(no identifier)" for v in names[hit][:_SHOWN]))
        message = f"{rule.says}: {count:,}"
        if policy == "leave_out":
            message += "; left out"
            reason[hit] = code
        elif policy == "keep":
            message += f"; {rule.kept}"
        else:
            softer = [p for p in rule.allowed if p != "reject"]
            choice = f" Or set recovery.rules: {{{code}: {' | '.join(softer)}}}." if softer else ""
            reason[hit] = code  # the run stops; until then later steps see the row no more
            self.problems.append(Problem(code, rule.says, count, first, rule.remedy + choice))
        self.findings.append((code, policy, count, first, message + "."))
        return hit if policy == "keep" else np.zeros_like(hit)

    def taken(self) -> list[Problem]:
        """What left cases or flows out, in the form of problems."""
        return [
            Problem(code, WORKOUT_RULES[code].says, count, first, WORKOUT_RULES[code].remedy)
            for code, policy, count, first, _ in self.findings
            if policy == "leave_out"
        ]

    def verdict(self) -> None:
        """Raises one DataError with every problem, if there is any."""
        if self.problems:
            raise DataError("the workouts cannot be used as the study asks", self.problems)


def workout_policies(rules: Mapping[str, CasePolicy]) -> dict[str, CasePolicy]:
    """Policy of every rule. Raises TextError for an unknown code or a policy that the rule does not allow."""
    for code, policy in rules.items():
        if code not in WORKOUT_RULES:
            raise TextError(
                f"recovery.rules: no rule {code!r}{meant(code, WORKOUT_RULES)} (rules: {', '.join(sorted(WORKOUT_RULES))})"
            )
        allowed = WORKOUT_RULES[code].allowed
        if policy not in allowed:
            raise TextError(
                f"recovery.rules.{code}: {policy!r} is not possible; expected {' or '.join(allowed)}"
            )
    return {code: rules.get(code, rule.default) for code, rule in WORKOUT_RULES.items()}
