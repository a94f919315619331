"""Totals of the workbook and the checks on them: sums that must come out twice, one of them by the engine.

Formulas are made of cells that these functions placed; no text of the study or of the loans goes into one.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import pandas as pd
from xlsxwriter.utility import xl_rowcol_to_cell
from xlsxwriter.worksheet import Worksheet

from stresskit.report.reading import book, name_of, reference, scenarios
from stresskit.report.sheet import Sheet
from stresskit.report.workbook_cells import AMOUNT, COUNT, Formats, printed, write_text
from stresskit.report.workbook_front import (
    BY_SEGMENT,
    BY_YEAR,
    CHECKS,
    FIGURES,
    TERM,
    Names,
    at,
    figure_at,
    number,
    shown,
    span,
)
from stresskit.report.workbook_tables import column_of, losses_by_segment
from stresskit.runs.records import StudyResult


@dataclass(frozen=True, slots=True)
class Check:
    """One sum that must come out twice: a formula over the sheets, and the figure of the engine."""

    what: str
    scope: str
    formula: str
    engine: str
    value: float
    expected: float
    pattern: str


def _total(values: pd.Series) -> float:
    """What SUM gives: empty cells do not count."""
    return math.fsum(float(v) for v in values if math.isfinite(float(v)))


def fill_by_segment(
    worksheet: Worksheet, result: StudyResult, formats: Formats, names: Names
) -> tuple[Check, ...]:
    """A block per breakdown with a row of totals; the totals are what the checks compare."""
    order = scenarios(result)
    worksheet.set_column(0, 0, 30)
    worksheet.set_column(1, 2 + len(order), 17)
    worksheet.write_string(
        0,
        0,
        "Lifetime expected loss by segment, in the currency of the loan file; loans and exposure at as_of",
        formats.part,
    )
    row, found = 2, list[Check]()
    for title, table in losses_by_segment(result):
        for j, name in enumerate(table.columns):
            head = name_of(str(name)) if j > 2 else str(name).capitalize() if j else str(name)
            style = formats.head_right if j else formats.head
            write_text(worksheet, row, j, head, style, formats.head_quoted)
        first, last = row + 1, row + len(table)
        for i, record in enumerate(table.itertuples(index=False), start=first):
            write_text(worksheet, i, 0, str(record[0]), formats.text, formats.quoted)
            for j, value in enumerate(record[1:], start=1):
                number(worksheet, i, j, value, formats.number(AMOUNT))
        write_text(worksheet, last + 1, 0, "Total", formats.total("@"), formats.total("@"))
        for j, name in enumerate(table.columns[1:], start=1):
            cells = f"{xl_rowcol_to_cell(first, j)}:{xl_rowcol_to_cell(last, j)}"
            total = _total(table.iloc[:, j])
            worksheet.write_formula(last + 1, j, f"=SUM({cells})", formats.total(AMOUNT), shown(total))
            if j > 1:
                scenario = None if j == 2 else str(name)
                found.append(_segment_check(result, title, scenario, at(BY_SEGMENT, last + 1, j), total))
        names.add(
            f"table_loss_by_{title}",
            span(BY_SEGMENT, (row, 0), (last + 1, 2 + len(order))),
            f"Lifetime EL by {title}",
        )
        row = last + 4
    worksheet.freeze_panes(1, 1)
    printed(worksheet, heading=True)
    return tuple(found)


def _segment_check(
    result: StudyResult, title: str, loss_in: str | None, total_at: str, total: float
) -> Check:
    """Of the losses in a scenario, or of the exposure (None), which is the same in all."""
    scenario, figure = (reference(result), "exposure") if loss_in is None else (loss_in, "el_lifetime")
    expected = float(book(result)[scenario][figure])
    what = f"{FIGURES[figure][0]}: segments by {title} add up to the whole book"
    return Check(
        what,
        name_of(scenario),
        f"={total_at}",
        f"={figure_at(result, scenario, figure)}",
        total,
        expected,
        AMOUNT,
    )


def add_year_totals(
    worksheet: Worksheet, table: pd.DataFrame, result: StudyResult, formats: Formats
) -> tuple[Check, ...]:
    """A row of totals below the losses by year: they are the lifetime expected losses."""
    last, found = len(table), list[Check]()
    worksheet.write_string(last + 1, 0, "Total", formats.total("@"))
    for j, name in enumerate(scenarios(result), start=1):
        cells = f"{xl_rowcol_to_cell(1, j)}:{xl_rowcol_to_cell(last, j)}"
        total = _total(table[column_of(name)])
        worksheet.write_formula(last + 1, j, f"=SUM({cells})", formats.total(AMOUNT), shown(total))
        found.append(
            Check(
                "Lifetime EL: calendar years add up to it", name_of(name), f"={at(BY_YEAR, last + 1, j)}",
                f"={figure_at(result, name, 'el_lifetime')}", total, float(book(result)[name]["el_lifetime"]), AMOUNT,
            )
        )  # fmt: skip
    return tuple(found)


def term_checks(table: pd.DataFrame, result: StudyResult) -> tuple[Check, ...]:
    """The last point of each scenario's PD term structure is its lifetime PD."""
    found = []
    for name in scenarios(result):
        column = column_of(name)
        j, values = list(table.columns).index(column), table[column].dropna()
        if len(values):
            found.append(
                Check(
                    "Lifetime PD: the last point of the term structure", name_of(name),
                    f"={at(TERM, int(values.index[-1]) + 1, j)}", f"={figure_at(result, name, 'pd_lifetime')}",
                    float(values.iloc[-1]), float(book(result)[name]["pd_lifetime"]), "0.000000%",
                )
            )  # fmt: skip
    return tuple(found)


