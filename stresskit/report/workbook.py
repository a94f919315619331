"""A finished study as a workbook to read and to calculate with.

First the sheets for a reader: overview with charts, contents with the defined names, losses by segment and by
year with totals, checks. Then plain tables with their headings in the first row and one record per row: real
numbers and dates, no formula. The same result gives the same bytes.
"""

from __future__ import annotations

import datetime
import io
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import xlsxwriter

from stresskit.report import workbook_checks as checked
from stresskit.report import workbook_front as front
from stresskit.report import workbook_tables as tables
from stresskit.report.analysis import analysis_sheets
from stresskit.report.reading import scenarios
from stresskit.report.sheet import Sheet, section, sheet_name
from stresskit.report.workbook_cells import AMOUNT, Formats, fill, with_dates
from stresskit.report.workbook_charts import add_charts
from stresskit.runs.records import StudyResult

__all__ = [
    "Sheet",
    "left_out",
    "render_result",
    "render_workbook",
    "section",
    "sheet_name",
    "sheets",
    "write_workbook",
]

#: Stated in the file's properties instead of the clock.
_CREATED = datetime.datetime(2000, 1, 1)
_OPTIONS = {
    "in_memory": True,
    "strings_to_formulas": False,
    "strings_to_urls": False,
    "strings_to_numbers": False,
    "nan_inf_to_errors": False,
}


def write_workbook(result: StudyResult, path: Path, *, extra: Sequence[Sheet] = ()) -> None:
    """Write the workbook; ``extra`` are sheets of further sections (:func:`section`). Raises OSError when it cannot be written."""
    path.write_bytes(render_result(result, extra=extra))


def left_out(result: StudyResult, *, extra: Sequence[Sheet] = ()) -> tuple[str, ...]:
    """A sentence for each table that is too long for a sheet, with the file that has it."""
    return tuple(
        f"Sheet {s.name} of results.xlsx: {s.too_long}" for s in sheets(result, extra=extra) if s.too_long
    )


def sheets(result: StudyResult, *, extra: Sequence[Sheet] = ()) -> tuple[Sheet, ...]:
    """The plain tables of a result, in their order; ``extra`` stand before the record."""
    found = (
        Sheet(
            "summary", tables.summary(result), "summary.csv", "Scenario by segment, with differences to the reference scenario"
        ),
        *_optional(result),
        Sheet(
            "segment curves", with_dates(result.segments, "period"), "segments.parquet", "Scenario by segment by period"
        ),
        Sheet("paths", with_dates(result.paths, "period"), "paths.csv", "Every macro value used, and whether it was given"),
        Sheet("coefficients", result.coefficients, "coefficients.csv", "Hazard models, errors clustered by period"),
        Sheet("reconciliation", result.reconciliation, "reconciliation.csv", "Loan rows in, left out and used"),
        Sheet("findings", result.findings, "findings.csv", "What the quality rules found in the data"),
        *_recovery(result),
        *_plausibility(result),
        *_evidence(result),
        *analysis_sheets(result.analyses),
        *extra,
        Sheet("record", tables.record(result), "manifest.json", "Cautions, versions, digests, the study's text"),
    )  # fmt: skip
    return _unique(found)


def _unique(found: Sequence[Sheet]) -> tuple[Sheet, ...]:
    """Sheets with names that a workbook accepts, none twice."""
    taken = [front.OVERVIEW, front.CONTENTS, front.BY_SEGMENT, front.BY_YEAR, front.TERM, front.CHECKS]
    out = []
    for s in found:
        name = sheet_name(s.name, taken)
        taken.append(name)
        out.append(s if name == s.name else Sheet(name, s.table, s.elsewhere, s.about, s.formats))
    return tuple(out)


