"""Result tables for the terminal: rounded, with units, plain text when not a terminal."""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from typing import Any

import pandas as pd
from rich import box
from rich.console import Console
from rich.table import Table
from rich.text import Text

from stresskit.report.reading import reference
from stresskit.runs.records import PORTFOLIO, StudyResult


def console() -> Console:
    """stdout; wide enough for a table when it is a file or a pipe."""
    out = Console(highlight=False, soft_wrap=False)
    return out if out.is_terminal else Console(highlight=False, width=160, no_color=True)


def percent(value: float, digits: int = 2) -> str:
    return "-" if value is None or math.isnan(value) else f"{100 * value:.{digits}f}%"


def amount(value: float) -> str:
    return "-" if value is None or math.isnan(value) else f"{value:,.0f}"


def text(value: object) -> str:
    """A cell as plain text: control characters made visible, so that data cannot steer a terminal."""
    if isinstance(value, float):
        return "-" if math.isnan(value) else f"{value:,.6g}"
    if isinstance(value, int) and not isinstance(value, bool):
        return f"{value:,}"
    return "".join(c if c.isprintable() else repr(c)[1:-1] for c in str(value))


def show(
    frame: pd.DataFrame,
    *,
    title: str,
    formats: dict[str, Callable[[Any], str]] | None = None,
    names: dict[str, str] | None = None,
    to: Console | None = None,
) -> None:
    """Print a frame as a table; numbers to the right."""
    table = Table(title=Text(title), title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False)
    for column in frame.columns:
        right = pd.api.types.is_numeric_dtype(frame[column])
        table.add_column(
            Text((names or {}).get(str(column), str(column))), justify="right" if right else "left"
        )
    for row in frame.itertuples(index=False):
        cells = [(formats or {}).get(str(c), text)(v) for c, v in zip(frame.columns, row, strict=True)]
        table.add_row(*[Text(c) for c in cells])
    (to or console()).print(table)


def show_summary(result: StudyResult) -> None:
    """Scenario by segment, the columns that fit a terminal, and the difference to the reference scenario."""
    rows = result.summary
    against = reference(result)
    order = [by for by in dict.fromkeys(rows["by"]) if "+" not in by]
    for by in order:
        part = rows[rows["by"] == by].copy()
        base = part[part["scenario"] == against].set_index("segment")["el_lifetime"]
        if part["scenario"].nunique() > 1:
            part["more"] = part["el_lifetime"] / part["segment"].map(base) - 1
        columns = [
            "scenario",
            "segment",
            "loans",
            "exposure",
            "pd_12m",
            "pd_lifetime",
            "lgd",
            "el_12m",
            "el_lifetime",
        ]
        columns += ["more"] if "more" in part else []
        columns += ["el_lifetime_adjusted"] if "el_lifetime_adjusted" in part else []
        show(
            part[columns if by else [c for c in columns if c != "segment"]],
            title=f"By {by}" if by else f"{result.study.study}, {PORTFOLIO} at {result.study.as_of}",
            formats={
                "exposure": amount, "pd_12m": percent, "pd_lifetime": percent, "lgd": percent,
                "el_12m": amount, "el_lifetime": amount, "el_lifetime_adjusted": amount, "more": lambda v: "-" if math.isnan(v) else f"{100 * v:+.1f}%",
            },
            names={
                "pd_12m": "PD 12m", "pd_lifetime": "PD lifetime", "lgd": "LGD", "el_12m": "EL 12m",
                "el_lifetime": "EL lifetime", "more": f"vs {against}", "el_lifetime_adjusted": "after adjustments",
            },
        )  # fmt: skip


def show_cautions(cautions: Sequence[str]) -> None:
    out = console()
    out.print(Text("Cautions"))
    for c in cautions:
        out.print(Text(f"  - {text(c)}"))


def as_json(value: object) -> str:
    """JSON text: frames as lists of records, NaN as null."""

    def plain(v: object) -> object:
        if isinstance(v, pd.DataFrame):
            return json.loads(v.to_json(orient="records"))
        return str(v)

    return json.dumps(value, default=plain, indent=2, ensure_ascii=False)
