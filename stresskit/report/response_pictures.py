"""What each hazard makes of each macro feature: the factor over the range of estimation, and where the scenarios go."""

from __future__ import annotations

import numpy as np
import pandas as pd
from markupsafe import Markup
from matplotlib.ticker import FuncFormatter, MaxNLocator

from stresskit.report import numbers as num
from stresskit.report.figures import WIDE
from stresskit.report.picture import MOST_PANELS, Key, Panel, Picture, scenario_marks
from stresskit.report.reading import at_largest, numbers, single_scenarios
from stresskit.report.readout import Readout, Trace
from stresskit.report.style import Mark, stand_in
from stresskit.report.svg import canvas, finish, of_scenario, settings
from stresskit.report.tables import Cell, Table, columns, row
from stresskit.runs.records import StudyResult

#: Scenario -> lowest and highest value that it takes.
Reached = dict[str, tuple[float, float]]
#: An interval never makes the picture higher than this many times the largest factor.
_MOST_ROOM = 2.0


def response_picture(result: StudyResult) -> Picture | None:
    """A panel per hazard and macro feature; None when no hazard reads one, or the result does not hold it."""
    frame = result.hazard_by_macro
    if frame is None or not len(frame):
        return None
    names = single_scenarios(result)
    legend = tuple(m for m in scenario_marks(result) if m.name in names)
    panels, tables = [], []
    groups = list(frame.groupby(["cause", "feature"], sort=False))
    for k, ((cause, feature), rows) in enumerate(groups[:MOST_PANELS]):
        reached = _reached(result, str(feature))
        note = _note(rows, reached)
        alt = f"{cause} hazard: factor by {feature}. {note}"
        svg = _panel(rows, reached, legend, key=f"resp{k}", alt=alt)
        kind = "odds" if rows["link"].iloc[0] == "logit" else "hazard"
        panels.append(Panel(f"{cause} by {feature}", f"factor on the {kind}", svg, note))
        tables.append(_table(rows, f"Factor on the {kind} of {cause} by {feature}"))
    left = len(groups) - len(panels)
    caption = (
        "Across: the feature's value; up: the factor on the hazard of the average loan against the last value observed (dotted upright, "
        "factor 1), all else as it is. Shaded: 95% interval, errors clustered by calendar period. The line is solid over the values the "
        "hazard was estimated on and dashed beyond, where only the shape of the formula speaks. Below the line: how far each scenario goes."
        + (f" The first {len(panels)} responses; {left} more are in hazard_by_macro.csv." if left else "")
    )
    keys = (
        Key("line", "ink", "factor"),
        Key("dash", "ink", "beyond the range of estimation"),
        Key("band", "band", "95% interval"),
    )
    return Picture("responses", caption, tuple(panels), tuple(tables), legend, keys)


def _reached(result: StudyResult, feature: str) -> Reached:
    rows = result.features[result.features["feature"] == feature]
    return {
        name: (float(mine["value"].min()), float(mine["value"].max()))
        for name in single_scenarios(result)
        if len(mine := rows[rows["scenario"] == name])
    }


