"""Pictures of the analysis ``bands``: fans of loss by year, intervals by source, differences draw by draw."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.dot_rows import Bar, DotRow, Scale, axis_row, pair_row
from stresskit.report.picture import MOST_PANELS, Key, Panel, Picture
from stresskit.report.style import Mark, marks, stand_in
from stresskit.report.svg import canvas, finish, settings
from stresskit.runs.records import Analysis

TOGETHER = "together"


def bands_pictures(found: Analysis) -> tuple[Picture, ...]:
    """Fan, sources, differences; the last one where there is more than one scenario."""
    years, sources = found.table("years"), found.table("sources")
    level = f"{float(found.facts['level']):.0%}"
    out = [fan_picture(years, level), source_picture(sources, level)]
    if any(t.name == "difference" for t in found.tables):
        out.append(difference_picture(found.table("difference"), level))
    return tuple(out)


def fan_picture(years: pd.DataFrame, level: str) -> Picture:
    """A panel per scenario, all of one height."""
    names = [str(s) for s in years["scenario"].unique()]
    top = float(years["el_high"].max())
    divisor, word = num.scale(top)
    legend, panels = marks(names), []
    last = int(years.loc[years["el_high"] > 0.005 * top, "year"].max())
    for k, mark in enumerate(legend[:MOST_PANELS]):
        mine = years[(years["scenario"] == mark.name) & (years["year"] <= last)]
        peak = mine.iloc[int(np.argmax(mine["el_high"].to_numpy()))]
        note = (
            f"Widest in {int(peak['year'])}: {num.short(peak['el_low'])} to {num.short(peak['el_high'])}, "
            f"{num.short(peak['el_point'])} in the run."
        )
        size = fig.SMALL if len(names) > 2 else fig.WIDE
        svg = _fan(
            mine,
            mark,
            divisor,
            1.05 * top / divisor,
            size=size,
            key=f"fan{k}",
            alt=f"Loss by year under {mark.name}. {note}",
        )
        panels.append(Panel(mark.name, f"loss by calendar year, {word}", svg, note))
    caption = (
        f"Shaded: {level} of the draws lie there, year by year; line: the figure of the run; fine dashes: median of the draws. All panels "
        "have one height."
    )
    keys = (Key("band", "band", f"{level} of the draws"), Key("dash", "soft", "median of the draws"))
    return Picture("bands-years", caption, tuple(panels), (), legend, keys, small=len(names) > 2)


def _fan(
    rows: pd.DataFrame, mark: Mark, divisor: float, top: float, *, size: tuple[int, int], key: str, alt: str
) -> Markup:
    x = rows["year"].to_numpy(dtype=float)
    low, middle, high, point = (
        rows[f"el_{c}"].to_numpy(dtype=float) / divisor for c in ("low", "median", "high", "point")
    )
    with settings():
        figure, axes = canvas(*size)
        axes.fill_between(x, low, high, color=stand_in("band"), alpha=0.55, linewidth=0, zorder=1)
        axes.plot(x, middle, color=stand_in("soft"), linewidth=1.2, linestyle=(0, (3.0, 2.0)), zorder=2)
        axes.plot(
            x, point, color=stand_in(mark.colour), linewidth=2.0, marker=mark.marker, markersize=5, zorder=3
        )
        axes.set_ylim(0, top)
        axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{y:g}"))
        return finish(figure, key=key, alt=alt)


def _scale(low: float, high: float) -> Scale:
    room = 0.04 * (high - low) or max(abs(high), 1.0) * 0.1
    return Scale(low - room, high + room)


def _ticks(scale: Scale, count: int = 4) -> list[float]:
    """Round numbers inside the scale."""
    step = (scale.high - scale.low) / count
    size = 10.0 ** np.floor(np.log10(step))
    step = next(size * k for k in (1.0, 2.0, 2.5, 5.0, 10.0) if size * k >= step)
    first = np.ceil(scale.low / step)
    return [float(step * (first + i)) for i in range(count + 2) if step * (first + i) <= scale.high]


def source_picture(sources: pd.DataFrame, level: str) -> Picture:
    """For each scenario an interval per source and one for all together, in percent of the run's figure."""
    names = [str(s) for s in sources["scenario"].unique()]
    change = {c: 100.0 * (sources[c] / sources["el_point"] - 1.0) for c in ("el_low", "el_high")}
    scale = _scale(min(0.0, float(change["el_low"].min())), max(0.0, float(change["el_high"].max())))
    axis, panels = axis_row(scale, _ticks(scale)), []
    for name in names[:MOST_PANELS]:
        at = sources["scenario"] == name
        rows = []
        for i in np.flatnonzero(at):
            r = sources.iloc[i]
            low, high = float(change["el_low"].iloc[i]), float(change["el_high"].iloc[i])
            whole = str(r["source"]) == TOGETHER
            bar = Bar(low, high, 0.0, "ink" if whole else "s0", "square" if whole else "dot")
            share = (
                ""
                if whole or pd.isna(r["share_alone"])
                else f", {num.percent(r['share_alone'], 0)} of variance"
            )
            words = f"{num.signed(num.plain(low, 1))}% to {num.signed(num.plain(high, 1))}%{share}"
            rows.append(DotRow(str(r["source"]), pair_row([bar], scale), words))
        widest = sources[at & (sources["source"] != TOGETHER)].sort_values("share_alone", ascending=False)
        note = f"Widest alone: {widest['source'].iloc[0]}." if len(widest) else ""
        panels.append(Panel(name, "lifetime loss, % from the run", Markup(), note, tuple(rows), axis))
    caption = (
        f"{level} bands of the lifetime loss in percent of the run's figure (upright line): all sources together, then each alone with the "
        "others at their centre."
    )
    keys = (Key("square", "ink", "all sources together"), Key("points", "s0", "one source alone"))
    return Picture("bands-sources", caption, tuple(panels), (), (), keys)


def difference_picture(gaps: pd.DataFrame, level: str) -> Picture:
    """An interval per scenario and horizon, in amounts."""
    divisor, word = num.scale(float(np.abs(gaps[["el_low", "el_high"]].to_numpy(dtype=float)).max()))
    reference, panels = str(gaps["reference"].iloc[0]), []
    for horizon, mine in gaps.groupby("horizon", sort=False):
        values = mine[["el_low", "el_high", "el_point"]].to_numpy(dtype=float) / divisor
        scale = _scale(min(0.0, float(values.min())), max(0.0, float(values.max())))
        rows = _difference_rows(mine, values.tolist(), scale)
        sure = mine[(mine["el_low"] > 0) | (mine["el_high"] < 0)]
        note = f"{len(sure)} of {len(mine)} differences have one sign throughout the band."
        axis = axis_row(scale, _ticks(scale))
        panels.append(Panel(f"{horizon} loss", word, Markup(), note, tuple(rows), axis))
    caption = (
        f"{level} bands of the loss less that under {reference}, draw by draw with the same random numbers: what the scenarios share cancels. "
        "Dot: the run. Upright line: no difference."
    )
    return Picture("bands-difference", caption, tuple(panels), (), ())


def _difference_rows(mine: pd.DataFrame, values: Sequence[Sequence[float]], scale: Scale) -> list[DotRow]:
    out = []
    for name, (low, high, point) in zip(mine["scenario"], values, strict=True):
        words = f"{num.plain(low)} to {num.plain(high)}, {num.plain(point)} in the run"
        out.append(DotRow(str(name), pair_row([Bar(float(low), float(high), float(point))], scale), words))
    return out
