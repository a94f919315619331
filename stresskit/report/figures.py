"""The panels of the report: one small picture each, from plain tables. Words around them: pictures.py.

Every function returns inline SVG (see svg.py). x is decimal years, years after as_of, or age in periods.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.axes import Axes
from matplotlib.ticker import FuncFormatter, MaxNLocator
from matplotlib.transforms import offset_copy
from numpy.typing import NDArray

from stresskit.report.reading import decimal_years, name_of
from stresskit.report.readout import Readout, Trace
from stresskit.report.style import Mark, stand_in
from stresskit.report.svg import canvas, finish, of_scenario, percent_axis, settings

WIDE = (450, 256)
SMALL = (320, 200)
#: Columns side by side that one panel can hold; beyond that lines are clearer.
MOST_COLUMNS = 64
Array = NDArray[np.float64]


def _dash(mark: Mark, *, dashed: bool) -> tuple[int, tuple[float, ...]] | str:
    if mark.dotted:
        return (0, (1.0, 2.0))
    return (0, (4.0, 3.0)) if dashed else "-"


def _line(axes: Axes, x: Array, y: Array, mark: Mark, *, dashed: bool = False, filled: bool = False) -> None:
    """A scenario's line without its marks."""
    style = (0, (6.0, 1.5, 1.0, 1.5)) if filled else _dash(mark, dashed=dashed)
    colour = stand_in(mark.colour)
    axes.plot(x, y, color=colour, linestyle=style, linewidth=2.0, zorder=3, gid=of_scenario(mark.place))


