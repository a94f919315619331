"""Result tables for the terminal: rounded, with units, no wider than it; plain text when not a terminal.

What comes from data is shown as the characters that it is made of: no escape sequence and no markup in a
name has any effect.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd
from rich import box
from rich.console import Console
from rich.measure import Measurement
from rich.table import Table
from rich.text import Text

from stresskit.core.words import visible
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
    return visible(str(value))


#: Longest text in a column that is not broken into lines.
_UNBROKEN = 24


def show(
    frame: pd.DataFrame,
    *,
    title: str,
    formats: dict[str, Callable[[Any], str]] | None = None,
    names: dict[str, str] | None = None,
    to: Console | None = None,
    spare: Sequence[str] = (),
    rest: str = "",
) -> None:
    """Print a frame as a table; numbers to the right.

    Where it is wider than the terminal, columns of ``spare`` are left out one after the other, which a line below says
    (``rest``: where they are); what is still too wide comes in parts that begin with the same first column.
    """
    out = to or console()
    frame = frame.set_axis([str(c) for c in frame.columns], axis=1)
    shapes = {str(c): (formats or {}).get(str(c), text) for c in frame.columns}
    heads = {str(c): (names or {}).get(str(c), str(c)) for c in frame.columns}
    kept = [str(c) for c in frame.columns]
    for column in spare:
        if _fits(frame[kept], shapes, heads, out):
            break
        kept = [c for c in kept if c != column]
    parts = _parts(frame[kept], shapes, heads, out)
    for k, columns in enumerate(parts):
        table = _table(frame[columns], shapes, heads, out)
        table.title = Text(visible(title) + (" (continued)" if k else ""))
        out.print(table)
    dropped = [visible(heads[str(c)]) for c in frame.columns if str(c) not in kept]
    if dropped:
        out.print(
            Text(f"Not shown for lack of room: {', '.join(dropped)}{f' (see {rest})' if rest else ''}.\n")
        )


def _parts(
    frame: pd.DataFrame, shapes: Mapping[str, Callable[[Any], str]], heads: Mapping[str, str], out: Console
) -> list[list[str]]:
    """Columns of each table to print: as many as fit, the first column in each."""
    first = [str(c) for c in frame.columns[:1]]
    parts = [first]
    for column in map(str, frame.columns[1:]):
        if len(parts[-1]) > 1 and not _fits(frame[[*parts[-1], column]], shapes, heads, out):
            parts.append(first)
        parts[-1] = [*parts[-1], column]
    return parts


def _fits(
    frame: pd.DataFrame, shapes: Mapping[str, Callable[[Any], str]], heads: Mapping[str, str], out: Console
) -> bool:
    wide = out.options.update(max_width=100_000)
    return Measurement.get(out, wide, _table(frame, shapes, heads, out)).minimum <= out.width


def _table(
    frame: pd.DataFrame, shapes: Mapping[str, Callable[[Any], str]], heads: Mapping[str, str], out: Console
) -> Table:
    table = Table(title_justify="left", box=box.SIMPLE_HEAD, pad_edge=False)
    cells = [[shapes[str(c)](v) for v in frame[c]] for c in frame.columns]
    for column, shown in zip(frame.columns, cells, strict=True):
        right = pd.api.types.is_numeric_dtype(frame[column])
        longest = max(map(len, shown), default=0)
        least = longest if right else min(longest, _UNBROKEN, max(8, out.width // 3))
        table.add_column(
            Text(visible(heads[str(column)])),
            justify="right" if right else "left",
            min_width=least or None,
            overflow="fold",
        )
    for row in zip(*cells, strict=True):
        table.add_row(*[Text(visible(c)) for c in row])
    return table


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
            spare=("loans", "el_12m", "lgd", "el_lifetime_adjusted", "pd_12m"),
            rest="summary.csv",
        )  # fmt: skip


def show_block(words: str) -> None:
    """Several lines as they are, control characters written out."""
    console().print(Text(visible(words, lines=True)))


def show_place(label: str, place: object) -> None:
    """``label`` and a path, on a line that is not broken."""
    print(visible(f"{label} {place}"))


def show_cautions(cautions: Sequence[str]) -> None:
    out = console()
    out.print(Text("Cautions"))
    for c in cautions:
        out.print(Text(f"  - {text(c)}"))


def as_json(value: object) -> str:
    """JSON text: frames as lists of records; what is no number (NaN, infinite) as null, which JSON has no word for."""
    return json.dumps(_plain(value), indent=2, ensure_ascii=False, allow_nan=False)


def _plain(value: Any) -> Any:
    """The value in the types that JSON has."""
    if isinstance(value, pd.DataFrame):
        columns = [str(c) for c in value.columns]
        return [
            dict(zip(columns, map(_plain, row), strict=True))
            for row in value.itertuples(index=False, name=None)
        ]
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple | set | frozenset | np.ndarray | pd.Series | pd.Index):
        return [_plain(v) for v in value]
    if value is None or isinstance(value, bool | str):
        return value
    if value is pd.NA or value is pd.NaT:
        return None
    if isinstance(value, np.bool_):
        return bool(value)
    if isinstance(value, int | np.integer):
        return int(value)
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    return str(value)
