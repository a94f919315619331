"""Run-off and constant balance sheet side by side; None where the study asks for run-off alone."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import pandas as pd

from stresskit.report import numbers as num
from stresskit.report.reading import name_of, scenarios
from stresskit.report.tables import Cell, Table, columns, cut, row
from stresskit.runs.records import StudyResult

SHEETS = (("run_off", "run-off"), ("constant", "constant"))
#: column -> heading
AMOUNTS = {
    "balance_end": "Balance at the end",
    "default_amount": "Default flow",
    "loss": "Loss, undiscounted",
    "el": "EL, discounted",
}
#: Rows of one breakdown's table.
MOST_ROWS = 240
_KEYS = ["by", "segment", "scenario", "until", "periods"]


def has_constant(result: StudyResult) -> bool:
    return result.years is not None and "balance_sheet" in result.years


def run_off(years: pd.DataFrame) -> pd.DataFrame:
    """The rows of today's book; all of them where no other balance sheet is shown."""
    if "balance_sheet" not in years:
        return years
    return years[years["balance_sheet"] == "run_off"].drop(columns="balance_sheet")


def beside(result: StudyResult) -> pd.DataFrame | None:
    """A row per segment, scenario and point with both sheets' amounts, ``el_run_off`` and so on, and the default rate of the
    constant one. Run-off is empty after the book's end."""
    years = result.years
    if years is None or not has_constant(result):
        return None
    left, right = (
        years[years["balance_sheet"] == sheet].set_index(_KEYS)[list(AMOUNTS)].add_suffix(f"_{sheet}")
        for sheet, _ in SHEETS
    )
    rate = years[years["balance_sheet"] == "constant"].set_index(_KEYS)["default_share"]
    return right.join(left, how="left").join(rate).reset_index()


def constant_tables(result: StudyResult) -> tuple[Table, tuple[Table, ...]] | None:
    """The whole book, and a table per breakdown."""
    rows = beside(result)
    if rows is None:
        return None
    whole = _table(result, rows[rows["by"] == ""], "Run-off and constant balance sheet", segments=False)
    parts = tuple(
        _table(result, mine, f"Both balance sheets by {str(by).replace('+', ' and ')}", segments=True)
        for by, mine in rows[rows["by"] != ""].groupby("by", sort=False)
    )
    return whole, parts


def _table(result: StudyResult, rows: pd.DataFrame, title: str, *, segments: bool) -> Table:
    out = []
    for segment in dict.fromkeys(rows["segment"]):
        for scenario in scenarios(result):
            mine = rows[(rows["segment"] == segment) & (rows["scenario"] == scenario)]
            for k, r in enumerate(mine.to_dict("records")):
                first = str(segment) if segments else name_of(scenario)
                head = [Cell(first, mark="first" if k == 0 else "again")]
                if segments:
                    head.append(Cell(name_of(scenario)))
                until = Cell(str(r["until"]), "as of" if r["periods"] == 0 else "")
                out.append(row(*head, until, *_cells(r)))
    kept, note = cut(out, rest="results.xlsx and years.csv", most=MOST_ROWS)
    heads = ("Segment", "Scenario") if segments else ("Scenario",)
    amounts = (f"{word}, {sheet}" for word in AMOUNTS.values() for _, sheet in SHEETS)
    labels = (*heads, "End of", *amounts, "Defaults over loans, constant")
    return Table(title, columns(*labels, words=len(heads) + 1), kept, note)


def _cells(r: Mapping[Any, Any]) -> list[str]:
    """Amounts, empty for flows at as_of and for a book that is gone."""
    values = [r[f"{column}_{sheet}"] for column in AMOUNTS for sheet, _ in SHEETS]
    shown = ["" if v != v else num.amount(v) for v in values]
    rate = r["default_share"]
    return [*shown, "" if rate != rate else num.percent(rate)]
