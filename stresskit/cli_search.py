"""A search in the terminal: progress bar, table of the best, JSON. Imported only by its command."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import pandas as pd
from rich.text import Text

from stresskit.report.terminal import console, show, text
from stresskit.search.result import SearchResult


def show_search(result: SearchResult, *, best: int) -> None:
    """Notes, the best specifications with the reasons of those refused, references, the winner's YAML."""
    out = console()
    out.print(Text(f"Search {result.name}: macro terms of the {result.cause} hazard"))
    for note in result.notes:
        out.print(Text(f"  - {text(note)}"))
    refused = ", ".join(f"{rule} {n:,}" for rule, n in result.refused.items() if n)
    if refused:
        out.print(Text(f"  - Refused by rule (one may be refused by several): {refused}."))
    shown = result.table.head(best)
    windows = int(result.windows["cutoff"].nunique())
    show(
        _printable(shown, windows),
        title=f"{len(shown):,} of {result.tried:,} specifications tried, best first",
        formats=_FORMATS,
        names=_NAMES,
        to=out,
    )
    show(
        result.references[["specification", "coefficients", "aic", "oot_gain_total", "oot_gain_se"]],
        title="For comparison, not among those tried",
        formats=_FORMATS,
        names=_NAMES,
        to=out,
    )
    if result.winner:
        out.print(Text("First, for the study:"))
        out.print(Text(result.winner))


_NAMES = {
    "p_value": "p", "p_holm": "p Holm", "vif": "VIF", "aic": "AIC", "oot_gain_total": "gain", "oot_gain_se": "se",
    "windows": "windows", "signs": "signs", "reasons": "refused because",
}  # fmt: skip


def _p(value: float) -> str:
    return "-" if math.isnan(value) else "<0.0001" if value < 0.0001 else f"{value:.4f}"


def _fixed(digits: int) -> Callable[[float], str]:
    return lambda value: "-" if math.isnan(value) else f"{value:,.{digits}f}"


_FORMATS: dict[str, Callable[[Any], str]] = {
    "rank": lambda v: "-" if pd.isna(v) else str(v),
    "p_value": _p,
    "p_holm": _p,
    "vif": _fixed(1),
    "aic": _fixed(1),
    "oot_gain_total": _fixed(2),
    "oot_gain_se": _fixed(2),
}


def _printable(table: pd.DataFrame, windows: int) -> pd.DataFrame:
    columns = ["rank", "specification", "p_value", "p_holm", "vif", "aic", "oot_gain_total", "oot_gain_se"]
    out = table[columns].copy()
    out["windows"] = [f"{n}/{windows}" for n in table["windows_better"]]
    out["reasons"] = table["reasons"]
    return out


def as_plain(result: SearchResult) -> dict[str, Any]:
    """What ``--json`` prints."""
    return {
        "search": result.name,
        "cause": result.cause,
        "tried": result.tried,
        "tried_by_terms": {str(k): n for k, n in enumerate(result.counts, 1)},
        "accepted": result.accepted,
        "refused_by_rule": dict(result.refused),
        "notes": list(result.notes),
        "specifications": result.table,
        "terms": result.terms,
        "windows": result.windows,
        "features": result.features,
        "references": result.references,
        "winner": result.winner,
    }