def _panel(rows: pd.DataFrame, reached: Reached, marks: tuple[Mark, ...], *, key: str, alt: str) -> Markup:
    x, y = numbers(rows, "value"), numbers(rows, "factor")
    lower, upper = numbers(rows, "lower"), numbers(rows, "upper")
    low, high = float(rows["lowest"].iloc[0]), float(rows["highest"].iloc[0])
    inside = (x >= low) & (x <= high)
    widest = float(np.nanmax(upper)) if np.isfinite(upper).any() else 0.0
    top = 1.06 * max(float(y.max()), min(widest, _MOST_ROOM * float(y.max())))
    with settings():
        figure, axes = canvas(*WIDE)
        if np.isfinite(upper).any():
            axes.fill_between(x, lower, upper, color=stand_in("band"), alpha=0.3, linewidth=0, zorder=1)
        axes.axhline(1.0, color=stand_in("soft"), linewidth=1, zorder=2)
        axes.axvline(
            float(rows["reference"].iloc[0]), color=stand_in("soft"), linewidth=1, linestyle=(0, (1.0, 3.0))
        )
        ink = stand_in("ink")
        for part in (x <= low, x >= high):
            if part.sum() > 1:
                axes.plot(x[part], y[part], color=ink, linewidth=1.8, linestyle=(0, (4.0, 3.0)), zorder=3)
        axes.plot(x[inside], y[inside], color=ink, linewidth=2.2, zorder=4)
        step = 0.075 * top
        shown = [m for m in marks if m.name in reached]
        for k, mark in enumerate(shown):
            axes.plot(
                reached[mark.name], [-step * (k + 0.7)] * 2, color=stand_in(mark.colour), linewidth=2.0, marker=mark.marker,
                markersize=6, markeredgewidth=0, zorder=4, gid=of_scenario(mark.place), clip_on=False,
            )  # fmt: skip
        axes.set_ylim(-step * (len(shown) + 0.3), top)
        axes.yaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}" if v >= 0 else ""))
        axes.xaxis.set_major_formatter(FuncFormatter(lambda v, _: f"{v:g}".replace("-", "−")))
        axes.xaxis.set_major_locator(MaxNLocator(nbins=6))
        labels = {
            float(v): f"at {_short(v)}" + ("" if i else " (extrapolated)")
            for v, i in zip(x, inside, strict=True)
        }
        named = (("factor", y), ("95% from", lower), ("95% to", upper))
        return finish(figure, key=key, alt=alt, values=Readout([Trace(n, x, v) for n, v in named], labels))


def _short(value: float) -> str:
    """Three significant digits."""
    return f"{value:.3g}".replace("-", num.MINUS)


def _note(rows: pd.DataFrame, reached: Reached) -> str:
    """The factor at both ends of the range, the one furthest from 1 along a scenario, and how loans differ."""
    at = {float(v): r for v, r in zip(rows["value"], rows.to_dict("records"), strict=True)}
    low, high = at[float(rows["lowest"].iloc[0])], at[float(rows["highest"].iloc[0])]
    ends = " and ".join(f"{num.plain(r['factor'])} at {_short(r['value'])}" for r in (low, high))
    note = f"Estimated range: {ends}."
    far = []
    for name, (least, most) in reached.items():
        mine = rows[(rows["value"] >= least - 1e-12) & (rows["value"] <= most + 1e-12)]
        if len(mine):
            far.append((name, at_largest(mine, np.abs(np.log(numbers(mine, "factor"))))))
    if far:
        name, r = max(far, key=lambda pair: abs(np.log(float(pair[1]["factor"]))))
        between = f" ({num.plain(r['lower'])} to {num.plain(r['upper'])})" if np.isfinite(r["upper"]) else ""
        note += f" Furthest from 1 along a scenario: {num.plain(r['factor'])}{between} at {_short(r['value'])} in {name}."
    top = at_largest(rows, np.abs(np.log(numbers(rows, "factor"))))
    if rows["over"].iloc[0] == "book" and not np.isclose(top["least"], top["most"], rtol=1e-9):
        note += (
            f" Loans differ: {num.plain(top['least'])} to {num.plain(top['most'])} at {_short(top['value'])}."
        )
    elif rows["over"].iloc[0] == "reference":
        note += " Of a case at the reference levels."
    return note


def _table(rows: pd.DataFrame, title: str) -> Table:
    out = []
    for r in rows.to_dict("records"):
        inside = r["lowest"] <= r["value"] <= r["highest"]
        place = "as of" if r["value"] == r["reference"] else ""
        out.append(
            row(
                Cell(num.plain(r["value"], 3), place),
                num.plain(r["factor"], 3),
                f"{num.plain(r['lower'], 3)} to {num.plain(r['upper'], 3)}"
                if np.isfinite(r["upper"])
                else num.MISSING,
                f"{num.plain(r['least'], 3)} to {num.plain(r['most'], 3)}",
                "estimated" if inside else Cell("extrapolated", mark="after"),
            )
        )
    return Table(
        title, columns("Value", "Factor", "95% interval", "Over loans", "Range", words=0), tuple(out)
    )