def _dots(axes: Axes, x: Array, y: Array, mark: Mark, *, place: int, of: int) -> None:
    """The marks of a line, about six, set off from those of the other scenarios (``place`` of ``of``)."""
    if mark.dotted or not x.shape[0]:
        return
    every = max(1, x.shape[0] // 6)
    start = min(x.shape[0] - 1, (1 + place * every // max(1, of)) if x.shape[0] > 1 else 0)
    axes.plot(
        x[start::every], y[start::every], color=stand_in(mark.colour), linestyle="none", marker=mark.marker,
        markersize=6.5, markeredgewidth=0, zorder=4, gid=of_scenario(mark.place),
    )  # fmt: skip


def _traces(curves: Mapping[str, tuple[Array, Array]], marks: Sequence[Mark]) -> list[Trace]:
    return [Trace(name_of(m.name), *curves[m.name], m.place) for m in marks if m.name in curves]


def _labels(periods: pd.Series) -> dict[float, str]:
    """Place of each period on an axis of decimal years -> the period."""
    return dict(zip(decimal_years(periods).tolist(), periods.astype(str), strict=True))


def curve_panel(
    curves: Mapping[str, tuple[Array, Array]],
    marks: Sequence[Mark],
    *,
    key: str,
    alt: str,
    labels: Mapping[float, str] | None = None,
    size: tuple[int, int] = WIDE,
    top: float | None = None,
) -> Markup:
    """Shares (0..1) over years after as_of, a curve per scenario; all panels of a family share ``top``."""
    with settings():
        figure, axes = canvas(*size)
        for k, mark in enumerate(marks):
            if mark.name in curves:
                x, y = curves[mark.name]
                _line(axes, x, y, mark)
                _dots(axes, x, y, mark, place=k, of=len(marks))
        axes.set_xlim(left=0)
        axes.set_ylim(0, top)
        percent_axis(axes)
        values = Readout(_traces(curves, marks), labels or {}, share=True)
        return finish(figure, key=key, alt=alt, values=values)


def path_panel(
    history: pd.DataFrame,
    paths: Mapping[str, pd.DataFrame],
    marks: Sequence[Mark],
    *,
    forecast: pd.DataFrame | None = None,
    key: str,
    alt: str,
) -> Markup:
    """One macro variable: history, then a line per scenario, dashed after its last given or filled value.

    Frames have columns period, value, flag (and low, high where values are filled), in time order; the
    forecast has period, low, high: a shaded band that never decides how far the axis reaches.
    """
    traces, labels = [], _labels(history["period"])
    with settings():
        figure, axes = canvas(*WIDE)
        if len(history):
            past = decimal_years(history["period"])
            axes.plot(past, history["value"], color=stand_in("ink"), linewidth=1.8)
            traces.append(Trace("history", past, history["value"].to_numpy(dtype=float)))
        for k, mark in enumerate(marks):
            if mark.name not in paths:
                continue
            path = paths[mark.name]
            x, y = decimal_years(path["period"]), path["value"].to_numpy(dtype=float)
            traces.append(Trace(name_of(mark.name), x, y, mark.place))
            labels |= _labels(path["period"])
            if len(history):
                x = np.concatenate([decimal_years(history["period"].tail(1)), x])
                y = np.concatenate([history["value"].tail(1).to_numpy(dtype=float), y])
            ruled = path["flag"].to_numpy() == "afterwards"
            given = x.shape[0] - int(ruled[::-1].cumprod().sum())
            if given > 1:
                _line(axes, x[:given], y[:given], mark, filled="filled" in set(path["flag"]))
            if given < x.shape[0]:
                _line(axes, x[max(given - 1, 0) :], y[max(given - 1, 0) :], mark, dashed=True)
            _dots(axes, x, y, mark, place=k, of=len(marks))
            _filled_band(axes, path, mark)
        if forecast is not None and len(forecast):
            _forecast_band(axes, history, forecast)
        if len(history):
            last = float(decimal_years(history["period"].tail(1))[0])
            axes.axvline(last, color=stand_in("soft"), linewidth=1, linestyle=(0, (1.0, 3.0)))
        return finish(figure, key=key, alt=alt, values=Readout(traces, labels))


def _filled_band(axes: Axes, path: pd.DataFrame, mark: Mark) -> None:
    """The band of filled values in the scenario's colour, with thin lines at its ends."""
    filled = path[path["flag"] == "filled"]
    if "low" not in filled or not len(filled):
        return
    x = decimal_years(filled["period"])
    axes.fill_between(
        x, filled["low"].to_numpy(dtype=float), filled["high"].to_numpy(dtype=float), color=stand_in(mark.colour),
        alpha=0.12, linewidth=0, zorder=1.5, gid=of_scenario(mark.place),
    )  # fmt: skip
    for end in ("low", "high"):
        y = filled[end].to_numpy(dtype=float)
        axes.plot(
            x, y, color=stand_in(mark.colour), linewidth=1.0, linestyle=(0, (1.0, 1.5)), zorder=2.5,
            gid=of_scenario(mark.place),
        )  # fmt: skip


def _forecast_band(axes: Axes, history: pd.DataFrame, forecast: pd.DataFrame) -> None:
    """The band behind everything, from history's last value on; the axis keeps room for half as much again."""
    low, high = axes.get_ylim()
    room = 0.25 * (high - low)
    x = decimal_years(forecast["period"])
    ends = [forecast[c].to_numpy(dtype=float) for c in ("low", "high")]
    if len(history):
        x = np.concatenate([decimal_years(history["period"].tail(1)), x])
        last = history["value"].tail(1).to_numpy(dtype=float)
        ends = [np.concatenate([last, end]) for end in ends]
    axes.fill_between(x, ends[0], ends[1], color=stand_in("band"), alpha=0.3, linewidth=0, zorder=1)
    axes.set_ylim(max(low - room, min(low, ends[0].min())), min(high + room, max(high, ends[1].max())))


def hazard_panel(rows: pd.DataFrame, *, banded: pd.DataFrame, top: float, key: str, alt: str) -> Markup:
    """Observed hazard by age as points, with bands for the ages ``banded``, and the fitted one as a line."""
    with settings():
        figure, axes = canvas(*WIDE)
        age = rows["age"].to_numpy(dtype=float)
        bands = banded["age"].to_numpy(dtype=float)
        axes.vlines(bands, banded["lower"], banded["upper"], color=stand_in("band"), linewidth=1.4, zorder=2)
        axes.plot(
            age, rows["observed"], "o", color=stand_in("soft"), markersize=3, markeredgewidth=0, zorder=3
        )
        axes.plot(age, rows["fitted"], color=stand_in("s1"), linewidth=2.2, zorder=4)
        axes.set_xlim(left=0)
        axes.set_ylim(0, top)
        percent_axis(axes)
        traces = [Trace(c, age, rows[c].to_numpy(dtype=float)) for c in ("observed", "fitted")]
        labels = {float(a): f"age {a:g}" for a in age}
        return finish(figure, key=key, alt=alt, values=Readout(traces, labels, share=True))


def actual_expected_panel(rows: pd.DataFrame, *, key: str, alt: str) -> Markup:
    """Events counted (columns) and expected by the fit (line) per calendar period; a band where rows have one."""
    with settings():
        figure, axes = canvas(*WIDE)
        x = decimal_years(rows["period"])
        length = float(np.min(np.diff(np.unique(x)))) if np.unique(x).shape[0] > 1 else 1 / 12
        x = x - length / 2
        axes.bar(
            x,
            rows["events"].to_numpy(dtype=float),
            0.82 * length,
            color=stand_in("band"),
            linewidth=0,
            zorder=2,
        )
        if "low_events" in rows:
            low, high = (rows[c].to_numpy(dtype=float) for c in ("low_events", "high_events"))
            axes.fill_between(x, low, high, color=stand_in("s1"), alpha=0.22, linewidth=0, zorder=2.5)
        axes.plot(x, rows["expected"].to_numpy(dtype=float), color=stand_in("s1"), linewidth=2.2, zorder=3)
        axes.set_ylim(bottom=0)
        axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{y:,.0f}" if y >= 10 else f"{y:g}"))
        named = (("counted", "events"), ("expected", "expected"))
        traces = [Trace(words, x, rows[c].to_numpy(dtype=float)) for words, c in named]
        labels = dict(zip(x.tolist(), rows["period"].astype(str), strict=True))
        return finish(figure, key=key, alt=alt, values=Readout(traces, labels))


def year_panel(
    table: pd.DataFrame,
    marks: Sequence[Mark],
    *,
    divisor: float,
    bars: bool,
    key: str,
    alt: str,
    size: tuple[int, int] = WIDE,
    top: float | None = None,
) -> Markup:
    """Amounts by calendar year (index) and scenario (columns): ``bars`` side by side, or lines; panels of a family share ``top``."""
    with settings():
        figure, axes = canvas(*size)
        years = table.index.to_numpy(dtype=float)
        shown = [m for m in marks if m.name in table.columns]
        if bars:
            width = 0.8 / max(1, len(shown))
            largest = float(np.nanmax(np.abs(table.to_numpy(dtype=float)))) / divisor
            for k, mark in enumerate(shown):
                x = years + (k - (len(shown) - 1) / 2) * width
                _columns(
                    axes,
                    x,
                    table[mark.name].to_numpy(dtype=float) / divisor,
                    0.88 * width,
                    mark,
                    largest=largest,
                )
        else:
            for k, mark in enumerate(shown):
                y = table[mark.name].to_numpy(dtype=float) / divisor
                _line(axes, years, y, mark)
                _dots(axes, years, y, mark, place=k, of=len(shown))
        axes.xaxis.set_major_locator(
            MaxNLocator(nbins=min(size[0] // 60, max(1, years.shape[0])), integer=True)
        )
        axes.axhline(0, color=stand_in("soft"), linewidth=1)
        axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{round(y, 6):g}".replace("-", "−")))
        if top is not None:
            axes.set_ylim(0, top)
        elif bars:
            # room for the marks above the columns
            axes.margins(y=0.12)
        curves = {m.name: (years, table[m.name].to_numpy(dtype=float)) for m in shown}
        labels = {float(y): f"{y:.0f}" for y in years}
        values = Readout(_traces(curves, shown), labels, divisor=divisor)
        return finish(figure, key=key, alt=alt, values=values)


def _columns(axes: Axes, x: Array, height: Array, width: float, mark: Mark, *, largest: float) -> None:
    """Columns of one scenario, each with the scenario's mark at its end: readable without colours."""
    colour, group = stand_in(mark.colour), of_scenario(mark.place)
    if mark.dotted:
        columns = axes.bar(x, height, width, facecolor="none", edgecolor=colour, linewidth=1.2, zorder=2)
    else:
        columns = axes.bar(x, height, width, color=colour, linewidth=0, zorder=2)
        # a mark where there is a column to see
        seen = np.abs(height) > 0.01 * largest
        for side, up in ((seen & (height > 0), 1.0), (seen & (height < 0), -1.0)):
            above = offset_copy(axes.transData, axes.get_figure(root=True), y=5.5 * up, units="dots")
            axes.plot(
                x[side], height[side], color=colour, linestyle="none", marker=mark.marker, markersize=5, markeredgewidth=0,
                zorder=4, transform=above, gid=group,
            )  # fmt: skip
    for column in columns:
        column.set_gid(group)


def feature_panel(
    features: Mapping[str, pd.DataFrame],
    marks: Sequence[Mark],
    *,
    lowest: float,
    highest: float,
    key: str,
    alt: str,
) -> Markup:
    """One macro feature per scenario over the range that the fit has seen (shaded)."""
    with settings():
        figure, axes = canvas(*WIDE)
        axes.axhspan(lowest, highest, color=stand_in("band"), alpha=0.28, linewidth=0, zorder=1)
        curves, labels = {}, dict[float, str]()
        for k, mark in enumerate(marks):
            if mark.name in features:
                x = decimal_years(features[mark.name]["period"])
                y = features[mark.name]["value"].to_numpy(dtype=float)
                curves[mark.name] = (x, y)
                labels |= _labels(features[mark.name]["period"])
                _line(axes, x, y, mark)
                _dots(axes, x, y, mark, place=k, of=len(marks))
        return finish(figure, key=key, alt=alt, values=Readout(_traces(curves, marks), labels))


def stacked_panel(
    table: pd.DataFrame, colours: Sequence[str], *, divisor: float, top: float, key: str, alt: str
) -> Markup:
    """Amounts stacked per point: index decimal years, a column per part from the bottom up, ``colours`` of the parts."""
    with settings():
        figure, axes = canvas(*SMALL)
        x = table.index.to_numpy(dtype=float)
        width = 0.72 * (float(np.min(np.diff(x))) if x.size > 1 else 1.0)
        base, traces = np.zeros(x.shape), []
        for name, colour in zip(table.columns, colours, strict=True):
            height = table[name].to_numpy(dtype=float) / divisor
            axes.bar(x, height, width, bottom=base, color=stand_in(colour), linewidth=0, zorder=2)
            base = base + height
            traces.append(Trace(str(name), x, table[name].to_numpy(dtype=float)))
        axes.set_ylim(0, top)
        axes.xaxis.set_major_locator(MaxNLocator(nbins=min(8, max(1, x.size)), integer=True))
        axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{round(y, 6):g}"))
        labels = {float(v): f"end of {v:.4g}" for v in x}
        return finish(figure, key=key, alt=alt, values=Readout(traces, labels, divisor=divisor))


def point_panel(
    curves: Mapping[str, tuple[Array, Array]],
    marks: Sequence[Mark],
    *,
    percent: bool,
    key: str,
    alt: str,
    labels: Mapping[float, str] | None = None,
    divisor: float = 1.0,
) -> Markup:
    """Values at a few dates (decimal years), a line with all its marks per scenario."""
    with settings():
        figure, axes = canvas(*WIDE)
        for mark in marks:
            if mark.name in curves:
                x, y = curves[mark.name][0], curves[mark.name][1] / divisor
                _line(axes, x, y, mark)
                if not mark.dotted:
                    axes.plot(
                        x, y, color=stand_in(mark.colour), linestyle="none", marker=mark.marker, markersize=6.5,
                        markeredgewidth=0, zorder=4, gid=of_scenario(mark.place),
                    )  # fmt: skip
        axes.margins(y=0.08)
        axes.set_ylim(bottom=0)
        axes.xaxis.set_major_locator(MaxNLocator(nbins=8, integer=True))
        if percent:
            percent_axis(axes)
        else:
            axes.yaxis.set_major_formatter(FuncFormatter(lambda y, _: f"{round(y, 6):g}"))
        values = Readout(_traces(curves, marks), labels or {}, share=percent, divisor=divisor)
        return finish(figure, key=key, alt=alt, values=values)
