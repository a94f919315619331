"""The report's section on LGD: how it is made, what it is by segment and scenario, and along the calendar."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from stresskit.report import figures as fig
from stresskit.report import numbers as num
from stresskit.report.balance_sheets import run_off
from stresskit.report.picture import Panel, Picture, scenario_marks
from stresskit.report.reading import decimal_years, finest, lines, name_of, scenarios
from stresskit.report.recovery_page import RecoveryPage, recovery_page
from stresskit.report.tables import Cell, Table, columns, row
from stresskit.runs.records import PORTFOLIO, StudyResult
from stresskit.spec.study import RecoveryLgd

#: Segments in the table.
MOST_SEGMENTS = 40


@dataclass(frozen=True, slots=True)
class LgdPage:
    """How it is made in a sentence, LGD by segment and scenario, by calendar year (with a year view), recoveries."""

    rule: str
    table: Table
    picture: Picture | None
    recovery: RecoveryPage | None


def lgd_page(result: StudyResult) -> LgdPage:
    return LgdPage(_rule(result), _table(result), _picture(result), recovery_page(result))


def _rule(result: StudyResult) -> str:
    lgd = result.study.loss.lgd
    if isinstance(lgd, RecoveryLgd):
        return (
            "LGD comes from the workouts below: what they recover by the end of workout, less what it costs."
        )
    if hasattr(lgd, "constant"):
        return f"One LGD for every loan and every scenario: {num.percent(lgd.constant)}. A scenario moves the PD only."
    if hasattr(lgd, "collateral"):
        return "LGD is what the collateral does not cover along the path; it moves with the index of the collateral's value."
    return f"LGD is stated by {getattr(lgd, 'by', 'segment')} and the same in every scenario; what differs between scenarios is the mix of defaults."


def _table(result: StudyResult) -> Table:
    """LGD of the book and of the finest breakdown: a row per segment, a column per scenario."""
    names, cut = scenarios(result), finest(result)
    book = lines(result, "")
    out = [row(Cell("whole book"), *(num.percent(book[(PORTFOLIO, n)]["lgd"]) for n in names))]
    note = "Lifetime loss per unit of discounted exposure at default."
    if cut is not None:
        found = lines(result, cut.by)
        out += [
            row(s, *(num.percent(found[(s, n)]["lgd"]) for n in names)) for s in cut.segments[:MOST_SEGMENTS]
        ]
        left = len(cut.segments) - MOST_SEGMENTS
        note += f" {left} more segments are in results.xlsx and summary.csv." if left > 0 else ""
    title = "LGD by scenario" if cut is None else f"LGD by {cut.title} and scenario"
    return Table(title, columns("Segment", *(name_of(n) for n in names)), tuple(out), note)


def _picture(result: StudyResult) -> Picture | None:
    """LGD of the defaults of each calendar year; None without a year view, or where it never moves."""
    if result.years is None:
        return None
    rows = run_off(result.years)
    rows = rows[(rows["by"] == "") & rows["lgd"].notna()]
    # one value throughout is said by the table
    if not len(rows) or float(rows["lgd"].max() - rows["lgd"].min()) < 1e-9:
        return None
    curves, labels = {}, dict[float, str]()
    table = []
    for name in scenarios(result):
        mine = rows[rows["scenario"] == name]
        # a year stands at its number, as in the pictures of loss
        x = decimal_years(mine["until"]) - 1.0
        curves[name] = (x, mine["lgd"].to_numpy(dtype=np.float64))
        labels |= dict(zip(x.tolist(), ("year to " + mine["until"].astype(str)), strict=True))
        table += [
            row(Cell(name_of(name), mark="again" if k else "first"), str(until), num.percent(v))
            for k, (until, v) in enumerate(zip(mine["until"], mine["lgd"], strict=True))
        ]
    legend = scenario_marks(result)
    alt = "LGD of the defaults of each calendar year by scenario, whole book."
    svg = fig.point_panel(curves, legend, percent=True, key="lgd", alt=alt, labels=labels)
    caption = "Loss per unit of exposure at default, undiscounted, of the loans that default in each year; today's book only."
    panel = Panel("LGD by calendar year", "whole book", svg)
    tables = (Table("LGD by calendar year", columns("Scenario", "Year to", "LGD", words=2), tuple(table)),)
    return Picture("lgd-years", caption, (panel,), tables, legend)
