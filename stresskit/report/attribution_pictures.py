"""Pictures of an attribution: waterfalls over variables and channels, and both by calendar year."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter, MaxNLocator

from stresskit.report import numbers as num
from stresskit.report.figures import WIDE
from stresskit.report.picture import Key, Panel, Picture
from stresskit.report.style import N_SCENARIO_COLOURS, stand_in
from stresskit.report.svg import canvas, finish, settings
from stresskit.report.waterfall import LESS, MORE, TOTAL, waterfall_rows
from stresskit.runs.records import Analysis

#: Parts drawn by themselves in a stack; the smallest of more are put together.
_MOST_PARTS = N_SCENARIO_COLOURS


def attribution_pictures(found: Analysis) -> tuple[Picture, ...]:
    """Waterfalls, then parts by calendar year."""
    return (_waterfalls(found), *_years(found))


def _waterfalls(found: Analysis) -> Picture:
    start, end = str(found.facts["from"]), str(found.facts["to"])
    before, after = float(found.facts["loss_from"]), float(found.facts["loss_to"])
    panels = []
    for table, column, title in (
        ("variables", "variable", "By macro variable"),
        ("channels", "channel", "By channel"),
    ):
        frame = found.table(table)
        frame = frame[(frame[column] != "difference") & (frame["el_lifetime"] != 0.0)]
        parts = [(str(n), float(v)) for n, v in zip(frame[column], frame["el_lifetime"], strict=True)]
        rows, axis, word = waterfall_rows((start, before), parts, (end, after))
        panels.append(Panel(title, f"lifetime expected loss, {word}", Markup(""), "", rows, axis))
    caption = (
        f"From the loss in {start} to the loss in {end}. Each bar begins where the one before ends; its length is the Shapley share, which "
        "does not depend on the order of the bars."
    )
    keys = (
        Key("band", TOTAL, "loss of a scenario"),
        Key("square", MORE, "adds"),
        Key("square", LESS, "takes away"),
    )
    return Picture("attribution-waterfall", caption, tuple(panels), (), keys=keys)


def _years(found: Analysis) -> tuple[Picture, ...]:
    """A picture each, since the parts have legends of their own."""
    out = []
    for kind, title in (("variables", "By macro variable"), ("channels", "By channel")):
        frame = found.table(f"years_{kind}")
        columns = [c for c in frame.columns if c not in ("year", "el_before", "el_after", "el_difference")]
        parts = _largest(
            {c.removeprefix("el_").replace("_", " "): frame[c].to_numpy(dtype=float) for c in columns}
        )
        total = frame["el_difference"].to_numpy(dtype=float)
        keep = _until(total)
        years = frame["year"].to_numpy(dtype=float)[:keep]
        parts = {n: v[:keep] for n, v in parts.items()}
        divisor, word = num.scale(float(np.abs(total).max(initial=0.0)))
        colours = [f"s{k}" if n != _REST else "band" for k, n in enumerate(parts)]
        words = _in_words(frame)
        svg = _stack(
            years,
            parts,
            colours,
            total[:keep],
            divisor,
            key=f"attribution-{kind}",
            alt=f"{title}, by calendar year. {words}",
        )
        keys = (
            *(Key("square", c, n) for n, c in zip(parts, colours, strict=True)),
            Key("line", "ink", "difference"),
        )
        panel = Panel(f"{title} and calendar year of the default", f"expected loss, {word}", svg, words)
        caption = "What each part adds to the loss of a year (above the line) or takes from it (below); the dark line is what is left of both."
        out.append(Picture(f"attribution-years-{kind}", caption, (panel,), (), keys=keys))
    return tuple(out)


_REST = "the rest"


def _largest(parts: dict[str, np.ndarray]) -> dict[str, np.ndarray]:
    """The largest parts by their sum of sizes, the rest put together."""
    order = sorted(parts, key=lambda n: -float(np.abs(parts[n]).sum()))
    if len(order) <= _MOST_PARTS:
        return {n: parts[n] for n in order}
    kept = {n: parts[n] for n in order[: _MOST_PARTS - 1]}
    rest = np.sum([parts[n] for n in order[_MOST_PARTS - 1 :]], axis=0)
    return kept | {_REST: rest}


def _until(total: np.ndarray) -> int:
    """Years up to the last one that can be seen."""
    seen = np.flatnonzero(np.abs(total) > 2e-3 * np.abs(total).max(initial=0.0))
    return int(seen[-1]) + 1 if seen.size else total.size


def _in_words(frame: pd.DataFrame) -> str:
    worst = frame.iloc[int(np.argmax(frame["el_difference"].abs().to_numpy()))]
    return f"Largest difference in {int(worst['year'])}: {num.signed(num.amount(worst['el_difference']))}."


def _stack(
    years: np.ndarray,
    parts: dict[str, np.ndarray],
    colours: Sequence[str],
    total: np.ndarray,
    divisor: float,
    *,
    key: str,
    alt: str,
) -> Markup:
    """Parts above 0 stacked upwards, those below downwards, and their sum."""
    with settings():
        figure, axes = canvas(*WIDE)
        up, down = np.zeros(years.shape), np.zeros(years.shape)
        for values, colour in zip(parts.values(), colours, strict=True):
            height = values / divisor
            axes.bar(
                years,
                height,
                0.7,
                bottom=np.where(height >= 0, up, down),
                color=stand_in(colour),
                linewidth=0,
                zorder=2,
            )
            up, down = up + np.maximum(height, 0.0), down + np.minimum(height, 0.0)
        axes.axhline(0, color=stand_in("soft"), linewidth=1)
        axes.plot(
            years, total / divisor, color=stand_in("ink"), linewidth=1.8, marker="o", markersize=4, zorder=3
        )
        axes.xaxis.set_major_locator(MaxNLocator(nbins=min(8, max(1, years.size)), integer=True))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{round(y, 6):g}".replace("-", "−")))
        return finish(figure, key=key, alt=alt)
