"""What `stresskit check` tells: what was read, what was left out and why, and how periods line up."""

from __future__ import annotations

from typing import Any

import pandas as pd
from rich.text import Text

from stresskit.core.errors import DataError
from stresskit.core.period import format_period
from stresskit.core.values import Portfolio, RiskSet
from stresskit.hazard.at_risk import cause_rows
from stresskit.panel.result import loans_alike
from stresskit.report.check_scenarios import print_scenarios, scenario_tables
from stresskit.report.terminal import amount, console, show, show_cautions
from stresskit.runs.api import Prepared, StudyFile
from stresskit.runs.cautions import assumptions, without_feature
from stresskit.runs.tables import finding_table
from stresskit.scenario.checks import path_findings


def check_report(file: StudyFile, data: Prepared) -> dict[str, Any]:
    """Everything the check found, as plain values and frames (what ``--json`` prints)."""
    risk, book = data.loans.risk_set, data.loans.portfolio
    facts = {
        "study": file.study.study,
        "as_of": file.study.as_of,
        "frequency": file.study.frequency,
        **_numbers(risk, book),
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
    if "count" in left:
        left, size = left.assign(count=loans_alike(left)), ("count", "sum")
    else:
        size = ("loan", "size")
    reasons = (
        left.groupby("reason", sort=True).agg(loans=size, balance=("balance", "sum")).reset_index()
        if len(left)
        else pd.DataFrame({"reason": [], "loans": [], "balance": []})
    )
    lost = feature_rows(file, data)
    for cause, rows in lost.items():
        facts[f"rows_{cause}"] = rows["all_rows"]
        facts[f"rows_without_feature_{cause}"] = rows["rows"]
        facts[f"events_without_feature_{cause}"] = rows["events"]
    hazards = file.study.hazards.items()
    told = [t for c, h in hazards if c in lost for t in without_feature(c, h.macro_features(), **lost[c])]
    return {
        "facts": facts,
        "reconciliation": data.loans.reconciliation,
        "findings": finding_table(data.loans.findings),
        "alignment": data.alignment,
        "not_projected": reasons,
        "scenarios": path_findings(data.paths, data.history) if data.history is not None else [],
        "assumptions": [*told, *assumptions(file.study)],
        **scenario_tables(file, data),
    }


def _numbers(risk: RiskSet, book: Portfolio) -> dict[str, float]:
    """Loans, rows and events at risk and loans of the book: by the counts of lines where a study names them."""
    if not risk.count:
        events = {f"events_{c}": risk.events(c) for c in risk.causes}
        return {
            "loans_at_risk": risk.n_loans,
            "rows_at_risk": risk.n_rows,
            **events,
            "book_loans": book.n_loans,
        }
    length = risk.stay_exit - risk.stay_entry
    return {
        "lines_at_risk": risk.n_loans,
        "loans_at_risk": risk.loans_alike,
        "rows_at_risk": float(risk.weight @ length),
        **{f"events_{c}": risk.weight_of(c) for c in risk.causes},
        "book_lines": book.n_loans,
        "book_loans": float(book.counts.sum()),
    }


def feature_rows(file: StudyFile, data: Prepared) -> dict[str, dict[str, float]]:
    """Cause -> rows and events at risk that its fit leaves out because a macro feature is not known, and all of them."""
    out: dict[str, dict[str, float]] = {}
    risk = data.loans.risk_set
    for cause, spec in file.study.hazards.items():
        needed = spec.macro_features()
        if not needed or cause not in risk.causes:
            continue
        try:
            whole = cause_rows(risk, cause)
        except DataError:
            continue  # every row ended in another cause
        try:
            known = cause_rows(risk, cause, data.features, needed)
            rows, events = known.rows_without_feature, known.events_without_feature
        except DataError:  # no row is left: a fit stops at this, a check tells it
            rows, events = whole.total_weight, whole.event_weight
        out[cause] = {
            "rows": rows, "all_rows": whole.total_weight, "events": events, "all_events": whole.event_weight,
        }  # fmt: skip
    return out


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
    print_scenarios(outcome)
    if outcome["scenarios"] or outcome["assumptions"]:
        show_cautions([*outcome["scenarios"], *outcome["assumptions"]])
