"""Figures of the result: cumulative PD and share on book, whole and by segment, and loss by calendar year."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.picture import MOST_PANELS, Panel, Picture, scenario_marks
from stresskit.report.reading import (
    Breakdown,
    as_of_year,
    at_largest,
    clock,
    families,
    finest,
    has_payoff,
    name_of,
    numbers,
    reference,
    worst,
)
from stresskit.report.results import curve_table, loss_by_year, segment_year_table, year_table
from stresskit.report.tables import titled
from stresskit.runs.records import PORTFOLIO, WEIGHTED, StudyResult

Curves = dict[str, tuple[fig.Array, fig.Array]]


def _curves(result: StudyResult, found: Mapping[str, pd.DataFrame], column: str) -> Curves:
    """Years after as_of and shares by scenario, from step 0, cut where every loan has left."""
    start = 1.0 if column == "survival" else 0.0
    length = max((_alive(rows) for rows in found.values()), default=1)
    out: Curves = {}
    for name, rows in found.items():
        rows = rows.head(length)
        x = np.concatenate([[0.0], rows["step"].to_numpy(dtype=float) / clock(result).per_year])
        out[name] = (x, np.concatenate([[start], rows[column].to_numpy(dtype=float)]))
    return out


def _steps(result: StudyResult, found: Mapping[str, pd.DataFrame]) -> dict[float, str]:
    """Years after as_of -> the period that ends there."""
    rows = next(iter(found.values()), pd.DataFrame({"step": [], "period": []}))
    years = rows["step"].to_numpy(dtype=float) / clock(result).per_year
    return {0.0: result.study.as_of} | dict(zip(years.tolist(), rows["period"].astype(str), strict=True))


def _alive(rows: pd.DataFrame) -> int:
    """Steps until no loan is left."""
    going = np.flatnonzero((rows["survival"].to_numpy() > 1e-9) | (rows["default"].to_numpy() > 0))
    return min(len(rows), int(going[-1]) + 2) if going.size else 1


def book_picture(result: StudyResult) -> Picture:
    """Cumulative PD and share on book of the whole portfolio."""
    legend = scenario_marks(result)
    panels, tables = [], []
    whole = families(result, "", (PORTFOLIO,))
    for column, title, words in (
        ("default_cumulative", "Cumulative PD", "share of today's loans that have defaulted by then"),
        ("survival", "Still on book", "share of today's loans neither defaulted, repaid nor matured"),
    ):
        curves = _curves(result, whole[PORTFOLIO], column)
        note = _ends(result, curves) if column == "default_cumulative" else ""
        svg = fig.curve_panel(
            curves,
            legend,
            labels=_steps(result, whole[PORTFOLIO]),
            key=f"book-{column[:3]}",
            alt=f"{title} of the book by scenario over years after as_of. {note}",
        )
        panels.append(Panel(title, words, svg, note))
        tables.append(titled(curve_table(result, whole, column, title), f"{title}, whole book"))
    exits = (
        "Early repayment is an exit of its own: a loan that is repaid can no longer default."
        if has_payoff(result)
        else "No early repayment is modelled: a loan ends by default or at maturity."
    )
    stress = " The distance between two PD lines is the share of loans that the stress adds to the defaults."
    caption = f"Across: years after {result.study.as_of}. {exits}" + (stress if worst(result) else "")
    return Picture("book", caption, tuple(panels), tuple(tables), legend)


def _ends(result: StudyResult, curves: Curves) -> str:
    ends = {n: float(y[-1]) for n, (_, y) in curves.items()}
    base, bad = reference(result), worst(result)
    if bad is None or base not in ends or bad not in ends:
        return "At the end: " + ", ".join(f"{name_of(n)} {num.percent(v)}" for n, v in ends.items()) + "."
    return f"At the end {num.percent(ends[bad])} in {bad}, {num.percent(ends[base])} in {base}."


def segment_picture(result: StudyResult, column: str) -> Picture | None:
    """Small multiples of the finest breakdown, the largest segments by exposure; None without segments."""
    breakdown = finest(result)
    if breakdown is None:
        return None
    legend = scenario_marks(result)
    everything = families(result, breakdown.by, breakdown.segments)
    shown = {s: _curves(result, everything[s], column) for s in breakdown.segments[:MOST_PANELS]}
    top = 1.0
    if column != "survival":
        top = 1.06 * max((float(y.max()) for c in shown.values() for _, y in c.values()), default=1.0) or 1.0
    words = "Cumulative PD" if column != "survival" else "Share still on book"
    panels = []
    for k, (segment, curves) in enumerate(shown.items()):
        note = _ends(result, curves) if column != "survival" else ""
        svg = fig.curve_panel(
            curves,
            legend,
            labels=_steps(result, everything[segment]),
            key=f"seg-{column[:3]}{k}",
            alt=f"{words} of {segment} by scenario. {note}",
            size=fig.SMALL,
            top=top,
        )
        panels.append(Panel(segment, breakdown.title, svg, note, segment=k))
    table = curve_table(result, everything, column, f"{words} by {breakdown.title}")
    key = "segments-pd" if column != "survival" else "segments-book"
    return Picture(
        key, _segment_caption(result, breakdown, words), tuple(panels), (table,), legend, small=True
    )


def _segment_caption(result: StudyResult, breakdown: Breakdown, words: str) -> str:
    n = len(breakdown.segments)
    which = (
        f"the {MOST_PANELS} segments with the largest exposure of {n} (all of them are in results.xlsx)"
        if n > MOST_PANELS
        else "every segment, the largest exposure first"
    )
    return (
        f"{words} by {breakdown.title}: {which}. Across: years after {result.study.as_of}; all panels have one height, "
        "so they can be compared by eye."
    )


def switch_segments(result: StudyResult) -> tuple[str, ...]:
    """Segments that the pictures show one by one, in the order of their panels."""
    breakdown = finest(result)
    return () if breakdown is None else breakdown.segments[:MOST_PANELS]


# ---- loss ----------------------------------------------------------------------------------------


def year_picture(result: StudyResult) -> Picture:
    """Expected loss of the book by calendar year, and the difference to the reference."""
    table = loss_by_year(result)
    legend = scenario_marks(result)
    base, bad = reference(result), worst(result)
    divisor, word = num.scale(float(np.nanmax(table.to_numpy(dtype=float))))
    where = bad or base
    peak = at_largest(table.reset_index(), numbers(table, where))
    note = f"Largest year in {where}: {peak['year']} with {num.amount(peak[where])}."
    bars = table.size <= fig.MOST_COLUMNS
    alt = f"Expected loss by calendar year. {note}"
    svg = fig.year_panel(table, legend, divisor=divisor, bars=bars, key="year", alt=alt)
    panels = [Panel("Expected loss by calendar year", word, svg, note)]
    if len(table.columns) > 1:
        gap = table.drop(columns=base).sub(table[base], axis=0)
        divisor, word = num.scale(float(np.nanmax(np.abs(gap.to_numpy(dtype=float)))))
        note = _gap_note(gap, base, bad)
        alt = f"Difference to {base} by calendar year. {note}"
        svg = fig.year_panel(gap, legend, divisor=divisor, bars=bars, key="gap", alt=alt)
        panels.append(Panel(f"Difference to {base}", word, svg, note))
    end = as_of_year(result)
    look = ""
    if bars and len(table.columns) > 1:
        look = "Columns stand in the order of the legend" + (
            "; outlined: the weighted mean." if WEIGHTED in table.columns else "."
        )
    caption = (
        "Discounted expected loss of defaults in each year, today's book only (no new business, so it shrinks). "
        + look
        + (f" The first year, {int(end)}, starts after {result.study.as_of}." if end % 1 else "")
    )
    return Picture("years", caption, tuple(panels), (year_table(result, table),), legend)


def segment_year_picture(result: StudyResult) -> Picture | None:
    """Expected loss by calendar year of the segments that have a panel; None without segments."""
    breakdown = finest(result)
    if breakdown is None:
        return None
    legend = scenario_marks(result)
    shown = {s: loss_by_year(result, by=breakdown.by, segment=s) for s in switch_segments(result)}
    largest = max(float(np.nanmax(t.to_numpy(dtype=float))) for t in shown.values())
    divisor, word = num.scale(largest)
    base, bad = reference(result), worst(result)
    panels = []
    for k, (segment, table) in enumerate(shown.items()):
        note = f"{num.short(float(table[base].sum()))} in {base}"
        note += "." if bad is None else f", {num.short(float(table[bad].sum()))} in {bad}."
        svg = fig.year_panel(
            table, legend, divisor=divisor, bars=False, key=f"sy{k}", size=fig.SMALL, top=1.06 * largest / divisor or 1.0,
            alt=f"Expected loss of {segment} by calendar year and scenario. {note}",
        )  # fmt: skip
        panels.append(Panel(segment, word, svg, note, segment=k))
    caption = _segment_caption(result, breakdown, "Expected loss").replace(
        "years after", "calendar years after"
    )
    tables = (segment_year_table(result, breakdown, shown),)
    return Picture("segments-years", caption, tuple(panels), tables, legend, small=True)


def _gap_note(gap: pd.DataFrame, base: str, bad: str | None) -> str:
    if bad is None or bad not in gap or not gap[bad].sum():
        return ""
    first = float(gap[bad].head(3).sum()) / float(gap[bad].sum())
    if first > 1:
        # more than all of it: what follows takes some back
        return f"The first three years shown hold all of the difference between {bad} and {base}; later ones take some of it back."
    return f"{num.percent(first, 0)} of the difference between {bad} and {base} falls in the first three years shown."
