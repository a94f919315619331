"""The sheets that a reader opens first: overview with charts, losses with totals, checks, contents and names.

Formulas stand here and nowhere else in the workbook. They are sums and differences of cells that this module
placed; no text of the study or of the loans ever goes into one.
"""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import pandas as pd
from xlsxwriter.format import Format
from xlsxwriter.utility import quote_sheetname, xl_rowcol_to_cell
from xlsxwriter.worksheet import Worksheet

from stresskit.report.headline import headline, main_cautions, name_of
from stresskit.report.reading import book, reference, scenarios
from stresskit.report.sheet import Sheet
from stresskit.report.style import COLOURS
from stresskit.report.workbook_cells import AMOUNT, COUNT, PERCENT, Formats, printed, write_text
from stresskit.report.workbook_tables import losses_by_segment
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult

OVERVIEW, CONTENTS, BY_SEGMENT, BY_YEAR, TERM, CHECKS = (
    "overview", "contents", "loss by segment", "loss by year", "PD term structure", "checks",
)  # fmt: skip
#: column of the summary -> heading, format
FIGURES: dict[str, tuple[str, str]] = {
    "loans": ("Loans", COUNT),
    "exposure": ("Exposure", AMOUNT),
    "pd_12m": ("12-month PD", PERCENT),
    "pd_lifetime": ("Lifetime PD", PERCENT),
    "lgd": ("LGD", PERCENT),
    "el_12m": ("12-month EL", AMOUNT),
    "el_lifetime": ("Lifetime EL", AMOUNT),
}
#: Row of the overview that holds the headings of its table.
_HEAD_ROW = 6
_WIDTH = 10
_SIGNED, _SIGNED_SHARE = "+#,##0;-#,##0;0", "+0.0%;-0.0%;0.0%"


@dataclass(frozen=True, slots=True)
class Named:
    """A defined name: what it is called, what it refers to, what it means."""

    name: str
    refers: str
    about: str


@dataclass(slots=True)
class Names:
    """The defined names of one workbook, each once."""

    found: list[Named] = field(default_factory=list)

    def add(self, name: str, refers: str, about: str) -> None:
        """Letters, digits and underscores of ``name``; a number behind it where it is taken."""
        clean = re.sub(r"\W", "_", name, flags=re.ASCII)[:200]
        taken = {n.name.lower() for n in self.found}
        unique, k = clean, 1
        while unique.lower() in taken:
            k += 1
            unique = f"{clean}_{k}"
        self.found.append(Named(unique, refers, about))


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


def at(sheet: str, row: int, column: int) -> str:
    """Absolute reference to a cell."""
    return f"{quote_sheetname(sheet)}!{xl_rowcol_to_cell(row, column, row_abs=True, col_abs=True)}"


def span(sheet: str, first: tuple[int, int], last: tuple[int, int]) -> str:
    """Absolute reference to a range."""
    ends = (xl_rowcol_to_cell(*p, row_abs=True, col_abs=True) for p in (first, last))
    return f"{quote_sheetname(sheet)}!{':'.join(ends)}"


def figure_at(result: StudyResult, scenario: str, column: str) -> str:
    """Where the overview holds a figure of the whole book."""
    row = _HEAD_ROW + 1 + scenarios(result).index(scenario)
    return at(OVERVIEW, row, 1 + list(FIGURES).index(column))


def _merged(worksheet: Worksheet, row: int, text: str, style: Format, *, per_line: int = 125) -> None:
    """A text across the sheet, in a row that is high enough for it."""
    worksheet.merge_range(row, 0, row, _WIDTH, "", style)
    write_text(worksheet, row, 0, text, style, style)
    worksheet.set_row(row, 15.5 * max(1, math.ceil(len(text) / per_line)) + 2)


