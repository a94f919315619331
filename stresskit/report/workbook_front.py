"""The sheets that a reader opens first: overview and contents, and the defined names of the workbook."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from xlsxwriter.format import Format
from xlsxwriter.utility import quote_sheetname, xl_rowcol_to_cell
from xlsxwriter.worksheet import Worksheet

from stresskit.report.headline import headline, main_cautions
from stresskit.report.reading import book, name_of, reference, scenarios
from stresskit.report.style import COLOURS
from stresskit.report.workbook_cells import AMOUNT, COUNT, PERCENT, Formats, printed, write_text
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
    _merged(worksheet, 1, headline(result).words, formats.lead, per_line=110)
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
            number(worksheet, row, j, record[column], formats.number(pattern))
            names.add(
                f"{column}_{scenario}", at(OVERVIEW, row, j), f"{head} of the whole book, {name_of(scenario)}"
            )
        own = xl_rowcol_to_cell(row, loss)
        other = xl_rowcol_to_cell(reference_row, loss, row_abs=True)
        value, before = float(record["el_lifetime"]), float(rows[base]["el_lifetime"])
        worksheet.write_formula(
            row, loss + 1, f"={own}-{other}", formats.number(_SIGNED), shown(value - before)
        )
        worksheet.write_formula(
            row, loss + 2, f'=IF({other}=0,"",{own}/{other}-1)', formats.number(_SIGNED_SHARE),
            shown(value / before - 1) if before else "",
        )  # fmt: skip
        if adjusted:
            number(worksheet, row, loss + 3, record["el_lifetime_adjusted"], formats.number(AMOUNT))
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


def shown(value: float) -> float | str:
    """The value that a reader without a calculator sees in a formula's cell."""
    return value if math.isfinite(value) else ""


def number(worksheet: Worksheet, row: int, column: int, value: Any, pattern: Format) -> None:
    number = float(value)
    if math.isfinite(number):
        worksheet.write_number(row, column, number, pattern)


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
