"""What `stresskit check` tells: what was read, what was left out and why, and how periods line up."""

from __future__ import annotations

from typing import Any

import pandas as pd
from rich.text import Text

from stresskit.core.period import format_period
from stresskit.report.terminal import amount, console, show, show_cautions
from stresskit.runs.api import Prepared, StudyFile
from stresskit.runs.cautions import assumptions
from stresskit.runs.tables import finding_table
from stresskit.scenario.checks import path_findings


def check_report(file: StudyFile, data: Prepared) -> dict[str, Any]:
    """Everything the check found, as plain values and frames (what ``--json`` prints)."""
    risk, book = data.loans.risk_set, data.loans.portfolio
    facts = {
        "study": file.study.study,
        "as_of": file.study.as_of,
        "frequency": file.study.frequency,
        "loans_at_risk": risk.n_loans,
        "rows_at_risk": risk.n_rows,
        **{f"events_{c}": risk.events(c) for c in risk.causes},
        "book_loans": book.n_loans,
        "book_balance": float(book.balance.sum()),
        "horizon": data.horizon,
        "scenarios": ", ".join(
            p.name + (f" (weight {p.weight:g})" if p.weight is not None else "") for p in data.paths
        ),
    }
    if data.history is not None:
        h = data.history
        facts["macro_history"] = (
            f"{format_period(h.start, h.frequency)} to {format_period(h.end, h.frequency)}"
        )
    left = data.loans.not_projected
    reasons = (
        left.groupby("reason", sort=True)
        .agg(loans=("loan", "size"), balance=("balance", "sum"))
        .reset_index()
        if len(left)
        else pd.DataFrame({"reason": [], "loans": [], "balance": []})
    )
    return {
        "facts": facts,
        "reconciliation": data.loans.reconciliation,
        "findings": finding_table(data.loans.findings),
        "alignment": data.alignment,
        "not_projected": reasons,
        "scenarios": path_findings(data.paths, data.history) if data.history is not None else [],
        "assumptions": assumptions(file.study),
    }


def print_check(outcome: dict[str, Any]) -> None:
    """The check's outcome as tables on stdout."""
    facts = pd.DataFrame(
        {"fact": list(outcome["facts"]), "value": [str(v) for v in outcome["facts"].values()]}
    )
    facts["value"] = [f"{v:,.0f}" if isinstance(v, int | float) else v for v in outcome["facts"].values()]
    show(facts, title="Study")
    show(outcome["reconciliation"], title="Reconciliation: in = used + left out", formats={"balance": amount})
    if len(outcome["findings"]):
        show(outcome["findings"], title="Findings of the quality rules")
    else:
        console().print(Text("No findings of the quality rules.\n"))
    if len(outcome["not_projected"]):
        show(outcome["not_projected"], title="Loans not projected", formats={"balance": amount})
    if len(outcome["alignment"]):
        show(outcome["alignment"], title="Alignment sample: which macro period a model period reads")
    if outcome["scenarios"] or outcome["assumptions"]:
        show_cautions([*outcome["scenarios"], *outcome["assumptions"]])