def fill_overview(worksheet: Worksheet, result: StudyResult, formats: Formats, names: Names) -> int:
    """Headline, safety words, table and main cautions. Returns the first free row."""
    worksheet.hide_gridlines(2)
    worksheet.set_column(0, 0, 27)
    worksheet.set_column(1, _WIDTH, 13.5)
    write_text(worksheet, 0, 0, result.study.study, formats.title, formats.title)
    worksheet.set_row(0, 24)
    _merged(worksheet, 1, headline(result).sentence, formats.lead, per_line=110)
    for k, words in enumerate(STANDING):
        _merged(worksheet, 2 + k, words, formats.safety, per_line=160)
    title = f"The whole book by scenario, loans as of {result.study.as_of}"
    write_text(worksheet, _HEAD_ROW - 1, 0, title, formats.part, formats.part)
    row = _overview_table(worksheet, result, formats, names)
    note = (
        "Amounts in the currency of the loan file; lifetime EL is discounted. PDs are means over loans. "
        "All sheets are listed on the sheet contents, all cautions on the sheet record."
    )
    _merged(worksheet, row, note, formats.note)
    row += 2
    cautions = main_cautions(result, STANDING)
    if cautions:
        worksheet.write_string(row, 0, "Main cautions", formats.part)
        for k, words in enumerate(cautions, start=1):
            _merged(worksheet, row + k, f"{k}. {words}", formats.wrapped)
        row += len(cautions) + 2
    printed(worksheet, heading=False, pages=1)
    return row


def _overview_table(worksheet: Worksheet, result: StudyResult, formats: Formats, names: Names) -> int:
    rows, base = book(result), reference(result)
    order = scenarios(result)
    adjusted = "el_lifetime_adjusted" in result.summary
    heads = [h for h, _ in FIGURES.values()] + [f"Lifetime EL against {base}", "Change"]
    heads += ["Lifetime EL after adjustments"] if adjusted else []
    write_text(worksheet, _HEAD_ROW, 0, "Scenario", formats.head, formats.head_quoted)
    for j, head in enumerate(heads, start=1):
        write_text(worksheet, _HEAD_ROW, j, head, formats.head_right, formats.head_quoted)
    worksheet.set_row(_HEAD_ROW, 48)
    loss = 1 + list(FIGURES).index("el_lifetime")
    reference_row = _HEAD_ROW + 1 + order.index(base)
    for k, scenario in enumerate(order):
        row, record = _HEAD_ROW + 1 + k, rows[scenario]
        write_text(worksheet, row, 0, name_of(scenario), formats.text, formats.quoted)
        for j, (column, (head, pattern)) in enumerate(FIGURES.items(), start=1):
            _number(worksheet, row, j, record[column], formats.number(pattern))
            names.add(
                f"{column}_{scenario}", at(OVERVIEW, row, j), f"{head} of the whole book, {name_of(scenario)}"
            )
        own = xl_rowcol_to_cell(row, loss)
        other = xl_rowcol_to_cell(reference_row, loss, row_abs=True)
        value, before = float(record["el_lifetime"]), float(rows[base]["el_lifetime"])
        worksheet.write_formula(
            row, loss + 1, f"={own}-{other}", formats.number(_SIGNED), _shown(value - before)
        )
        worksheet.write_formula(
            row, loss + 2, f'=IF({other}=0,"",{own}/{other}-1)', formats.number(_SIGNED_SHARE),
            _shown(value / before - 1) if before else "",
        )  # fmt: skip
        if adjusted:
            _number(worksheet, row, loss + 3, record["el_lifetime_adjusted"], formats.number(AMOUNT))
            cell = at(OVERVIEW, row, loss + 3)
            names.add(
                f"el_lifetime_adjusted_{scenario}",
                cell,
                f"Lifetime EL after adjustments, {name_of(scenario)}",
            )
    last = _HEAD_ROW + len(order)
    names.add(
        "table_overview", span(OVERVIEW, (_HEAD_ROW, 0), (last, len(heads))), "The whole book by scenario"
    )
    return last + 1


