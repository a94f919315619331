"""Small studies and hand-written loan files for the tests of the panel room."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import RiskSet
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import Finding, LoanData
from stresskit.spec.study import Study

MONTH = Frequency.MONTH
PANEL_COLUMNS = {
    "loan": "id", "period": "month", "origination": "opened", "maturity": "matures", "balance": "owed", "rate": "interest",
}  # fmt: skip
SPELL_COLUMNS = {
    "loan": "id",
    "origination": "opened",
    "term_months": "term",
    "amount": "lent",
    "rate": "interest",
}
PANEL_OUTCOME = {"column": "state", "default": ["D"], "payoff": ["P"]}
SPELL_OUTCOME = {
    "column": "state", "default": ["D"], "payoff": ["P"], "default_date": "failed", "payoff_date": "repaid",
}  # fmt: skip


def study(**changes: Any) -> Study:
    """A panel study at 2020-06; keys of ``changes`` replace top-level keys, ``loans`` is merged key by key."""
    loans = {"file": "loans.csv", "layout": "panel", "columns": PANEL_COLUMNS, "outcome": PANEL_OUTCOME}
    loans |= changes.pop("loans", {})
    data = {
        "study": "s",
        "frequency": "month",
        "as_of": "2020-06",
        "loans": loans,
        "hazards": {"default": {"terms": [{"age": "linear"}]}},
        "loss": {"lgd": {"constant": 0.4}},
        "scenarios": ["none.yaml"],
    }
    return Study.model_validate_json(json.dumps(data | changes))


def spells_study(*, outcome: dict[str, Any] | None = None, **changes: Any) -> Study:
    """A study of spells at 2020-06 with the book assumed from contracts."""
    loans = {"layout": "spells", "columns": SPELL_COLUMNS, "outcome": SPELL_OUTCOME | (outcome or {})}
    loans |= changes.pop("loans", {})
    return study(**({"portfolio": {"from": "contract"}} | changes), loans=loans)


def month(text: str) -> int:
    return parse_period(text, MONTH)


def months(first: str, n: int) -> list[str]:
    return [format_period(month(first) + i, MONTH) for i in range(n)]


def loan(
    name: str, first: str, states: str, *, opened: str | None = None, **fields: Any
) -> list[dict[str, Any]]:
    """Rows of one loan: one letter of ``states`` per month from ``first`` on; "." leaves the month out."""
    fixed = {"opened": opened or first, "matures": "2025-01", "owed": 100.0, "interest": 0.05} | fields
    return [
        {"id": name, "month": label, "state": state, **fixed}
        for label, state in zip(months(first, len(states)), states, strict=True)
        if state != "."
    ]


def background(**fields: Any) -> list[dict[str, Any]]:
    """Two clean loans, so that a file of one odd loan is not refused for want of defaults: 3 + 6 rows at risk."""
    return loan("bg-default", "2020-01", "CCD", **fields) + loan("bg-alive", "2020-01", "CCCCCC", **fields)


BACKGROUND_ROWS = 9


def run(rows: list[dict[str, Any]], with_background: bool = True, **changes: Any) -> LoanData:
    """prepare_loans on rows in memory."""
    frame = pd.DataFrame([*background(), *rows] if with_background else rows)
    return prepare_loans(study(**changes), base=Path("."), frame=frame)


def left_out(data: LoanData) -> dict[str, int]:
    """reason -> rows."""
    table = data.reconciliation
    part = table[table["what"] == "left out"]
    return dict(zip(part["reason"], part["rows"].astype(int), strict=True))


def used_rows(data: LoanData) -> int:
    return int(data.reconciliation.set_index("what").loc["used", "rows"])


def finding(data: LoanData, code: str) -> Finding:
    """The one finding with this code."""
    (found,) = [f for f in data.findings if f.code == code]
    return found


def codes(data: LoanData) -> set[str]:
    return {f.code for f in data.findings}


def stays(risk_set: RiskSet) -> list[tuple[str, int, int, int, int]]:
    """(loan, origin, entry, exit, cause) of every stay."""
    names = risk_set.loan_ids[risk_set.stay_loan]
    parts = (risk_set.stay_origin, risk_set.stay_entry, risk_set.stay_exit, risk_set.stay_cause)
    return [(str(n), *(int(p[i]) for p in parts)) for i, n in enumerate(names)]


def of_loan(data: LoanData, name: str) -> list[tuple[int, int, int]]:
    """(entry, exit, cause) of one loan's stays."""
    return [stay[2:] for stay in stays(data.risk_set) if stay[0] == name]


def not_projected(data: LoanData) -> dict[str, str]:
    return dict(zip(data.not_projected["loan"], data.not_projected["reason"], strict=True))


def assert_closes(data: LoanData) -> None:
    """in = used + left out in every column."""
    table = data.reconciliation
    total, parts = table[table["what"] == "in"].iloc[0], table[table["what"] != "in"]
    for column in ("rows", "loans", "events_default", "events_payoff"):
        assert parts[column].sum() == total[column], column
    assert abs(parts["balance"].sum() - total["balance"]) <= 1e-9 * max(1.0, abs(total["balance"]))
