"""Write docs/study-reference.md from the models that read study and scenario text, and docs/errors.md from the rules.

Run from anywhere: ``python docs/make_reference.py``. With ``--check`` nothing is written; the exit code
says whether the committed pages are what the code gives (tests/docs runs the same comparison).
"""

from __future__ import annotations

import sys
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Literal, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
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
from stresskit.spec import shape
from stresskit.spec.base import Identifier, Name, PeriodText, Words
from stresskit.spec.scenario import Percent, ScenarioSpec, TableMapping
from stresskit.spec.study import Study

PAGE = Path(__file__).with_name("study-reference.md")
ROOTS: Mapping[str, tuple[type[BaseModel], ...]] = {
    "Study file": (Study,),
    "Scenario file": (ScenarioSpec, TableMapping),
}
HEAD = """# Study and scenario files: every key

<!-- Written by docs/make_reference.py from the models in stresskit/spec. Change the models, then run it. -->

A study is one YAML file. Each scenario is a YAML file of its own, named in the study under `scenarios`.
File names in a study are relative to the study file; a table named in a scenario is relative to the scenario file.

- A key that is not listed here is an error, and so is a key that is written twice.
- Types are not converted: `"5"` is text, `5` is a number.
- A *period* is a month or a quarter: `2025-12`, `2025Q4`, `2025 Q4` or a date such as `2025-12-31`.
  A date means the period that holds it. In a monthly study a quarter label means the quarter's last month.
- An *identifier* starts with a letter and holds letters, digits, `_` and `-` only, at most 80 characters.
- A *percent* is a relative change with a percent sign: `-24%`. A bare number is refused, because -24 and -0.24 look alike.
- *Required* means that the study is refused without the key. Where the default is `-`, leaving the key out means "not used".
"""


def words_of(kind: Any) -> str:
    """What error messages call a type."""
    return next(item.words for item in shape.peel(kind)[1] if isinstance(item, Words))


#: How this page calls the types whose words in messages are long.
_SHORT = {
    words_of(Identifier): "identifier",
    words_of(Name): "text",
    words_of(PeriodText): "period",
    words_of(Percent): "percent",
}


def title(model: type[BaseModel]) -> str:
    """Heading of a model's section."""
    return _TITLES.get(model.__name__, model.__name__)


_TITLES = {
    "Study": "study",
    "Loans": "loans",
    "LoanColumns": "loans.columns",
    "PanelOutcome": "loans.outcome, a status column (panel)",
    "FlagOutcome": "loans.outcome, 0/1 columns (panel)",
    "SpellOutcome": "loans.outcome (spells)",
    "PortfolioSpec": "portfolio",
    "Macro": "macro",
    "MacroVariable": "macro.variables, one variable",
    "Feature": "macro.features, one feature",
    "HazardSpec": "hazards, one hazard",
    "AgeTerm": "term: age",
    "LoanTerm": "term: loan column",
    "MacroTerm": "term: macro feature",
    "InteractionTerm": "term: interaction",
    "OffsetTerm": "term: offset",
    "Loss": "loss",
    "Exposure": "loss.exposure",
    "ConstantLgd": "loss.lgd, one value",
    "SegmentLgd": "loss.lgd, by a loan column",
    "ScenarioSpec": "scenario",
    "GivenValues": "path: given values",
    "AddTo": "path: add to another scenario",
    "MultiplyBy": "path: multiply another scenario",
    "PeakAndBack": "path: peak and back",
    "Revert": "afterwards: revert",
    "TableMapping": "scenario from a published table",
}


def anchor(text: str) -> str:
    """The fragment that a Markdown renderer gives to a heading."""
    kept = "".join(c for c in text.lower() if c.isalnum() or c in " -_")
    return kept.replace(" ", "-")


def sections(root: type[BaseModel]) -> list[type[BaseModel]]:
    """``root`` and every model below it, each once, parents first."""
    found: list[type[BaseModel]] = []

    def visit(kind: Any) -> None:
        for member in shape.choices(kind):
            base, _ = shape.peel(member)
            if shape.is_model(base):
                if base not in found:
                    found.append(base)
                    for below in shape.fields(base).values():
                        visit(below)
            else:
                for below in get_args(base):
                    if below is not Ellipsis and get_origin(base) is not Literal:
                        visit(below)

    visit(root)
    return found


def type_text(kind: Any) -> str:
    """A type in words; models as links to their sections."""
    return " or ".join(dict.fromkeys(_one(member) for member in shape.choices(kind)))


