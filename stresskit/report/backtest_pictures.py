"""Pictures of a backtest: shares that defaulted beside those expected, by cut-off and over the periods after it."""

from __future__ import annotations

import numpy as np
import pandas as pd
from markupsafe import Markup

from stresskit.report import numbers as num
from stresskit.report.dot_rows import Bar, DotRow, Scale, axis_row, pair_row
from stresskit.report.picture import MOST_PANELS, Key, Panel, Picture
from stresskit.report.style import stand_in
from stresskit.report.svg import canvas, finish, percent_axis, settings
from stresskit.runs.records import Analysis

#: Column of the tables, colour, shape, words: in the order of the rows of a picture.
_SAID = (
    ("pd_actual", "ink", "square", "came"),
    ("pd_model", "s1", "dot", "model"),
    ("pd_no_macro", "s0", "dot", "no macro"),
    ("pd_flat_rate", "s2", "dot", "flat rate"),
    ("pd_last_year", "s3", "dot", "last year"),
)
_PANEL = (460, 240)


def backtest_pictures(found: Analysis) -> tuple[Picture, ...]:
    """Shares by cut-off; cumulative shares by period; defaults by period with the model's band."""
    summary = found.table("summary")
    periods = found.table("periods")
    dates = list(summary["cutoff"])[:MOST_PANELS]
    return (_shares(summary), _cumulative(periods, dates), _by_period(periods, dates))


def _keys(*, lines: bool) -> tuple[Key, ...]:
    kinds = {"square": "square", "dot": "points"}
    return tuple(Key("line" if lines else kinds[shape], colour, words) for _, colour, shape, words in _SAID)


def _shares(summary: pd.DataFrame) -> Picture:
    values = summary[[c for c, *_ in _SAID]].to_numpy(dtype=float)
    top = float(np.nanmax(values))
    step = next(s for s in (0.0025, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5) if top / s <= 6)
    scale = Scale(0.0, top * 1.02)
    rows = []
    for r in summary.to_dict("records"):
        bars = [Bar(0.0, float(r[c]), float(r[c]), colour, shape) for c, colour, shape, _ in _SAID]
        words = f"{num.percent(r['pd_actual'], 1)} came, model\u00a0{num.percent(r['pd_model'], 1)}"
        rows.append(DotRow(f"{r['cutoff']} to {r['until']}", pair_row(bars, scale), words))
    ticks = [step * k for k in range(1, int(top / step) + 1)]
    axis = axis_row(Scale(0.0, 102.0 * top), [round(100 * t, 6) for t in ticks])
    caption = (
        "A row per cut-off: the share of that date's loans that defaulted by the end, and what each model, fitted on what was known then, "
        "expected with the macro that came. The model earns its macro terms where its line ends nearer to the first one than the others."
    )
    panel = Panel("Loans that default by the end", "percent of loans", Markup(""), "", tuple(rows), axis)
    return Picture("backtest-shares", caption, (panel,), (), keys=_keys(lines=False))


def _cumulative(periods: pd.DataFrame, dates: list[str]) -> Picture:
    panels = []
    for k, date in enumerate(dates):
        rows = periods[periods["cutoff"] == date]
        x = np.arange(1, len(rows) + 1)
        note = f"At the end: {num.percent(rows['pd_actual'].iloc[-1], 1)} came, the model expected {num.percent(rows['pd_model'].iloc[-1], 1)}."
        with settings():
            figure, axes = canvas(*_PANEL)
            for column, colour, _, _ in reversed(_SAID):
                wide = 2.4 if column in ("pd_actual", "pd_model") else 1.4
                axes.plot(x, rows[column].to_numpy(dtype=float), color=stand_in(colour), linewidth=wide)
            axes.set_ylim(bottom=0)
            axes.set_xlim(1, max(len(rows), 2))
            percent_axis(axes)
            svg = finish(figure, key=f"bt-cum{k}", alt=f"Cumulative share of defaults after {date}. {note}")
        panels.append(Panel(f"After {date}", "share defaulted; across: periods after the cut-off", svg, note))
    caption = "The share of loans defaulted so far, as it came and as each model rolled it forward from the cut-off."
    return Picture("backtest-cumulative", caption, tuple(panels), (), keys=_keys(lines=True), small=True)


def _by_period(periods: pd.DataFrame, dates: list[str]) -> Picture:
    panels = []
    for k, date in enumerate(dates):
        rows = periods[periods["cutoff"] == date]
        low, high, came = (
            rows[c].to_numpy(dtype=float) for c in ("expected_low", "expected_high", "defaults")
        )
        x = np.arange(1, len(rows) + 1)
        inside = int(((low <= came) & (came <= high)).sum())
        note = f"{inside} of {len(rows)} periods inside the band."
        with settings():
            figure, axes = canvas(*_PANEL)
            axes.fill_between(x, low, high, color=stand_in("band"), alpha=0.55, linewidth=0)
            axes.plot(x, rows["expected"].to_numpy(dtype=float), color=stand_in("s1"), linewidth=2)
            axes.plot(x, came, color=stand_in("ink"), linewidth=0, marker="o", markersize=3.6)
            axes.set_ylim(bottom=0)
            axes.set_xlim(0.5, len(rows) + 0.5)
            svg = finish(figure, key=f"bt-per{k}", alt=f"Defaults by period after {date}. {note}")
        panels.append(
            Panel(f"After {date}", "defaults per period; across: periods after the cut-off", svg, note)
        )
    caption = (
        "Defaults of each period beside those that the model expected of the loans that were still there, with its 90% band: chance, shocks "
        "that all loans of a period share, and the error of the coefficients."
    )
    keys = (Key("points", "ink", "came"), Key("line", "s1", "expected"), Key("band", "band", "90% band"))
    return Picture("backtest-periods", caption, tuple(panels), (), keys=keys, small=True)
