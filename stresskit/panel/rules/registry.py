"""The list of quality rules. Its order is the order of reasons: a row is left out for the first that applies.

To add a rule: define a Rule in the module of its family with a condition over the relation of its step
(see base.py), put it into RULES at its place, and add a case to tests/panel/test_rules.py.
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping

from stresskit.core.errors import TextError
from stresskit.panel.rules import amounts, content, counts, dates, lookahead, outcomes, reading, sequence
from stresskit.panel.rules.base import Rule

RULES: tuple[Rule, ...] = (
    reading.MISSING_LOAN,
    reading.UNREADABLE_PERIOD,
    reading.AFTER_AS_OF,
    reading.DUPLICATE_EXACT,
    reading.DUPLICATE_CONFLICTING,
    reading.UNREADABLE_DATE,
    dates.MISSING_ORIGINATION,
    dates.PERIOD_BEFORE_ORIGINATION,
    dates.EVENT_BEFORE_ORIGINATION,
    outcomes.UNKNOWN_STATUS,
    outcomes.TWO_EXITS,
    outcomes.EVENT_WITHOUT_DATE,
    outcomes.DATE_WITHOUT_EVENT,
    outcomes.LAST_SEEN_MISSING,
    outcomes.UNDATED_PAYOFF,
    outcomes.DEFAULT_AFTER_MATURITY,
    reading.UNREADABLE_VALUE,
    dates.TERM_NOT_POSITIVE,
    outcomes.UNDATED_PAYOFF_WITHOUT_END,
    dates.ORIGINATION_CHANGES,
    counts.COUNT_NOT_POSITIVE,
    counts.COUNT_CHANGES,
    content.STATIC_CHANGES,
    content.MISSING_CATEGORY,
    content.MISSING_VALUE,
    content.CATEGORY_ONCE,
    sequence.AFTER_OBSERVED_UNTIL,
    sequence.AFTER_EVENT,
    dates.PERIOD_AFTER_MATURITY,
    amounts.MISSING_AMOUNT,
    amounts.NEGATIVE_AMOUNT,
    amounts.RATE_IMPLAUSIBLE,
    outcomes.PAYOFF_AT_MATURITY,
    outcomes.NEVER_AT_RISK,
    sequence.EVENT_IN_FIRST_ROW,
    sequence.ENTRY_ROW,
    sequence.EVENT_AFTER_GAP,
    sequence.AFTER_GAP,
    sequence.NO_PREVIOUS_ROW,
    content.MISSING_CATEGORY_IN_ROW,
    content.MISSING_VALUE_IN_ROW,
    lookahead.LOOK_AHEAD,
    content.SEGMENT_WITHOUT_DEFAULTS,
    content.BOOK_DUPLICATE,
    content.BOOK_CONTRADICTS_HISTORY,
    dates.CONTRACT_END_FAR,
    content.CATEGORY_NOT_IN_HISTORY,
)


def policies(rules: Mapping[str, str], from_study: Mapping[str, str]) -> dict[str, str]:
    """Policy of every rule: its default, or what loans.rules says, or what another place of the study says.

    rules       loans.rules: code -> policy
    from_study  code -> policy as the study words it, for rules with a place of their own
    Raises TextError for a code that does not exist or a policy that the rule does not allow.
    """
    by_code = {rule.code: rule for rule in RULES}
    unknown = [code for code in rules if code not in by_code]
    if unknown:
        near = difflib.get_close_matches(unknown[0], by_code, n=1)
        hint = f" Did you mean {near[0]!r}?" if near else ""
        raise TextError(f"loans.rules: no rule {unknown[0]!r}.{hint} Rules: {', '.join(sorted(by_code))}")
    for code, policy in rules.items():
        rule = by_code[code]
        if rule.study is not None:
            raise TextError(f"loans.rules.{code}: this is decided by {rule.study}")
        if policy not in rule.allowed:
            raise TextError(
                f"loans.rules.{code}: {policy!r} is not possible; expected {' or '.join(rule.allowed)}"
            )
    return {rule.code: from_study.get(rule.code) or rules.get(rule.code) or rule.default for rule in RULES}