def _shown(value: float) -> float | str:
    """The value that a reader without a calculator sees in a formula's cell."""
    return value if math.isfinite(value) else ""


def _number(worksheet: Worksheet, row: int, column: int, value: Any, pattern: Format) -> None:
    number = float(value)
    if math.isfinite(number):
        worksheet.write_number(row, column, number, pattern)


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
                _number(worksheet, i, j, value, formats.number(AMOUNT))
        write_text(worksheet, last + 1, 0, "Total", formats.total("@"), formats.total("@"))
        for j, name in enumerate(table.columns[1:], start=1):
            cells = f"{xl_rowcol_to_cell(first, j)}:{xl_rowcol_to_cell(last, j)}"
            total = math.fsum(float(v) for v in table.iloc[:, j])
            worksheet.write_formula(last + 1, j, f"=SUM({cells})", formats.total(AMOUNT), _shown(total))
            if j > 1:
                found.append(_segment_check(result, title, str(name), at(BY_SEGMENT, last + 1, j), total))
        names.add(
            f"table_loss_by_{title}",
            span(BY_SEGMENT, (row, 0), (last + 1, 2 + len(order))),
            f"Lifetime EL by {title}",
        )
        row = last + 4
    worksheet.freeze_panes(1, 1)
    printed(worksheet, heading=True)
    return tuple(found)


def _segment_check(result: StudyResult, title: str, column: str, total_at: str, total: float) -> Check:
    scenario = reference(result) if column == "exposure" else column
    figure = "exposure" if column == "exposure" else "el_lifetime"
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
        total = math.fsum(table[name])
        worksheet.write_formula(last + 1, j, f"=SUM({cells})", formats.total(AMOUNT), _shown(total))
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
        j, values = list(table.columns).index(name), table[name].dropna()
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
        worksheet.write_formula(i, 2, check.formula, number, _shown(check.value))
        worksheet.write_formula(i, 3, check.engine, number, _shown(check.expected))
        gap = check.value - check.expected
        worksheet.write_formula(
            i, 4, f"=C{i + 1}-D{i + 1}", formats.number("0.0E+00;-0.0E+00;0"), _shown(gap)
        )
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


def fill_contents(
    worksheet: Worksheet,
    listed: Sequence[tuple[str, str, int, str]],
    names: Sequence[Named],
    formats: Formats,
) -> None:
    """``listed``: sheet, what it holds, rows, the file with the same; below them the defined names."""
    link = formats.of(font_color=COLOURS["accent"][0], underline=1, indent=1)
    for j, head in enumerate(("sheet", "what it holds", "rows", "the same in full")):
        worksheet.write_string(0, j, head, formats.head_right if j == 2 else formats.head)
    for i, (sheet, about, rows, file) in enumerate(listed, start=1):
        worksheet.write_url(i, 0, f"internal:{quote_sheetname(sheet)}!A1", link, sheet)
        write_text(worksheet, i, 1, about, formats.text, formats.quoted)
        if rows:
            worksheet.write_number(i, 2, rows, formats.number(COUNT))
        worksheet.write_string(i, 3, file, formats.text)
    row = len(listed) + 3
    for j, head in enumerate(("defined name", "what it means", "", "refers to")):
        worksheet.write_string(row, j, head, formats.head)
    for i, named in enumerate(names, start=row + 1):
        worksheet.write_string(i, 0, named.name, formats.text)
        write_text(worksheet, i, 1, named.about, formats.text, formats.quoted)
        write_text(worksheet, i, 3, named.refers, formats.text, formats.quoted)
    worksheet.set_column(0, 0, 34)
    worksheet.set_column(1, 1, 74)
    worksheet.set_column(2, 2, 10)
    worksheet.set_column(3, 3, 40)
    worksheet.freeze_panes(1, 1)
    printed(worksheet, heading=False)
