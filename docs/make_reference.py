"""Write docs/study-reference.md from the models that read study and scenario text.

Run from anywhere: ``python docs/make_reference.py``. tests/docs compares the committed page with what this gives.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any, Literal, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from stresskit.spec import shape
from stresskit.spec.base import Identifier, Name, PeriodText, Words
from stresskit.spec.imports import ImportMapping
from stresskit.spec.scenario import DateText, Percent, ScenarioSpec, TableMapping
from stresskit.spec.study import Study

PAGE = Path(__file__).with_name("study-reference.md")
ROOTS: Mapping[str, tuple[type[BaseModel], ...]] = {
    "Study file": (Study,),
    "Scenario file": (ScenarioSpec, TableMapping),
    "Import mapping": (ImportMapping,),
}
HEAD = """# Study and scenario files: every key

<!-- Written by docs/make_reference.py from the models in stresskit/spec. Change the models, then run it. -->

A study is one YAML file. Each scenario is a YAML file of its own, named in the study under `scenarios`.
File names in a study are relative to the study file; a table named in a scenario is relative to the scenario file. An
[import mapping](import.md) turns a published table into scenario files.

- A key that is not listed here is an error, and so is a key that is written twice.
- Types are not converted: `"5"` is text, `5` is a number.
- A *period* is a month or a quarter: `2025-12`, `2025Q4`, `2025 Q4` or a date such as `2025-12-31`.
  A date means the period that holds it. In a monthly study a quarter label means the quarter's last month.
- An *identifier* starts with a letter and holds letters, digits, `_` and `-` only, at most 80 characters.
- A *percent* is a relative change with a percent sign: `-24%`. A bare number is refused, because -24 and -0.24 look alike.
- A *date* is a day of the calendar as `2025-11-28`.
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
    words_of(DateText): "date",
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
    "Var": "macro.var",
    "HazardSpec": "hazards, one hazard",
    "AgeTerm": "term: age",
    "LoanTerm": "term: loan column",
    "MacroTerm": "term: macro feature",
    "InteractionTerm": "term: interaction",
    "OffsetTerm": "term: offset",
    "BalanceOverValue": "moving: balance over value",
    "OverValue": "balance_over_value",
    "IndexByColumn": "index by a loan column",
    "BalanceOverLimit": "moving: balance over limit",
    "OverLimit": "balance_over_limit",
    "CurrentRate": "moving: rate",
    "NoArguments": "rate, without arguments",
    "RateLess": "moving: rate less a variable",
    "Less": "rate_less",
    "PaymentOver": "moving: payment over income",
    "OverIncome": "payment_over",
    "PeriodsSince": "moving: periods since an event",
    "Since": "periods_since",
    "Rates": "rates",
    "FloatingRate": "a floating rate",
    "Loss": "loss",
    "Exposure": "loss.exposure",
    "Schedule": "loss.exposure, one schedule",
    "CollateralLgd": "loss.lgd, collateral",
    "Collateral": "loss.lgd.collateral",
    "ConstantLgd": "loss.lgd, one value",
    "SegmentLgd": "loss.lgd, by a loan column",
    "Reference": "a PD away from the scenarios",
    "PastDue": "staging.past_due",
    "Staging": "staging",
    "Capital": "capital",
    "YearView": "years",
    "Floors": "adjustments.floors",
    "Overlay": "adjustments.overlays, one overlay",
    "Adjustments": "adjustments",
    "ScenarioSpec": "scenario",
    "GivenValues": "path: given values",
    "AddTo": "path: add to another scenario",
    "MultiplyBy": "path: multiply another scenario",
    "PeakAndBack": "path: peak and back",
    "GrowthPath": "path: growth",
    "HoldAt": "path: hold",
    "ReachLevel": "path: reach a level",
    "Revert": "afterwards: revert",
    "GrowOn": "afterwards: grow on",
    "BackTo": "afterwards: back to another scenario",
    "TableMapping": "scenario from a published table",
    "ImportMapping": "import",
    "ImportedVariable": "import.variables, one variable",
    "ImportedScenario": "import.scenarios, one scenario",
    "ImportedHistory": "import.history, rows that stand apart",
    "JoinedHistory": "import.join",
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


def _default(info: FieldInfo, *, percent: bool) -> str:
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
    if percent:
        return f"`{100 * value:g}%`"
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
        kind = _cell(type_text(shape.fields(model)[key]))
        default = _default(info, percent=kind == "percent")
        yield f"| `{key}` | {kind} | {default} | {_cell(info.description or '')} |"
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


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8", newline="\n")