def _one(kind: Any) -> str:
    base, extra = shape.peel(kind)
    for item in extra:
        if isinstance(item, Words):
            return _SHORT.get(item.words, item.words)
    if shape.is_model(base):
        return f"[{title(base)}](#{anchor(title(base))})"
    filled = ", not empty" if any(getattr(item, "min_length", None) for item in extra) else ""
    if get_origin(base) is Literal:
        return ", ".join(f"`{a}`" for a in get_args(base))
    if get_origin(base) is dict:
        key, value = get_args(base)
        return f"mapping of {type_text(key)} to {type_text(value)}{filled}"
    if get_origin(base) is tuple:
        item, *rest = get_args(base)
        many = "list" if rest == [Ellipsis] else "pair"
        inner = type_text(item)
        return f"{many}, each item {inner}{filled}" if " or " in inner else f"{many} of {inner}{filled}"
    return shape.describe(kind).removeprefix("a ")


def _default(info: FieldInfo) -> str:
    if info.is_required():
        return "required"
    if info.default_factory is not None:
        made = info.default_factory()  # type: ignore[call-arg]
        return "-" if not made else "its defaults"
    value = info.default
    if value is None or value == ():
        return "-"
    if isinstance(value, BaseModel):
        return "its defaults"
    if isinstance(value, bool):
        return f"`{str(value).lower()}`"
    return f"`{value:g}`" if isinstance(value, float) else f"`{value}`"


def _cell(text: str) -> str:
    return " ".join(text.split()).replace("``", "`").replace("|", "\\|")


def _section(model: type[BaseModel]) -> Iterator[str]:
    yield f"### {title(model)}\n"
    if model.__doc__:
        yield "\n\n".join(" ".join(p.split()).replace("``", "`") for p in model.__doc__.split("\n\n")) + "\n"
    yield "| key | type | default | meaning |\n|---|---|---|---|"
    for name, info in model.model_fields.items():
        key = info.alias or name
        yield f"| `{key}` | {_cell(type_text(shape.fields(model)[key]))} | {_default(info)} | {_cell(info.description or '')} |"
    yield ""


def page() -> str:
    """The whole page."""
    lines = [HEAD]
    seen: set[type[BaseModel]] = set()
    for heading, roots in ROOTS.items():
        lines.append(f"## {heading}\n")
        for root in roots:
            for model in sections(root):
                if model not in seen:
                    seen.add(model)
                    lines.extend(_section(model))
    return "\n".join(lines).rstrip() + "\n"


def undescribed() -> list[str]:
    """Keys without a meaning: ``Model.field``."""
    models = {m for roots in ROOTS.values() for root in roots for m in sections(root)}
    return sorted(
        f"{m.__name__}.{name}"
        for m in models
        for name, info in m.model_fields.items()
        if not info.description
    )


ERRORS_HEAD = """# Errors and quality rules

<!-- Written by docs/make_reference.py from stresskit/panel/rules and stresskit/core/errors.py. -->

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
    NumericError: "a fit or projection that cannot be trusted: no events, separation, terms that cannot be told apart, no convergence",
    CheckFailed: "a check that was asked for failed (no command of this version uses it)",
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
    "missing_value": "no value of a number that a hazard uses",
    "a rule's code": "the rule left the loan out",
}
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
    "lgd_missing": "loans whose value has no LGD under loss.lgd.values",
    "no_rows_at_risk": "no row of the loan history is left in which a loan was at risk",
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


def _sentence(words: str) -> str:
    return words[0].upper() + words[1:] + "."


def errors_page() -> str:
    """The whole page of errors."""
    codes = "".join(f"| {error.exit_code} | {words} |\n" for error, words in EXIT_CODES.items())
    rules = "\n".join(line for rule in RULES for line in _rule_section(rule))
    left = "".join(f"| {_code(code)} | {words} |\n" for code, words in LEFT_CODES.items())
    other = "".join(f"| {_code(code)} | {words} |\n" for code, words in OTHER_CODES.items())
    return ERRORS_HEAD + codes + RULES_HEAD + rules + "\n" + LEFT_HEAD + left + "\n" + OTHER_HEAD + other


def _code(code: str) -> str:
    return code if " " in code else f"`{code}`"


def generated() -> dict[Path, str]:
    """Page -> its text, for every page that this script writes."""
    return {PAGE: page(), PAGE.with_name("errors.md"): errors_page()}


def main() -> int:
    same = True
    for file, text in generated().items():
        if "--check" not in sys.argv[1:]:
            file.write_text(text, encoding="utf-8", newline="\n")
        elif not file.is_file() or file.read_text(encoding="utf-8") != text:
            same = False
            print(f"{file.name} is not what the code gives: run docs/make_reference.py")
    return 0 if same else 1


if __name__ == "__main__":
    sys.exit(main())
