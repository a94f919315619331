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

#: An age counts for the height of a hazard picture when it has this share of the largest number at risk.
MIN_AT_RISK = 0.02


def hazard_picture(result: StudyResult) -> Picture | None:
    """Hazard by age per cause; None when there is nothing to show."""
    panels, tables = [], []
    for k, cause in enumerate(causes(result)):
        rows = result.hazard_by_age[result.hazard_by_age["cause"] == cause].sort_values("age")
        if not len(rows):
            continue
        top = _hazard_top(rows)
        beyond = int((rows["observed"] > top).sum())
        inside = (rows["fitted"] >= rows["lower"]) & (rows["fitted"] <= rows["upper"])
        share = float(rows.loc[inside, "at_risk"].sum()) / max(1.0, float(rows["at_risk"].sum()))
        peak = at_largest(rows, numbers(rows, "fitted"))
        note = (
            f"Fitted peak {num.percent(peak['fitted'])} at age {int(peak['age'])}; fitted inside the band at "
            f"{int(inside.sum())} of {len(rows)} ages ({num.percent(share, 0)} of rows at risk)."
        )
        if beyond:
            note += f" {beyond} points of ages with few loans lie above the picture."
        svg = fig.hazard_panel(
            rows, top=top, key=f"age{k}", alt=f"{cause} hazard by age, observed and fitted. {note}"
        )
        panels.append(Panel(cause, f"share of loans at risk per {clock(result).value}", svg, note))
        tables.append(titled(age_table(rows), f"Hazard of {cause} by age"))
    if not panels:
        return None
    caption = (
        f"Across: age in {clock(result).value}s on book. Points: observed hazard with its band; line: the fit averaged "
        "over the loans at risk at that age. The line should run through the bands; a run of points on one side of it "
        "is a misfit of the age curve. Bands widen where few loans are left."
    )
    keys = (Key("points", "soft", "observed, with band"), Key("line", "s1", "fitted"))
    return Picture("ages", caption, tuple(panels), tuple(tables), keys=keys)


def _hazard_top(rows: pd.DataFrame) -> float:
    """Height of the picture: the fit, and the bands of ages with enough loans."""
    enough = rows["at_risk"] >= MIN_AT_RISK * rows["at_risk"].max()
    highest = max(float(rows["fitted"].max()), float(rows.loc[enough, "upper"].max()))
    return 1.08 * highest if np.isfinite(highest) and highest > 0 else 1.0


def actual_expected_picture(result: StudyResult) -> Picture | None:
    """Events counted and expected by calendar period, per cause."""
    panels, tables = [], []
    for k, cause in enumerate(causes(result)):
        rows = result.actual_expected[result.actual_expected["cause"] == cause]
        if not len(rows):
            continue
        note = _fit_note(rows)
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
        "In total they agree by construction; what counts is whether the line follows downturns. A downturn that the line "
        "misses is loss that a stressed path would miss too."
    )
    keys = (Key("columns", "band", "counted"), Key("line", "s1", "expected"))
    return Picture("calendar", caption, tuple(panels), tuple(tables), keys=keys)


def _fit_note(rows: pd.DataFrame) -> str:
    years = yearly_actual_expected(rows)
    total = years.sum()
    years = years[years["expected"] > 0]
    if not len(years):
        return ""
    ratio = numbers(years, "events") / numbers(years, "expected")
    far = at_largest(years.reset_index().assign(ratio=ratio), np.abs(ratio - 1))
    return (
        f"All periods: {num.count(total['events'])} against {num.plain(total['expected'], 1)}. Furthest off in "
        f"{far['year']}: {num.count(far['events'])} against {num.plain(far['expected'], 1)} "
        f"(ratio {num.plain(far['ratio'])})."
    )
