"""Two runs compared as one page: the change of the loss, what it comes from, and every table that differs."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter, MaxNLocator

from stresskit.repeat.compare import Comparison
from stresskit.report import numbers as num
from stresskit.report.environment import render
from stresskit.report.picture import Key, Panel, Picture
from stresskit.report.reading import name_of
from stresskit.report.style import stand_in
from stresskit.report.svg import canvas, finish, settings
from stresskit.report.tables import Table, columns, from_frame, row
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import PORTFOLIO, WEIGHTED

_MOST_PANELS = 6
_ROWS = 200
#: Tables of a comparison besides losses and bridge, in the order in which they are shown.
_TITLES: Mapping[str, str] = {
    "inputs": "Inputs", "reconciliation": "Reconciliation", "scenario_values": "Scenario values",
    "coefficients": "Coefficients", "facts": "Versions and settings",
}  # fmt: skip


@dataclass(frozen=True, slots=True)
class Section:
    """One table that differs, None when it does not; what to know about it."""

    key: str
    title: str
    words: str
    table: Table | None


def comparison_page(found: Comparison) -> str:
    """The page as text. The same comparison gives the same bytes."""
    losses = found.tables["losses"]
    study = found.study[0] if found.study[0] == found.study[1] else " and ".join(found.study)
    dates = (
        f"as of {found.as_of[0]}"
        if found.as_of[0] == found.as_of[1]
        else f"as of {' and '.join(found.as_of)}"
    )
    return render(
        "compare.html.j2",
        title=f"{study}: two runs compared",
        heading=study,
        dates=dates,
        sentence=found.sentence,
        a=str(found.a),
        b=str(found.b),
        book=loss_table(losses[losses["by"] == ""], "The whole book by scenario", segment=False),
        segments=[
            loss_table(part, f"By {str(by).replace('+', ' and ')}", segment=True)
            for by, part in losses[losses["by"] != ""].groupby("by", sort=False)
        ],
        waterfall=None if found.bridge is None else _waterfall(found.bridge.table, found.bridge.steps),
        steps=None if found.bridge is None else step_table(found.bridge.table),
        bridge_words=bridge_words(found),
        no_bridge=found.no_bridge,
        sections=_sections(found),
        texts=found.texts,
        cautions=found.cautions,
        safety=STANDING,
    )


def bridge_words(found: Comparison) -> str:
    """How the bridge was made, in two or three sentences."""
    if found.bridge is None:
        return ""
    words = (
        "Run b's inputs, models, scenarios and the rest of its study take the place of run a's one after the other, in this "
        "order, and the book is projected again each time. The effects add up to the whole change; another order would "
        "share it out differently."
    )
    return f"{words} {found.bridge.joined}." if found.bridge.joined else words


def loss_table(losses: pd.DataFrame, title: str, *, segment: bool) -> Table:
    """Expected losses of both runs with the change, absolute and relative."""
    heads = ["scenario", *(["segment"] if segment else [])]
    names = ("12-month EL a", "b", "change", "relative", "lifetime EL a", "b", "change", "relative")
    rows = []
    for r in losses.to_dict("records"):
        cells = [name_of(str(r["scenario"])), *([str(r["segment"])] if segment else [])]
        for m in ("el_12m", "el_lifetime"):
            a, b, change, relative = (float(r[f"{m}_{what}"]) for what in ("a", "b", "change", "relative"))
            cells += [
                num.amount(a),
                num.amount(b),
                num.signed(num.amount(change)),
                num.signed(num.percent(relative, 1)),
            ]
        rows.append(row(*cells))
    return Table(title, columns(*heads, *names, words=len(heads)), tuple(rows))


def step_table(bridge: pd.DataFrame) -> Table:
    """The whole book's bridge: a row per step, two columns per scenario."""
    whole = bridge[bridge["segment"] == PORTFOLIO]
    names = list(dict.fromkeys(whole["scenario"]))
    last = int(whole["step"].max())
    rows = []
    for step, part in whole.groupby("step", sort=True):
        values = part.set_index("scenario")
        cells = [str(part["what"].iloc[0])]
        for name in names:
            for m in ("el_12m", "el_lifetime"):
                text = num.amount(values.loc[name, m])
                cells.append(text if step in (0, last) else num.signed(text))
        rows.append(row(*cells))
    heads = [f"{name_of(n)}, {m}" for n in names for m in ("12 months", "lifetime")]
    return Table(
        "Steps from run a to run b, expected loss of the whole book", columns("step", *heads), tuple(rows)
    )


