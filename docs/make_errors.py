"""Write docs/errors.md from the tree of errors and the registry of quality rules.

Run from anywhere: ``python docs/make_errors.py``. tests/docs compares the committed page with what this gives.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from stresskit.core.errors import (
    CheckFailed,
    DataError,
    NumericError,
    StresskitError,
    TextError,
    UsageError,
)
from stresskit.panel.rules.base import BOTH, Rule
from stresskit.panel.rules.registry import RULES
from stresskit.recovery.rules import WORKOUT_RULES, WorkoutRule

PAGE = Path(__file__).with_name("errors.md")
HEAD = """# Errors and quality rules

<!-- Written by docs/make_errors.py from stresskit/panel/rules and stresskit/core/errors.py. -->

An error names what is wrong, where, how many cases there are and the first few, what was expected, and what to do. Add `--traceback` to a command to
see where in the program it arose.

## Exit codes

| code | meaning |
|---|---|
| 0 | done |
"""
EXIT_CODES = {
    StresskitError: "a bug in stresskit, said as such",
    UsageError: "wrong command, option or call, or a place that exists already or cannot be written",
    TextError: "study or scenario text, with file, line and column",
    DataError: "loans or macro data; every problem found is listed with a code",
    NumericError: "a fit or projection that cannot be trusted: no events, separation, terms that cannot be told apart, no convergence, "
    "or a failed gate that the study does not accept",
    CheckFailed: "a check that was asked for failed: `stresskit verify` found that a run does not come out again",
}
RULES_HEAD = """| 130 | interrupted |

## Quality rules of the loan history

`stresskit check` lists every rule that found something. A rule has a *policy*:

- `leave_out`: the rows (or loans) are not used. They appear in the reconciliation with the rule's code as reason.
- `keep`: they are used as the rule's text says, and reported.
- `reject`: the run stops with exit code 4, after all rules were looked at.

A study changes a policy by code, `rules: {after_gap: reject}` under `loans`, to one of those named as possible. A row that several rules would leave out
is counted once, under the first of them in the order below. Rules marked *panel* or *spells* apply to that layout only.

"""
LEFT_HEAD = """## Reasons why a loan is not projected

| reason | meaning |
|---|---|
"""
LEFT_CODES = {
    "defaulted": "defaulted by as_of",
    "paid_off": "paid off by as_of",
    "matured": "not seen at as_of, and its contract had ended",
    "not_seen_at_as_of": "its last row lies before as_of and its contract runs on: sold, or missing in the last delivery",
    "not_yet_originated": "originated after as_of (a book file may hold loans that begin in the next period)",
    "missing_maturity": "no contract end",
    "no_remaining_term": "the contract ends by as_of",
    "missing_balance": "no balance at as_of",
    "negative_balance": "a balance below zero",
    "missing_rate": "no rate",
    "rate_below_minus_100": "a rate of -100 % a year or below",
    "missing_value": "no value of a number that a hazard uses",
    "missing_term": "no value, or none that can be, of a contract term that the loan needs: margin, limit, balloon, collateral",
    "moving_unknown": "a moving column of a hazard cannot be computed at as_of",
    "a rule's code": "the rule left the loan out",
}
WORKOUTS_HEAD = """## Quality rules of workouts

Under `recovery.rules`, with the same policies. A case or cash flow that several rules would leave out is counted once, under the first of them; cash flows of a case that is left out
have the reason `case_left_out`.

"""
OTHER_HEAD = """## Other codes

Codes in square brackets in messages about macro tables, the risk set, prepared rows, curves and losses. These always stop the run.