def reconciliation_checks(sheet: Sheet) -> tuple[Check, ...]:
    """What went in is what was used and what was left out, column by column."""
    table, found = sheet.table, list[Check]()
    if not len(table) or sheet.too_long:
        return ()
    columns = [c for c in ("rows", "loans", "events_default", "events_payoff") if c in table]

    def ranged(j: int) -> str:
        return span(sheet.name, (1, j), (len(table), j))

    place = list(table.columns)
    key = ranged(place.index("what"))
    for column in columns:
        cells = ranged(place.index(column))
        used, left, came = (
            float(table.loc[table["what"] == what, column].sum()) for what in ("used", "left out", "in")
        )
        formula = f'=SUMIFS({cells},{key},"used")+SUMIFS({cells},{key},"left out")'
        found.append(
            Check(
                f"Reconciliation, {column}: used and left out add up to what went in", "loan history", formula,
                f'=SUMIFS({cells},{key},"in")', used + left, came, COUNT,
            )
        )  # fmt: skip
    return tuple(found)


def fill_checks(worksheet: Worksheet, checks: Sequence[Check], formats: Formats, names: Names) -> None:
    """A row per check; the last column says by a formula whether both sides agree."""
    for j, head in enumerate(("check", "scope", "from the sheets", "engine", "difference", "result")):
        style = formats.head if j in (0, 1, 5) else formats.head_right
        worksheet.write_string(0, j, head, style)
    for i, check in enumerate(checks, start=1):
        write_text(worksheet, i, 0, check.what, formats.text, formats.quoted)
        write_text(worksheet, i, 1, check.scope, formats.text, formats.quoted)
        number = formats.number(check.pattern)
        worksheet.write_formula(i, 2, check.formula, number, shown(check.value))
        worksheet.write_formula(i, 3, check.engine, number, shown(check.expected))
        gap = check.value - check.expected
        worksheet.write_formula(i, 4, f"=C{i + 1}-D{i + 1}", formats.number("0.0E+00;-0.0E+00;0"), shown(gap))
        agrees = abs(gap) <= 1e-9 * max(1.0, abs(check.expected))
        worksheet.write_formula(
            i, 5, f'=IF(ABS(E{i + 1})<=0.000000001*MAX(1,ABS(D{i + 1})),"agrees","DIFFERS")', formats.good,
            "agrees" if agrees else "DIFFERS",
        )  # fmt: skip
    n = len(checks)
    worksheet.conditional_format(
        1, 5, max(n, 1), 5, {"type": "cell", "criteria": "==", "value": '"DIFFERS"', "format": formats.warn}
    )
    worksheet.set_column(0, 0, 72)
    worksheet.set_column(1, 1, 22)
    worksheet.set_column(2, 5, 17)
    worksheet.freeze_panes(1, 1)
    if n:
        worksheet.autofilter(0, 0, n, 5)
        names.add("table_checks", span(CHECKS, (0, 0), (n, 5)), "Sums that must come out twice")
    printed(worksheet, heading=True)
