"""Native charts of the overview, in the report's colours: loss by scenario, PD term structure, loss by year."""

from __future__ import annotations

from typing import Any

import pandas as pd
from xlsxwriter.worksheet import Worksheet

from stresskit.report import numbers as num
from stresskit.report.reading import book, scenarios
from stresskit.report.style import COLOURS, Mark, marks
from stresskit.report.workbook_cells import PERCENT
from stresskit.report.workbook_front import BY_YEAR, FIGURES, OVERVIEW, TERM
from stresskit.runs.records import StudyResult

_SIZE = {"width": 600, "height": 330}
_DASHES = ("solid", "dash", "long_dash", "dash_dot", "round_dot", "long_dash_dot")
#: Calendar years shown; the sheet has them all.
MOST_YEARS = 10
_COMMAS = {1e9: ",,,", 1e6: ",,", 1e3: ",", 1.0: ""}


def add_charts(
    workbook: Any,
    worksheet: Worksheet,
    result: StudyResult,
    *,
    years: pd.DataFrame,
    term: pd.DataFrame,
    row: int,
) -> None:
    """Three charts from ``row`` of the overview on."""
    legend = marks(scenarios(result))
    worksheet.insert_chart(row, 0, _losses(workbook, result, legend))
    worksheet.insert_chart(row, 5, _years(workbook, result, legend, years), {"x_offset": 12})
    worksheet.insert_chart(row + 17, 0, _terms(workbook, legend, term))


def _colour(mark: Mark) -> str:
    return COLOURS[mark.colour][0]


def _axis(title: str, pattern: str | None = None, *, grid: bool = False, **more: Any) -> dict[str, Any]:
    soft, line = COLOURS["soft"][0], COLOURS["line"][0]
    return {
        "name": title,
        "name_font": {"size": 9, "bold": False, "color": soft},
        "num_font": {"size": 9, "color": soft},
        "line": {"color": line},
        "major_gridlines": {"visible": grid, "line": {"color": line, "width": 0.75}},
        **({"num_format": pattern} if pattern else {}),
        **more,
    }


def _chart(workbook: Any, kind: dict[str, str], title: str) -> Any:
    chart = workbook.add_chart(kind)
    chart.set_title(
        {"name": title, "name_font": {"size": 12, "bold": True, "color": COLOURS["ink"][0]}, "overlay": False}
    )
    chart.set_size(_SIZE)
    chart.set_chartarea({"border": {"color": COLOURS["line"][0]}})
    return chart


def _money(largest: float) -> tuple[str, str]:
    """Axis title and number format for amounts that reach ``largest``."""
    divisor, word = num.scale(largest)
    digits = "0.0" if largest / divisor < 10 else "0"
    unit = "currency of the loan file" if divisor == 1.0 else f"{word}, currency of the loan file"
    return unit, f"#,##{digits}{_COMMAS[divisor]}"


def _finer(pattern: str) -> str:
    """One more decimal."""
    return pattern.replace("0.0", "0.00") if "0.0" in pattern else pattern.replace("##0", "##0.0")


def _losses(workbook: Any, result: StudyResult, legend: tuple[Mark, ...]) -> Any:
    """A bar per scenario in its colour, the amount on it."""
    chart = _chart(workbook, {"type": "bar"}, "Lifetime expected loss by scenario")
    first, last, column = 7, 6 + len(legend), 1 + list(FIGURES).index("el_lifetime")
    unit, pattern = _money(max(float(r["el_lifetime"]) for r in book(result).values()))
    chart.add_series(
        {
            "name": "Lifetime EL",
            "categories": [OVERVIEW, first, 0, last, 0],
            "values": [OVERVIEW, first, column, last, column],
            "points": [{"fill": {"color": _colour(m)}} for m in legend],
            "data_labels": {"value": True, "num_format": _finer(pattern), "font": {"size": 9}},
            "gap": 60,
        }
    )
    chart.set_x_axis(_axis(unit, pattern, grid=True, min=0, label_position="high"))
    # the first scenario on top; that turns the value axis round, whose labels go back below by the line above
    chart.set_y_axis(_axis("", reverse=True))
    chart.set_legend({"none": True})
    return chart


def _years(workbook: Any, result: StudyResult, legend: tuple[Mark, ...], years: pd.DataFrame) -> Any:
    """Columns by scenario, the first years."""
    n = min(len(years), MOST_YEARS)
    title = "Expected loss by calendar year" + (f", first {n} years" if n < len(years) else "")
    chart = _chart(workbook, {"type": "column"}, title)
    for j, mark in enumerate(legend, start=1):
        chart.add_series(
            {
                "name": [BY_YEAR, 0, j],
                "categories": [BY_YEAR, 1, 0, n, 0],
                "values": [BY_YEAR, 1, j, n, j],
                "fill": {"color": _colour(mark)},
                "gap": 60,
            }
        )
    largest = float(years.iloc[:, 1:].to_numpy(dtype="float64").max(initial=0.0))
    unit, pattern = _money(largest)
    chart.set_x_axis(_axis("calendar year", "0"))
    chart.set_y_axis(_axis(unit, pattern, grid=True))
    chart.set_legend({"position": "bottom", "font": {"size": 9}})
    return chart


def _terms(workbook: Any, legend: tuple[Mark, ...], term: pd.DataFrame) -> Any:
    """Cumulative PD along the dates; scenarios told apart by colour and by dashes."""
    chart = _chart(
        workbook, {"type": "line"}, "PD term structure: cumulative share of today's loans in default"
    )
    n = len(term)
    for j, mark in enumerate(legend, start=3):
        chart.add_series(
            {
                "name": [TERM, 0, j],
                "categories": [TERM, 1, 2, n, 2],
                "values": [TERM, 1, j, n, j],
                "line": {"color": _colour(mark), "width": 2, "dash_type": _DASHES[(j - 3) % len(_DASHES)]},
            }
        )
    years = max(1, (term["period_end"].iloc[-1] - term["period_end"].iloc[0]).days // 365) if n else 1
    every = max(1, round(years / 8))
    chart.set_x_axis(
        _axis(
            "end of period",
            "yyyy",
            date_axis=True,
            major_unit=every,
            major_unit_type="years",
            minor_tick_mark="none",
        )
    )
    largest = float(term.iloc[:, 3:].to_numpy(dtype="float64").max(initial=0.0))
    chart.set_y_axis(
        _axis("cumulative PD, percent of loans", PERCENT if largest < 0.02 else "0%", grid=True, min=0)
    )
    chart.set_legend({"position": "bottom", "font": {"size": 9}})
    return chart
