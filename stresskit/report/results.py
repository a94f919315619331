"""Tables of results: scenario by segment, curves at year ends, loss by calendar year, loans left out."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from stresskit.panel.result import loans_alike
from stresskit.report import numbers as num
from stresskit.report.headline import adjusted_cell, adjusted_heading, against
from stresskit.report.reading import (
    Breakdown,
    Families,
    at_largest,
    book,
    breakdowns,
    calendar_years,
    clock,
    has_payoff,
    lines,
    name_of,
    numbers,
    reference,
    scenarios,
    worst,
)
from stresskit.report.tables import MOST_ROWS, Cell, Table, columns, cut, row, text, without
from stresskit.runs.records import PORTFOLIO, StudyResult

#: Segments of one breakdown in the result table; how many more there are is said.
MOST_SEGMENTS = 40
#: Rows of all result tables together, about.
MOST_RESULT_ROWS = 1_500
#: Year ends shown in curve tables.
YEARS = (1, 2, 3, 5, 7, 10, 15, 20, 25, 30)


def breakdown_table(result: StudyResult, breakdown: Breakdown | None) -> Table:
    """Scenario by segment of one breakdown (None: the whole book), the largest segments first."""
    by = "" if breakdown is None else breakdown.by
    segments = (PORTFOLIO,) if breakdown is None else breakdown.segments[: _most_segments(result)]
    rows = lines(result, by)
    base = reference(result)
    out = []
    for segment in segments:
        before = float(rows[(segment, base)]["el_lifetime"])
        for k, name in enumerate(scenarios(result)):
            r = rows[(segment, name)]
            out.append(
                row(
                    Cell(segment, mark="first") if k == 0 else Cell(segment, mark="again"),
                    name_of(name),
                    num.count(r["loans"]) if k == 0 else "",
                    num.amount(r["exposure"]) if k == 0 else "",
                    num.percent(r["pd_12m"]),
                    num.percent(r["pd_lifetime"]),
                    num.percent(r["pd_no_payoff"]),
                    num.percent(r["payoff_lifetime"]),
                    num.percent(r["lgd"]),
                    num.amount(r["el_12m"]),
                    num.amount(r["el_lifetime"]),
                    "" if name == base else against(float(r["el_lifetime"]), before),
                    *adjusted_cell(r),
                )
            )
    left = 0 if breakdown is None else len(breakdown.segments) - len(segments)
    note = "" if not left else (
        f"The {len(segments)} segments with the largest exposure; {left} more are in results.xlsx and summary.csv."
    )  # fmt: skip
    heads = columns(
        "Segment", "Scenario", "Loans", "Exposure", "12-month PD", "Lifetime PD", "PD without early repayment",
        "Repaid early", "LGD", "12-month EL", "Lifetime EL", f"Lifetime EL against {base}",
        *adjusted_heading(result), words=2,
    )  # fmt: skip
    title = "Whole book" if breakdown is None else f"By {breakdown.title}"
    table = Table(title, heads, tuple(out), note)
    if not has_payoff(result):
        table = without(table, "PD without early repayment", "Repaid early")
    return table if worst(result) else without(table, "Scenario", f"Lifetime EL against {base}")


def _most_segments(result: StudyResult) -> int:
    """Segments shown per breakdown, fewer when there are many breakdowns and scenarios."""
    share = MOST_RESULT_ROWS // (max(1, len(breakdowns(result))) * len(scenarios(result)))
    return max(5, min(MOST_SEGMENTS, share))


def curve_table(result: StudyResult, curves: Families, column: str, title: str) -> Table:
    """A cumulative share at year ends: a row per segment and scenario, and the last step."""
    per_year = clock(result).per_year
    last = int(result.segments["step"].max()) if len(result.segments) else 0
    years = tuple(y for y in YEARS if y * per_year < last)
    out: list[tuple[Cell, ...]] = []
    for segment, found in curves.items():
        for name in scenarios(result):
            if name not in found or len(out) > MOST_ROWS:
                continue
            values = dict(zip(found[name]["step"], found[name][column], strict=True))
            shown = [num.percent(values.get(y * per_year)) for y in years]
            out.append(row(segment, name_of(name), *shown, num.percent(found[name][column].iloc[-1])))
    heads = columns("Segment", "Scenario", *(f"Year {y}" for y in years), "End", words=2)
    note = f"The first {MOST_ROWS} rows; all of them are in results.xlsx and segments.parquet."
    return Table(title, heads, tuple(out[:MOST_ROWS]), note if len(out) > MOST_ROWS else "")


def loss_by_year(result: StudyResult, by: str = "", segment: str = PORTFOLIO) -> pd.DataFrame:
    """Expected loss of the book or a segment: calendar years (index) by scenario (columns), without years at the end that
    have none."""
    rows = result.segments[(result.segments["by"] == by) & (result.segments["segment"] == segment)]
    table = (
        rows.assign(year=calendar_years(rows["period"]))
        .pivot_table(index="year", columns="scenario", values="el", aggfunc="sum")
        .reindex(columns=list(scenarios(result)))
    )
    positive = table.index[(table.fillna(0) > 0).any(axis=1)]
    return table.loc[: positive[-1]] if len(positive) else table.head(1)


def year_table(result: StudyResult, table: pd.DataFrame) -> Table:
    """The table behind the loss by calendar year."""
    base = reference(result)
    names = [str(n) for n in table.columns]
    others = [n for n in names if n != base]
    values = {n: table[n].to_numpy(dtype=np.float64) for n in names}
    out = [
        row(
            str(year),
            *(num.amount(values[n][k]) for n in names),
            *(num.signed(num.amount(values[n][k] - values[base][k])) for n in others),
        )
        for k, year in enumerate(table.index)
    ]
    heads = columns("Year", *(name_of(n) for n in names), *(f"{name_of(n)} against {base}" for n in others))
    return Table("Expected loss by calendar year", heads, tuple(out))


def segment_year_table(result: StudyResult, breakdown: Breakdown, shown: Mapping[str, pd.DataFrame]) -> Table:
    """The table behind the loss of segments by calendar year: a row per segment and year."""
    names = scenarios(result)
    out = []
    for segment, table in shown.items():
        for k, year in enumerate(table.index):
            head = Cell(segment, mark="again" if k else "first")
            out.append(row(head, str(year), *(num.amount(table[n].iloc[k]) for n in names)))
    kept, note = cut(out, rest="results.xlsx and segments.parquet")
    heads = columns("Segment", "Year", *(name_of(n) for n in names), words=2)
    return Table(f"Expected loss by {breakdown.title} and calendar year", heads, kept, note)


def extrapolation_table(result: StudyResult) -> Table:
    """Shares of lifetime PD from beyond the data: the book, and where a segment is furthest beyond."""
    rows = book(result)
    parts = result.summary[result.summary["by"] != ""]
    out = []
    for name in scenarios(result):
        r = rows[name]
        mine = parts[parts["scenario"] == name]
        out.append(
            row(
                name_of(name),
                num.percent(r["from_extrapolated_age"]),
                _furthest(mine, "from_extrapolated_age"),
                num.percent(r["beyond_path"]),
                _furthest(mine, "beyond_path"),
            )
        )
    heads = columns(
        "Scenario", "From ages beyond the observed", "most in a segment", "From periods after the last given value",
        "most in a segment",
    )  # fmt: skip
    return Table("Share of lifetime PD from beyond the data", heads, tuple(out))


def _furthest(rows: pd.DataFrame, column: str) -> Cell | str:
    known = rows[rows[column].notna()]
    if not len(known):
        return num.MISSING
    far = at_largest(known, numbers(known, column))
    return Cell(num.percent(far[column]), f"{far['by']}: {far['segment']}")


def alike(frame: pd.DataFrame) -> float:
    """How many loans some rows of ``not_projected`` are."""
    return float(loans_alike(frame).sum())


def not_projected_table(result: StudyResult) -> Table | None:
    """Loans on book that were not projected, by reason, with the first few; None when there are none."""
    frame = result.not_projected
    if not len(frame):
        return None
    out = []
    for reason, mine in frame.groupby("reason", sort=True, dropna=False):
        first = ", ".join(str(x) for x in mine["loan"].head(5))
        more = f", … {len(mine) - 5:,} more" if len(mine) > 5 else ""
        known = mine["balance"].notna()
        balance = num.amount(mine["balance"][known].sum()) if known.any() else num.MISSING
        unknown = alike(mine[~known])
        out.append(
            row(
                text(reason),
                first + more,
                num.count(alike(mine)),
                Cell(balance, f"{num.count(unknown)} unknown" if unknown else ""),
            )
        )
    return Table(
        "Loans not projected", columns("Reason", "First loans", "Loans", "Known balance", words=2), tuple(out)
    )


def facts_table(title: str, facts: Mapping[str, object]) -> Table:
    """Names and values, for a record."""
    return Table(title, columns("Item", "Value", words=2), tuple(row(k, text(v)) for k, v in facts.items()))