def _waterfall(bridge: pd.DataFrame, steps: Sequence[str]) -> Picture:
    whole = bridge[(bridge["segment"] == PORTFOLIO) & (bridge["by"] == "")]
    names = [n for n in dict.fromkeys(whole["scenario"]) if n != WEIGHTED][:_MOST_PANELS]
    divisor, word = num.scale(float(whole["el_lifetime"].abs().max()))
    panels = []
    for k, name in enumerate(names):
        mine = whole[whole["scenario"] == name].sort_values("step")
        values, labels = mine["el_lifetime"].to_numpy(dtype=np.float64), list(mine["what"])
        told = ", ".join(
            f"{w} {num.signed(num.short(v))}" for w, v in zip(labels[1:-1], values[1:-1], strict=True)
        )
        alt = f"Lifetime expected loss of {name}: {num.short(values[0])} in run a; {told}; {num.short(values[-1])} in run b."
        panels.append(
            Panel(
                name_of(name),
                f"lifetime expected loss, {word}",
                _bars(values / divisor, labels, f"wf{k}", alt),
            )
        )
    keys = (
        Key("diamond", "accent", "the runs"),
        Key("columns", "warn", "more loss"),
        Key("columns", "good", "less loss"),
    )
    return Picture(
        "bridge",
        "From run a (top) to run b (bottom), step by step; the axis does not begin at zero.",
        tuple(panels),
        (),
        (),
        keys,
    )


def _bars(values: np.ndarray[Any, np.dtype[np.float64]], labels: Sequence[str], key: str, alt: str) -> Markup:
    """Run a as a point, then each step as a bar that begins where the last one ended, then run b as a point.

    The axis need not begin at zero: lengths of bars are changes, places of points are levels.
    """
    width, height, margin = 450, 62 + 28 * len(labels), 138
    with settings():
        figure, axes = canvas(width, height)
        axes.set_position((margin / width, 30 / height, 1 - (margin + 22) / width, 1 - 40 / height))
        ends = np.cumsum(values[:-1])
        last = len(labels) - 1
        for i in range(1, last):
            colour = stand_in("warn" if values[i] > 0 else "good")
            axes.barh(i, values[i], left=ends[i - 1], height=0.6, color=colour, linewidth=0, zorder=3)
        for i, at in enumerate(ends):
            axes.plot([at, at], [i, i + 1], color=stand_in("soft"), linewidth=1, zorder=2)
        axes.plot(
            [values[0], values[-1]], [0, last], linestyle="none", marker="D", markersize=9,
            color=stand_in("accent"), markeredgewidth=0, zorder=4,
        )  # fmt: skip
        low, high = float(ends.min()), float(ends.max())
        pad = 0.08 * ((high - low) or abs(high) or 1.0)
        axes.set_xlim(low - pad, high + pad)
        axes.set_ylim(last + 0.6, -0.6)
        axes.set_yticks(range(len(labels)), [_two_lines(w) for w in labels])
        axes.xaxis.set_major_locator(MaxNLocator(4))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:,g}"))
        return finish(figure, key=key, alt=alt)


def _two_lines(words: str) -> str:
    return words.replace(" and ", "\nand ", 1) if len(words) > 18 else words


def _sections(found: Comparison) -> list[Section]:
    words = {
        "inputs": "Files by the first twelve characters of their sha256.",
        "reconciliation": "Rows, loans and events read, used and left out.",
        "scenario_values": "For every path that differs its largest change, and when.",
    }
    return [Section(k, title, words.get(k, ""), differing_table(found, k)) for k, title in _TITLES.items()]


def differing_table(found: Comparison, key: str) -> Table | None:
    """The rows of a table that differ, as people read them; None when none does."""
    frame = found.tables[key]
    shown = frame[frame["differs"]].drop(columns="differs")
    if not len(shown):
        return None
    if key == "reconciliation":
        shown = _arrows(shown)
    formats = {
        str(c): num.amount if c in ("periods", "only_a", "only_b") else _four
        for c in shown
        if pd.api.types.is_numeric_dtype(shown[c])
    }
    return from_frame(
        shown, _TITLES[key], formats=formats, names={"coef_a": "coefficient a", "coef_b": "coefficient b"},
        rest=f"{key}.csv", most=_ROWS,
    )  # fmt: skip


def _four(value: Any) -> str:
    return num.plain(value, 4)


def _arrows(frame: pd.DataFrame) -> pd.DataFrame:
    """Counts of both runs in one cell each."""
    counts = [str(c).removesuffix("_a") for c in frame if str(c).endswith("_a")]
    cells = {
        c: [
            num.amount(a) if a == b else f"{num.amount(a)} → {num.amount(b)}"
            for a, b in zip(frame[f"{c}_a"], frame[f"{c}_b"], strict=True)
        ]
        for c in counts
    }
    return frame[["what", "reason"]].assign(**cells)