| code | meaning |
|---|---|
"""
OTHER_CODES = {
    "row_width": "a line of a CSV table has more or fewer cells than its header",
    "column_doubled": "a table names a column twice",
    "column_missing": "a table lacks a column that the study names",
    "period_unreadable": "a period cannot be read",
    "period_doubled": "a macro table has two rows for a period",
    "period_missing": "a macro table has no row for a period between its first and last",
    "value_not_number": "a cell of a macro variable is not a number",
    "variable_empty": "a macro variable has no value at all",
    "value_blank": "a macro variable is blank after its first value, or anywhere in a scenario table",
    "unit_fraction": "a variable declared as fraction holds values above 1",
    "value_not_positive": "growth is taken of values at or below zero",
    "formula_without_value": "import: an Excel formula keeps no value",
    "cell_error": "import: an Excel cell holds an error such as #N/A",
    "unit_doubtful": "import: values look as if they were in another unit than declared",
    "unit_shown": "import: cells that Excel shows as percent, and so hold fractions, are declared as percent",
    "level_does_not_join": "import: an index or level does not join history, and the mapping does not say how it should",
    "value_not_finite": "import: growth leads to a value too large to compute",
    "lgd_missing": "loans whose value has no LGD under loss.lgd.values",
    "value_not_declared": "loans whose value of a column is not among the values that rates, loss.exposure or an index declare",
    "schedule_missing": "a supplied schedule lacks periods of projected loans",
    "schedule_doubled": "a supplied schedule has two rows for a loan and period",
    "balance_not_number": "a balance of a supplied schedule is not a number",
    "no_rows_at_risk": "no row of the loan history is left in which a loan was at risk",
    "several_rows_per_quarter": "a quarterly study, and loans of the panel have rows in several months of a quarter",
    "no_events": "a hazard is declared for a cause that never happens among the rows at risk",
    "age_twice": "prepared rows: a loan has the same age in two rows",
    "rows_after_exit": "prepared rows: a row follows the loan's exit",
    "origin_moves": "prepared rows: period minus age changes within a loan",
    "unknown_event": "an event is neither none nor a known cause",
    "weight_not_positive": "a weight is not a positive number",
    "exit_not_after_entry": "curves: an exit that does not come after its entry",
    "age_not_finite": "curves: an entry or exit that is no number",
}


def _rule_section(rule: Rule) -> Iterator[str]:
    only = "" if rule.layouts == BOTH else f" *{rule.layouts[0]}*"
    yield f"### {rule.code}\n"
    yield f"{_sentence(rule.says)}{' (' + rule.counts + ')' if rule.counts != 'rows' else ''}{only}\n"
    if rule.study is not None:
        yield f"- decided by `{rule.study}`; default `{rule.default}`"
    else:
        others = ", ".join(f"`{p}`" for p in rule.allowed if p != rule.default)
        yield f"- default `{rule.default}`; possible: {others}"
    for policy, words in (("leave_out", rule.left), ("keep", rule.kept)):
        if words and policy in rule.allowed:
            yield f"- `{policy}`: {words}"
    if rule.remedy:
        yield f"- {rule.remedy}"
    yield ""


def _workout_section(rule: WorkoutRule) -> Iterator[str]:
    yield f"### {rule.code}\n"
    yield f"{_sentence(rule.says)}\n"
    others = ", ".join(f"`{p}`" for p in rule.allowed if p != rule.default)
    yield f"- default `{rule.default}`" + (f"; possible: {others}" if others else "")
    if rule.kept and "keep" in rule.allowed:
        yield f"- `keep`: {rule.kept}"
    yield f"- {rule.remedy}"
    yield ""


def _sentence(words: str) -> str:
    return words[0].upper() + words[1:] + "."


def page() -> str:
    """The whole page."""
    codes = "".join(f"| {error.exit_code} | {words} |\n" for error, words in EXIT_CODES.items())
    rules = "\n".join(line for rule in RULES for line in _rule_section(rule))
    workouts = "\n".join(line for rule in WORKOUT_RULES.values() for line in _workout_section(rule))
    left = "".join(f"| {_code(code)} | {words} |\n" for code, words in LEFT_CODES.items())
    other = "".join(f"| {_code(code)} | {words} |\n" for code, words in OTHER_CODES.items())
    return (
        HEAD
        + codes
        + RULES_HEAD
        + rules
        + "\n"
        + WORKOUTS_HEAD
        + workouts
        + "\n"
        + LEFT_HEAD
        + left
        + "\n"
        + OTHER_HEAD
        + other
    )


def _code(code: str) -> str:
    return code if " " in code else f"`{code}`"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8", newline="\n")