def _plausibility(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.plausibility
    if found is None:
        return ()
    names = {
        "plausibility": ("scenarios", "How far each scenario lies from the forecast of the study's VAR"),
        "variables of paths": ("variables", "The same, variable by variable"),
        "pairs of variables": ("pairs", "The same for pairs of variables"),
        "episodes": ("episodes", "Stretches of history that come nearest"),
        "forecast": ("forecast", "What the VAR expects when no scenario is known"),
    }
    return tuple(
        Sheet(title, getattr(found, name), f"plausibility/{name}.csv", about)
        for title, (name, about) in names.items()
    )


def _recovery(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.recovery
    if found is None:
        return ()
    names = {
        "LGD by segment": ("summary", "LGD from workouts, open ones as censored"),
        "recovery curves": ("curves", "Share of the amount owed that has come back, by time since default"),
        "treatment of open cases": ("treatments", "LGD under other treatments of open cases"),
        "workouts by year": ("resolved", "Workouts by year of default"),
        "recovery triangle": ("triangle", "Recoveries by year of default and time since"),
        "open cases": ("open_cases", "What is still expected from open cases"),
    }
    return tuple(
        Sheet(title, found.tables[name], f"recovery/{name}.csv", about)
        for title, (name, about) in names.items()
    )


def _optional(result: StudyResult) -> tuple[Sheet, ...]:
    """Sheets of what only some studies ask for."""
    found = []
    if result.years is not None:
        about = (
            "Calendar years by segment: flows and stocks; stages and capital where the study asks for them"
        )
        found.append(Sheet("year view", with_dates(result.years, "until"), "years.csv", about))
    if result.adjustments is not None:
        found.append(
            Sheet("adjustments", result.adjustments, "adjustments.csv", "Floors and overlays, one by one")
        )
    return tuple(found)


def _evidence(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.evidence
    if found is None:
        return ()
    compared = found.tables.get("actual_expected")
    about = "What was asked of the fits, and what was found"
    verdicts = Sheet("verdicts", found.verdict_table(), "evidence/verdicts.csv", about)
    if compared is None:
        return (verdicts,)
    about = "Events that happened and events that the fits expect"
    return (verdicts, Sheet("actual against expected", compared, "evidence/actual_expected.csv", about))


def render_workbook(content: Sequence[Sheet]) -> bytes:
    """Plain tables alone as a file's bytes. A table too long for a sheet is replaced by a note that names the file that has it."""
    out = io.BytesIO()
    workbook = _new(out)
    formats = Formats(workbook)
    for sheet in content:
        fill(workbook.add_worksheet(sheet.name), sheet, formats)
    workbook.close()
    return out.getvalue()


def _new(out: io.BytesIO) -> Any:
    workbook = xlsxwriter.Workbook(out, _OPTIONS)
    workbook.set_properties({"created": _CREATED})
    workbook.set_calc_mode("auto")
    return workbook


def render_result(result: StudyResult, *, extra: Sequence[Sheet] = ()) -> bytes:
    """The whole workbook's bytes."""
    out = io.BytesIO()
    workbook = _new(out)
    formats, names = Formats(workbook), front.Names()
    plain = sheets(result, extra=extra)
    years, term = _wide(result)
    order = [front.OVERVIEW, front.CONTENTS, front.BY_SEGMENT, front.BY_YEAR, front.TERM, front.CHECKS]
    made = {name: workbook.add_worksheet(name) for name in (*order, *(s.name for s in plain))}
    row = front.fill_overview(made[front.OVERVIEW], result, formats, names)
    checks = [*checked.fill_by_segment(made[front.BY_SEGMENT], result, formats, names)]
    for sheet in (years, term, *plain):
        fill(made[sheet.name], sheet, formats)
        if len(sheet.table) and not sheet.too_long:
            last = (len(sheet.table), len(sheet.table.columns) - 1)
            names.add(f"table_{sheet.name}", front.span(sheet.name, (0, 0), last), sheet.about or sheet.name)
    checks += checked.add_year_totals(made[front.BY_YEAR], years.table, result, formats)
    checks += checked.term_checks(term.table, result)
    checks += checked.reconciliation_checks(next(s for s in plain if s.elsewhere == "reconciliation.csv"))
    checked.fill_checks(made[front.CHECKS], checks, formats, names)
    add_charts(workbook, made[front.OVERVIEW], result, years=years.table, term=term.table, row=row)
    front.fill_contents(made[front.CONTENTS], _listed(years, term, plain), names.found, formats)
    for named in names.found:
        workbook.define_name(named.name, f"={named.refers}")
    made[front.OVERVIEW].activate()
    workbook.close()
    return out.getvalue()


def _wide(result: StudyResult) -> tuple[Sheet, Sheet]:
    """Losses by year and PD term structure, a column per scenario: what the charts draw."""
    names = [tables.column_of(n) for n in scenarios(result)]
    years = Sheet(
        front.BY_YEAR, tables.loss_by_year(result), "segments.parquet",
        "Discounted expected loss of the whole book by calendar year and scenario, with totals", dict.fromkeys(names, AMOUNT),
    )  # fmt: skip
    term = Sheet(
        front.TERM, tables.term_structure(result), "segments.parquet",
        "Cumulative PD of the whole book by period and scenario", dict.fromkeys(names, "0.0000%"),
    )  # fmt: skip
    return years, term


def _listed(years: Sheet, term: Sheet, plain: Sequence[Sheet]) -> list[tuple[str, str, int, str]]:
    """What the sheet contents says of every sheet."""
    return [
        (front.OVERVIEW, "The figures of the whole book, cautions, charts", 0, "report.html"),
        (front.BY_SEGMENT, "Lifetime expected loss by segment and scenario, with totals", 0, "summary.csv"),
        (years.name, years.about, len(years.table), years.elsewhere),
        (term.name, term.about, len(term.table), term.elsewhere),
        (front.CHECKS, "Sums that must come out twice, recomputed by formulas of this workbook", 0, ""),
        *((s.name, s.about, len(s.table), s.elsewhere) for s in plain),
    ]
