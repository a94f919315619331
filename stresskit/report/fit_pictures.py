"""Figures of the fits: hazards by age, and actual against expected events by calendar period."""

from __future__ import annotations

import numpy as np
import pandas as pd

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.evidence import (
    actual_expected_table,
    age_table,
    causes,
    period_table,
    yearly_actual_expected,
)
from stresskit.report.picture import Key, Panel, Picture
from stresskit.report.reading import at_largest, clock, numbers
from stresskit.report.tables import titled
from stresskit.runs.records import StudyResult

#: An age has enough loans for a band when it has this share of the largest number at risk.
MIN_AT_RISK = 0.05


def hazard_picture(result: StudyResult) -> Picture | None:
    """Hazard by age per cause; None when there is nothing to show."""
    panels, tables = [], []
    for k, cause in enumerate(causes(result)):
        rows = result.hazard_by_age[result.hazard_by_age["cause"] == cause].sort_values("age")
        if not len(rows):
            continue
        note = _hazard_note(rows)
        svg = fig.hazard_panel(
            rows,
            banded=_enough(rows),
            top=_hazard_top(rows),
            key=f"age{k}",
            alt=f"{cause} hazard by age, observed and fitted. {note}",
        )
        panels.append(Panel(cause, f"share of loans at risk per {clock(result).value}", svg, note))
        tables.append(titled(age_table(rows), f"Hazard of {cause} by age"))
    if not panels:
        return None
    caption = (
        f"Across: age in {clock(result).value}s on book. Points: observed hazard with its 95% band; line: the fit averaged "
        "over the loans at risk at that age. The line should run through the bands; a run of points on one side of it "
        "is a misfit of the age curve."
    )
    keys = (Key("points", "soft", "observed, with 95% band"), Key("line", "s1", "fitted"))
    return Picture("ages", caption, tuple(panels), tuple(tables), keys=keys)


def _hazard_note(rows: pd.DataFrame) -> str:
    peak = at_largest(rows, numbers(rows, "fitted"))
    inside = (rows["fitted"] >= rows["lower"]) & (rows["fitted"] <= rows["upper"])
    share = float(rows.loc[inside, "at_risk"].sum()) / max(1.0, float(rows["at_risk"].sum()))
    thin = len(rows) - len(_enough(rows))
    above = int((rows["observed"] > _hazard_top(rows)).sum())
    note = (
        f"Fitted peak {num.percent(peak['fitted'])} at age {int(peak['age'])}; fitted inside the band at "
        f"{int(inside.sum())} of {len(rows)} ages ({num.percent(share, 0)} of rows at risk)."
    )
    if thin:
        note += f" {thin} ages with few loans are drawn without their wide bands"
        note += f", {above} of their points lie above the picture." if above else "."
    return note


def _enough(rows: pd.DataFrame) -> pd.DataFrame:
    """Ages with enough loans at risk for their band to say something."""
    at_risk = numbers(rows, "at_risk")
    return rows.iloc[np.flatnonzero(at_risk >= MIN_AT_RISK * at_risk.max())]


def _hazard_top(rows: pd.DataFrame) -> float:
    """Height of the picture: the fit, and the bands of ages with enough loans."""
    highest = max(float(rows["fitted"].max()), float(_enough(rows)["upper"].max()))
    return 1.08 * highest if np.isfinite(highest) and highest > 0 else 1.0


def actual_expected_picture(result: StudyResult) -> Picture | None:
    """Events counted and expected by calendar period, per cause."""
    panels, tables = [], []
    for k, cause in enumerate(causes(result)):
        rows = result.actual_expected[result.actual_expected["cause"] == cause]
        if not len(rows):
            continue
        rows = _with_bands(result, cause, rows)
        note = _fit_note(rows) + _outside_note(rows)
        svg = fig.actual_expected_panel(
            rows, key=f"ae{k}", alt=f"{cause}: events counted and expected by calendar period. {note}"
        )
        panels.append(Panel(cause, f"events per {clock(result).value}", svg, note))
        tables.append(titled(actual_expected_table(rows), f"{cause}: by calendar year"))
        tables.append(titled(period_table(rows), f"{cause}: by calendar period"))
    if not panels:
        return None
    caption = (
        "Columns: events counted; line: events the fit expects on the loans at risk then, with the macro values observed. "
        "The totals are close by the way a fit is made; what counts is whether the line follows downturns. A downturn that the line "
        "misses is loss that a stressed path would miss too."
    )
    keys: tuple[Key, ...] = (Key("columns", "band", "counted"), Key("line", "s1", "expected"))
    if result.evidence is not None:
        caption += (
            " Shaded: where 95% of the counts lie when the fit is right, the shocks of single periods included; a run of columns "
            "on one side of it is what a missing driver looks like."
        )
        keys = (*keys, Key("band", "s1", "95% band"))
    return Picture("calendar", caption, tuple(panels), tuple(tables), keys=keys)


def _with_bands(result: StudyResult, cause: str, rows: pd.DataFrame) -> pd.DataFrame:
    """The rows with low_events and high_events of the evidence, NaN where it has none; as they are without evidence."""
    if result.evidence is None or "actual_expected" not in result.evidence.tables:
        return rows
    found = result.evidence.tables["actual_expected"]
    mine = found[(found["cause"] == cause) & (found["by"] == "period")].set_index("group")
    return rows.assign(**{c: rows["period"].map(mine[c]) for c in ("low_events", "high_events")})


def _outside_note(rows: pd.DataFrame) -> str:
    if "low_events" not in rows:
        return ""
    above, below = ((rows["events"] > rows["high_events"]).sum(), (rows["events"] < rows["low_events"]).sum())
    return f" {above} of {len(rows)} periods lie above the band, {below} below."


def _fit_note(rows: pd.DataFrame) -> str:
    years = yearly_actual_expected(rows)
    total = years.sum()
    years = years[years["expected"] > 0]
    if not len(years):
        return ""
    ratio = numbers(years, "events") / numbers(years, "expected")
    # Distance in standard deviations of a Poisson count: a year with few events is not "furthest" by chance.
    distance = np.abs(numbers(years, "events") - numbers(years, "expected")) / np.sqrt(
        numbers(years, "expected")
    )
    far = at_largest(years.reset_index().assign(ratio=ratio), distance)
    return (
        f"All periods: {num.count(total['events'])} against {num.plain(total['expected'], 1)}. Furthest off, for its size, in "
        f"{far['year']}: {num.count(far['events'])} against {num.plain(far['expected'], 1)} "
        f"(ratio {num.plain(far['ratio'])})."
    )
