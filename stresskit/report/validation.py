"""What `stresskit evidence` prints: verdicts, then the tables that fit a terminal."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import Any

import pandas as pd
from rich.text import Text

from stresskit.evidence.collect import Evidence
from stresskit.evidence.verdicts import Verdict
from stresskit.report.terminal import console, percent, show, text

Format = Callable[[Any], str]


def number(digits: int) -> Format:
    return lambda v: "-" if pd.isna(v) else f"{v:,.{digits}f}"


def p_value(v: Any) -> str:
    return "-" if pd.isna(v) else "<0.0001" if v < 1e-4 else f"{v:.4f}"


def mark(v: Any) -> str:
    return "*" if v else ""


@dataclass(frozen=True, slots=True)
class _Part:
    """One printed table: which columns, how, and which rows."""

    table: str
    title: str
    formats: Mapping[str, Format]
    rows: Callable[[pd.DataFrame], pd.Series[bool]] | None = None
    names: Mapping[str, str] = field(default_factory=dict)


_PARTS = (
    _Part(
        "totals",
        "Events against expected: total tests (p value: loans independent; by period: shocks of periods allowed for)",
        {"by": text, "groups": text, "chi2": number(1), "df": text, "p_value": p_value, "p_clustered": p_value,
         "shock_sd": percent},
        names={"p_value": "p value", "p_clustered": "p by period", "shock_sd": "shock of a period, sd"},
    ),
    _Part(
        "actual_expected",
        "Actual against expected events (by period: see the folder's actual_expected.csv)",
        {"by": text, "group": text, "at_risk": number(0), "events": number(0), "expected": number(1), "ratio": number(2),
         "actual_rate": percent, "lower": percent, "upper": percent, "fitted_rate": percent, "z_shock": number(1)},
        rows=lambda t: t["by"] != "period",
        names={"actual_rate": "actual rate", "fitted_rate": "fitted rate", "z_shock": "sd off"},
    ),
    _Part(
        "survival",
        "Observed (product limit) and fitted survival",
        {"age": text, "at_risk": number(0), "observed": percent, "lower": percent, "upper": percent, "fitted": percent,
         "z_shock": number(1)},
        rows=lambda t: t["age"] % 12 == 0,
        names={"z_shock": "sd off"},
    ),
    _Part(
        "autocorrelation",
        "Memory in the residuals of calendar periods",
        {"lag": text, "autocorrelation": number(2), "of_deviance": number(2), "band": number(2), "ljung_box": number(1),
         "p_value": p_value},
        names={"of_deviance": "of deviance residuals", "ljung_box": "Ljung-Box to here", "p_value": "p value"},
    ),
    _Part(
        "calibration",
        "Calibration on later periods of the fit to earlier ones",
        {"term": text, "ideal": number(0), "estimate": number(3), "lower": number(3), "upper": number(3), "p_value": p_value},
        names={"p_value": "p value"},
    ),
    _Part(
        "deciles",
        "Predicted and actual rate by tenth of the prediction, later periods",
        {"band": text, "at_risk": number(0), "events": number(0), "expected": number(1), "predicted": percent,
         "actual": percent, "lower": percent, "upper": percent},
    ),
    _Part(
        "auc",
        "AUC among loans under observation at the landmark, events within the horizon (periods); cases: an event counts for each landmark it follows",
        {"sample": text, "horizon": text, "auc": number(3), "lower": number(3), "upper": number(3), "cases": number(0),
         "event_periods": text},
    ),
    _Part(
        "lag_profile",
        "Log-likelihood at other lags (macro periods)",
        {"term": text, "lag": text, "behind": number(1), "behind_scaled": number(1), "coef": number(3), "se_period": number(3),
         "best": mark, "study": mark},
        names={"behind_scaled": "behind, shocks allowed for", "se_period": "se by period"},
    ),
    _Part(
        "stability",
        "Coefficients before and after",
        {"term": text, "before": number(3), "se_before": number(3), "after": number(3), "se_after": number(3), "z": number(1),
         "p_value": p_value, "held": mark},
        names={"p_value": "p value"},
    ),
)  # fmt: skip


def show_evidence(found: Evidence) -> None:
    """Verdicts of every cause, then its tables."""
    out = console()
    for cause in dict.fromkeys(v.cause for v in found.verdicts):
        out.print(Text(f"Evidence on the hazard of {text(cause)}"))
        for v in found.verdicts:
            if v.cause == cause:
                out.print(_lines(v))
        for part in _PARTS:
            table = found.tables.get(part.table)
            if table is not None:
                _show(table[table["cause"] == cause], part)


def _lines(v: Verdict) -> Text:
    return Text(f"  [{v.status}] {text(v.asked)}\n      {text(v.found)}")


def _show(table: pd.DataFrame, part: _Part) -> None:
    if part.rows is not None:
        table = table[part.rows(table)]
    if len(table):
        show(table[list(part.formats)], title=part.title, formats=dict(part.formats), names=dict(part.names))
