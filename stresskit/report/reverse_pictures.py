"""Pictures of a reverse stress test: the paths found beside others, and the figure over two variables."""

from __future__ import annotations

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter, MaxNLocator

from stresskit.report import numbers as num
from stresskit.report.figures import WIDE, path_panel
from stresskit.report.picture import MOST_PANELS, Key, Panel, Picture
from stresskit.report.style import Mark, marks, stand_in
from stresskit.report.svg import canvas, finish, settings
from stresskit.runs.records import Analysis

FORECAST = "VAR forecast"


def reverse_pictures(found: Analysis) -> tuple[Picture, ...]:
    """Paths; with a surface, the surface."""
    out = [_paths(found)]
    if "surface" in {t.name for t in found.tables}:
        out.append(_surface(found))
    return tuple(out)


def _paths(found: Analysis) -> Picture:
    frame = found.table("paths")
    names = [str(n) for n in frame["scenario"].unique() if n not in ("history", FORECAST)]
    legend = (*marks(names), Mark(FORECAST, "soft", "o", dotted=True))
    moves = found.table("moves")
    panels = []
    for k, variable in enumerate(list(frame["variable"].unique())[:MOST_PANELS]):
        mine = frame[frame["variable"] == variable]
        paths = {str(n): rows for n, rows in mine.groupby("scenario", sort=False) if n != "history"}
        unit, note = str(mine["unit"].iloc[0]), _note(moves, str(variable))
        svg = path_panel(
            mine[mine["scenario"] == "history"], paths, legend,
            key=f"reverse-path{k}", alt=f"{variable}: history, then a line per path. {note}",
        )  # fmt: skip
        panels.append(Panel(str(variable), unit, svg, note))
    free = found.facts["periods"]
    caption = (
        f"History (dark line) up to the dotted upright, then the paths found beside the reference and the costliest scenario of the study. "
        f"A path found is free for {free} periods and dashed from there on, where the rule for afterwards holds; the dotted line is what "
        "the VAR expects."
    )
    return Picture("reverse-paths", caption, tuple(panels), (), legend)


def _note(moves: pd.DataFrame, variable: str) -> str:
    rows = moves[moves["variable"] == variable]
    if not len(rows):
        return "Read by nothing: as far from the forecast as the others make it."
    r = rows.iloc[0]
    gap = (
        num.percent(r["gap_change"], 1)
        if pd.isna(r["gap_points"])
        else f"{num.plain(r['gap_points'])} points"
    )
    return f"{r['scenario']} furthest from the reference in {r['period']}: {num.plain(r['value'])}, {num.signed(gap)}."


def _surface(found: Analysis) -> Picture:
    frame = found.table("surface")
    first, second, kind = map(str, frame.columns)
    x, y = (np.array(list(dict.fromkeys(frame[c]))) for c in (first, second))
    z = frame[kind].to_numpy(dtype=float).reshape(x.size, y.size)
    threshold = float(found.facts["threshold"])
    share = kind.startswith("pd")
    words = (lambda v: num.percent(v, 1)) if share else num.short
    corner = f"{words(z[0, 0])} without shifts, {words(z[-1, -1])} with the largest of both; the threshold is {words(threshold)}."
    labels = [c.removesuffix("_points").removesuffix("_change").replace("_", " ") for c in (first, second)]
    relative = [c.endswith("_change") for c in (first, second)]
    svg = _contours(
        (x, y, z),
        threshold,
        relative,
        share=share,
        alt=f"Figure over peak shifts of {labels[0]} and {labels[1]}. {corner}",
    )
    unit = [" (share of its value)" if r else " (points)" for r in relative]
    panel = Panel(
        f"{found.facts['figure']}", f"across: {labels[0]}{unit[0]}; up: {labels[1]}{unit[1]}", svg, corner
    )
    caption = (
        "Each variable is shifted from the reference straight up to its peak in a third of the free periods and straight back by their end, "
        "the others as they are there. Lines join equal figures, as shares of the threshold; beyond the strong line, shaded, it is reached."
    )
    keys = (
        Key("line", "s1", "threshold"),
        Key("dash", "soft", "equal figures"),
        Key("points", "ink", "reference"),
    )
    return Picture("reverse-surface", caption, (panel,), (), keys=keys)


def _contours(
    grid: tuple[np.ndarray, np.ndarray, np.ndarray],
    threshold: float,
    relative: list[bool],
    *,
    share: bool,
    alt: str,
) -> Markup:
    """Lines of equal figure over two shifts, the threshold's strong."""
    x, y, z = grid
    over = z.T / threshold
    with settings():
        figure, axes = canvas(*WIDE)
        axes.grid(False)
        if over.max() > 1.0:
            axes.contourf(
                x,
                y,
                over,
                levels=[1.0, max(1.0001, float(over.max()) + 1.0)],
                colors=[stand_in("s1")],
                alpha=0.16,
            )
        levels = [v for v in _levels(float(over.min()), float(over.max())) if abs(v - 1.0) > 1e-9]
        if levels:
            lines = axes.contour(
                x, y, over, levels=levels, colors=[stand_in("soft")], linewidths=1.0, linestyles="--"
            )
            axes.clabel(lines, fmt=lambda v: f"{100 * v:.0f}%", fontsize=11, colors=[stand_in("soft")])
        if over.min() < 1.0 < over.max():
            axes.contour(x, y, over, levels=[1.0], colors=[stand_in("s1")], linewidths=2.4)
        axes.plot([0.0], [0.0], "o", color=stand_in("ink"), markersize=6, clip_on=False, zorder=5)
        for axis, way in ((axes.xaxis, relative[0]), (axes.yaxis, relative[1])):
            axis.set_major_locator(MaxNLocator(nbins=6))
            axis.set_major_formatter(FuncFormatter(_percent if way else _plain))
        return finish(figure, key="reverse-surface", alt=alt)


def _levels(low: float, high: float) -> list[float]:
    """Five to ten round shares of the threshold."""
    step = next((s for s in (0.02, 0.05, 0.1, 0.2, 0.25, 0.5, 1.0) if (high - low) / s <= 9), 2.0)
    first = int(np.ceil(low / step))
    return [round(step * k, 6) for k in range(first, int(high / step) + 1)]


def _percent(v: float, _: int) -> str:
    return f"{round(100 * v, 4):g}%".replace("-", "−")


def _plain(v: float, _: int) -> str:
    return f"{round(v, 6):g}".replace("-", "−")
