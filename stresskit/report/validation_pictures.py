"""Pictures of the evidence on the fits: ratios, survival, memory, calibration, lags, stability."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from markupsafe import Markup

from stresskit.evidence.collect import Evidence
from stresskit.evidence.lags import SUPPORT
from stresskit.report import numbers as num
from stresskit.report import validation_figures as fig
from stresskit.report.dot_rows import Bar, DotRow, Scale, axis_row, pair_row, ratio_row
from stresskit.report.picture import Key, Panel, Picture
from stresskit.report.validation_tables import GROUPINGS, evidence_table, group_table, total_table

#: Groupings that are drawn along an axis, in this order; all others are columns of the loans.
ORDERED = ("age", "cohort", "predicted")
_T95 = 1.96


def causes(found: Evidence) -> tuple[str, ...]:
    """Causes in the order of the verdicts."""
    return tuple(dict.fromkeys(v.cause for v in found.verdicts))


def rows_of(found: Evidence, table: str, cause: str) -> pd.DataFrame:
    """Rows of one cause; an empty frame when the table or the cause is missing."""
    frame = found.tables.get(table)
    return pd.DataFrame() if frame is None else frame[frame["cause"] == cause]


def group_picture(found: Evidence) -> Picture | None:
    """Actual over expected by age band, cohort and tenth of the prediction."""
    panels, tables = [], []
    for k, cause in enumerate(causes(found)):
        rows = rows_of(found, "actual_expected", cause)
        if rows.empty:
            continue
        for by in ORDERED:
            mine = rows[rows["by"] == by]
            if mine.empty:
                continue
            note = _ratio_note(mine, rows_of(found, "totals", cause), by)
            alt = f"{cause}: events over expected events by {GROUPINGS[by]}. {note}"
            svg = fig.ratio_panel(mine, _starts(mine["group"], by), key=f"ev-{by}{k}", alt=alt)
            panels.append(Panel(f"{cause} by {GROUPINGS[by]}", _AXES[by], svg, note))
        tables.append(group_table(f"{cause}: by age band, cohort and tenth", rows[rows["by"].isin(ORDERED)]))
        tables.append(total_table(cause, rows_of(found, "totals", cause)))
    if not panels:
        return None
    caption = (
        "Up: events counted over events expected; the line is at 1. Shaded: where 95% of the ratios lie when the fit is right, the "
        "shocks of calendar periods included. One group in twenty lies outside by chance (diamond); a slope or a bow across the groups "
        "is a misfit even inside the band. Groups with few expected events do not set the height: a point at the edge lies there or beyond."
    )
    keys = (
        Key("points", "s1", "actual / expected"),
        Key("diamond", "s1", "outside the band"),
        Key("band", "band", "95% band"),
    )
    return Picture("ev-groups", caption, tuple(panels), tuple(tables), keys=keys, small=True)


_AXES = {
    "age": "across: bands by their first age",
    "cohort": "across: year of the first period on book",
    "predicted": "across: from the lowest prediction",
}


def _starts(labels: pd.Series, by: str) -> list[int]:
    """Number that each group begins at: ages and years by their labels, tenths by their place."""
    found = [re.findall(r"\d+", str(label)) for label in labels]
    return [int(n[0]) if n and by != "predicted" else place for place, n in enumerate(found, start=1)]


def _at_the_edge(tenths: int) -> str:
    if not tenths:
        return ""
    return f" {tenths} tenth{'' if tenths == 1 else 's'} without events stand{'s' if tenths == 1 else ''} at the lower edge."


def _ratio_note(rows: pd.DataFrame, totals: pd.DataFrame, by: str) -> str:
    out = int(((rows["events"] < rows["low_events"]) | (rows["events"] > rows["high_events"])).sum())
    note = f"{out} of {len(rows)} outside the band."
    mine = totals[totals["by"] == by] if len(totals) else totals
    if len(mine):
        r = mine.iloc[0]
        if r["df"] > 0:
            clustered = pd.notna(r["p_clustered"]) and r["shock_sd"] > 0.0
            p = r["p_clustered"] if clustered else r["p_value"]
            note += f" Total test: p {_p(p)}{', shocks of periods allowed for' if clustered else ''}."
        else:
            note += " No total test: the fit has a level for every group."
    return note


def _p(value: float) -> str:
    shown = num.p_value(value)
    return f"below {shown[1:]}" if shown.startswith("<") else shown


def column_picture(found: Evidence) -> Picture | None:
    """Actual over expected by segment and loan column, a row per group."""
    panels, tables = [], []
    for cause in causes(found):
        rows = rows_of(found, "actual_expected", cause)
        if rows.empty:
            continue
        rows = rows[~rows["by"].isin(("period", *ORDERED))]
        if rows.empty:
            continue
        scale = Scale(*fig.ratio_range(rows))
        for by, mine in rows.groupby("by", sort=False):
            note = _ratio_note(mine, rows_of(found, "totals", cause), str(by))
            lines = tuple(_ratio_line(r, scale) for r in mine.to_dict("records"))
            axis = axis_row(scale, _ticks(scale))
            panels.append(Panel(f"{cause} by {by}", "actual / expected", Markup(""), note, lines, axis))
        tables.append(group_table(f"{cause}: by segment and loan column", rows))
    if not panels:
        return None
    caption = (
        "A row per group. Dot: events counted over events expected; upright line: 1; shaded: where 95% of the ratios lie when the fit is "
        "right. A level that is a term of the fit lies at 1 by the way a fit is made; a column that is no term and leaves its band "
        "is a difference between borrowers that the fit does not know."
    )
    keys = (Key("points", "s1", "actual / expected"), Key("band", "band", "95% band"))
    return Picture("ev-columns", caption, tuple(panels), tuple(tables), keys=keys)


def _ticks(scale: Scale) -> list[float]:
    step = 0.25 if scale.high - scale.low < 1.2 else 0.5 if scale.high - scale.low < 2.2 else 1.0
    return [step * k for k in range(20) if scale.low <= step * k <= scale.high]


def _ratio_line(r: Mapping[Any, Any], scale: Scale) -> DotRow:
    expected = float(r["expected"])
    low, high = float(r["low_events"]), float(r["high_events"])
    bar = Bar(low / expected, high / expected, float(r["ratio"]))
    out = not low <= float(r["events"]) <= high
    # Hard spaces: on a narrow screen the line may break before the bracket only.
    value = f"{num.plain(r['ratio'])} ({num.count(r['events'])}\u00a0/\u00a0{num.plain(expected, 1)})"
    return DotRow(str(r["group"]), ratio_row(bar, scale), value, "warn" if out else "")


def survival_picture(found: Evidence) -> Picture | None:
    """Observed product limit and fitted survival."""
    panels, tables = [], []
    for k, cause in enumerate(causes(found)):
        rows = rows_of(found, "survival", cause)
        if rows.empty:
            continue
        r = rows.iloc[int(np.argmax(rows["gap"].abs()))]
        inside = ((rows["fitted"] >= rows["lower"]) & (rows["fitted"] <= rows["upper"])).sum()
        note = (
            f"Fitted inside the band at {inside} of {int(rows['lower'].notna().sum())} ages. Largest gap at age {r['age']:.0f}: "
            f"observed {num.percent(r['observed'])}, fitted {num.percent(r['fitted'])}."
        )
        alt = f"{cause}: observed and fitted survival by age. {note}"
        svg = fig.survival_panel(rows, key=f"ev-surv{k}", alt=alt)
        panels.append(Panel(f"{cause}: share without the event", "across: age", svg, note))
        tables.append(evidence_table("survival", cause, rows))
    if not panels:
        return None
    caption = (
        "Observed: product limit of the cause with late entry, other exits as censoring, with its pointwise 95% band (shocks of periods not "
        "in it). Fitted: what the fit expects of the same loans at the same ages, so that entries and exits touch both alike. Where the fitted curve "
        "leaves the band and stays out, the age curve or the mix is off; the verdict judges all ages together."
    )
    keys = (Key("line", "ink", "observed"), Key("band", "band", "95% band"), Key("line", "s1", "fitted"))
    return Picture("ev-survival", caption, tuple(panels), tuple(tables), keys=keys)


def memory_picture(found: Evidence) -> Picture | None:
    """Autocorrelation of the residuals of calendar periods."""
    panels, tables = [], []
    for k, cause in enumerate(causes(found)):
        rows = rows_of(found, "autocorrelation", cause)
        if rows.empty:
            continue
        last = rows.iloc[-1]
        out = int((rows["autocorrelation"].abs() > rows["band"]).sum())
        note = (
            f"{out} of {len(rows)} lags outside the band, {last['periods']} periods. Ljung-Box {num.plain(last['ljung_box'], 1)}, "
            f"p {_p(last['p_value'])}."
        )
        alt = f"{cause}: autocorrelation of the residuals of calendar periods by lag. {note}"
        svg = fig.memory_panel(rows, key=f"ev-acf{k}", alt=alt)
        panels.append(Panel(cause, "autocorrelation; across: lag in periods", svg, note))
        tables.append(evidence_table("autocorrelation", cause, rows))
    if not panels:
        return None
    caption = (
        "Residual of a period: events less expected, over its standard deviation. Shaded: where 95% of the values lie without memory. "
        "Stems above the band at the first lags say that a driver that persists, such as a macro variable, is missing, misaligned or "
        "misshapen; a single one far out may be season or chance."
    )
    keys = (
        Key("points", "s1", "autocorrelation"),
        Key("diamond", "s1", "outside the band"),
        Key("band", "band", "95% band"),
    )
    return Picture("ev-memory", caption, tuple(panels), tuple(tables), keys=keys)


def calibration_picture(found: Evidence) -> Picture | None:
    """Predicted against actual rates by tenth on periods that the coefficients have not seen."""
    panels, tables = [], []
    for k, cause in enumerate(causes(found)):
        rows, terms = rows_of(found, "deciles", cause), rows_of(found, "calibration", cause)
        if rows.empty:
            continue
        events, expected = float(rows["events"].sum()), float(rows["expected"].sum())
        note = f"{num.count(events)} events against {num.plain(expected, 1)} expected"
        for r in terms.to_dict("records"):
            if r["term"] == "slope":
                note += f"; slope {num.plain(r['estimate'])} ({num.plain(r['lower'])} to {num.plain(r['upper'])}), ideal 1"
        none = int((rows["events"] == 0).sum())
        note += "." + _at_the_edge(none)
        alt = f"{cause}: actual against predicted rate by tenth of the prediction, later periods. {note}"
        if events > 0:
            svg = fig.calibration_panel(rows, key=f"ev-cal{k}", alt=alt)
            panels.append(Panel(f"{cause}: actual rate per period", "across: predicted rate", svg, note))
        tables.append(evidence_table("deciles", cause, rows))
        if len(terms):
            tables.append(evidence_table("calibration", cause, terms))
    if not panels:
        return None
    caption = (
        "The fit was made again on the periods up to the split and then asked about the later ones. Both axes are logarithmic; the line is "
        "equality. All points above the line: more events than foreseen; flatter than the line (slope below 1): predictions too far apart."
    )
    keys = (Key("points", "s1", "a tenth of the rows, with 95% band"), Key("line", "soft", "as predicted"))
    return Picture("ev-calibration", caption, tuple(panels), tuple(tables), keys=keys)


def lag_picture(found: Evidence) -> Picture | None:
    """Lead/lag profile of every macro term."""
    panels, tables = [], []
    for k, cause in enumerate(causes(found)):
        rows = rows_of(found, "lag_profile", cause)
        if rows.empty:
            continue
        for j, (term, mine) in enumerate(rows.groupby("term", sort=False)):
            own = mine[mine["study"]].iloc[0]
            if np.isnan(own["llf"]):
                continue
            top = mine[mine["best"]].iloc[0]
            note = (
                f"The study's lag {own['lag']:.0f} is {num.plain(own['behind_scaled'], 1)} units behind, shocks allowed for; "
                f"the best is lag {top['lag']:.0f}."
            ).replace("-", num.MINUS)
            alt = f"{cause}: log-likelihood by lag of {term}. {note}"
            svg = fig.lag_panel(mine, support=SUPPORT, key=f"ev-lag{k}-{j}", alt=alt)
            panels.append(Panel(f"{cause}: {term}", "log-likelihood below the best; across: lag", svg, note))
        tables.append(evidence_table("lag_profile", cause, rows))
    if not panels:
        return None
    caption = (
        f"Across: lag in macro periods, below 0 a lead. Lags above the dashed line ({SUPPORT:g} units below the best) cannot be told apart. "
        "The study's lag should lie above it or near it; a peak one period away is the mark of a misaligned calendar. Hollow: there the "
        "coefficient has the opposite sign. Lags that fall out of the picture are far behind; the table has them."
    )
    keys = (
        Key("line", "s0", "log-likelihood"), Key("diamond", "s1", "the study's lag"),
        Key("hollow", "s0", "opposite sign"), Key("dash", "soft", f"{SUPPORT:g} units below the best"),
    )  # fmt: skip
    return Picture("ev-lags", caption, tuple(panels), tuple(tables), keys=keys)


def stability_picture(found: Evidence) -> Picture | None:
    """Coefficients before and after the split, a row per term; the age baseline is in the table only."""
    panels, tables = [], []
    for cause in causes(found):
        rows = rows_of(found, "stability", cause)
        if rows.empty:
            continue
        aside = rows["term"].str.startswith("age[") & ~rows["macro"] | (rows["term"] == "intercept")
        shown = rows[~rows["held"] & ~aside].sort_values("macro", ascending=False, kind="stable")
        r = rows.iloc[0]
        note = (
            f"Before: {num.count(r['events_before'])} events in {r['periods_before']} periods; after: "
            f"{num.count(r['events_after'])} in {r['periods_after']}."
        )
        if pd.notna(r["joint_p"]):
            note += f" Macro terms together: p {_p(r['joint_p'])}."
        lines = tuple(_stability_line(r) for r in shown.to_dict("records"))
        if lines:
            panels.append(Panel(cause, "coefficient before → after", Markup(""), note, lines))
        tables.append(evidence_table("stability", cause, rows))
    if not panels:
        return None
    caption = (
        "The same terms estimated on the periods up to the split and on those after it, with 95% intervals; every row has a scale of its own and the "
        "upright line is 0. Intervals that lie apart say that the coefficient moved; one that changes side says that it cannot carry a "
        "stressed path. z: the difference over its standard error. Intercept and age curve are in the table."
    )
    keys = (Key("points", "s0", "before"), Key("square", "s1", "after"))
    return Picture("ev-stability", caption, tuple(panels), tuple(tables), keys=keys)


def _stability_line(r: Mapping[Any, Any]) -> DotRow:
    bars = []
    for side, colour, shape in (("before", "s0", "dot"), ("after", "s1", "square")):
        b, se = float(r[side]), float(r[f"se_{side}"])
        bars.append(Bar(b - _T95 * se, b + _T95 * se, b, colour, shape))
    ends = [0.0, *(b.lower for b in bars), *(b.upper for b in bars)]
    margin = 0.04 * (max(ends) - min(ends)) or 1.0
    scale = Scale(min(ends) - margin, max(ends) + margin)
    before, after = (num.plain(r[s], 3) for s in ("before", "after"))
    far = abs(float(r["z"])) > 2.576
    return DotRow(
        str(r["term"]),
        pair_row(bars, scale),
        f"{before} → {after}; z {num.plain(r['z'], 1)}",
        "warn" if far else "",
    )
