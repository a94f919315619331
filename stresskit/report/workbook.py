"""A finished study as a workbook to calculate with: plain tables, real numbers, no formula from data.

Every sheet has its headings in the first row and one record per row. Text from data is stored as text,
whatever it begins with; what a spreadsheet might take for a formula when the cell is edited or copied
carries the quote prefix besides. The same result gives the same bytes.
"""

from __future__ import annotations

import datetime
import io
import math
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import xlsxwriter
from xlsxwriter.format import Format
from xlsxwriter.worksheet import Worksheet

from stresskit.report.analysis import analysis_sheets
from stresskit.report.evidence import flat_record
from stresskit.report.reading import book, reference
from stresskit.report.sheet import Sheet as Sheet
from stresskit.runs.records import StudyResult

#: Rows of a sheet (Excel's 1,048,576) less the headings.
MOST_ROWS = 1_048_575
#: Characters that a cell can hold.
MOST_CHARACTERS = 32_767
#: Stated in the file's properties instead of the clock.
_CREATED = datetime.datetime(2000, 1, 1)
_CUT = " ... (cut)"
_DANGEROUS = ("=", "+", "-", "@", "\t", "\r")

_PERCENT, _AMOUNT, _COUNT, _LONG = "0.00%", "#,##0", "#,##0", "0.000000"
_NUMBER_FORMATS: Mapping[str, str] = {
    **dict.fromkeys(
        (
            "pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime", "lgd", "from_extrapolated_age", "beyond_path",
            "el_12m_change", "el_lifetime_change", "pd", "default_share", "pd_regulatory", "lgd_regulatory",
        ),
        _PERCENT,
    ),
    **dict.fromkeys(("survival", "default", "payoff", "matured", "default_cumulative"), "0.0000%"),
    **dict.fromkeys(
        (
            "exposure", "el_12m", "el_lifetime", "el_12m_difference", "el_lifetime_difference", "balance",
            "default_amount", "el", "el_12m_adjusted", "el_lifetime_adjusted", "el_12m_before", "el_12m_after",
            "el_lifetime_before", "el_lifetime_after", "balance_start", "balance_end", "loss", "impairment",
            "outflow_stage_3", "written_off", "impairment_charge", "rwa_performing", "rwa_defaulted", "rwa",
            "el_regulatory", "el_less_provisions",
            *(f"{what}_stage_{k}" for what in ("balance", "impairment") for k in (1, 2, 3)),
        ),
        _AMOUNT,
    ),
    **dict.fromkeys(
        (
            "loans_start", "loans_end", "default_loans", "payoff_loans", "matured_loans",
            *(f"loans_stage_{k}" for k in (1, 2, 3)),
        ),
        "#,##0.0",
    ),
    **dict.fromkeys(("loans", "rows", "count", "events_default", "events_payoff"), _COUNT),
    **dict.fromkeys(("coef", "se", "statistic", "lower", "upper", "se_model", "se_loan", "se_period"), _LONG),
    **dict.fromkeys(("actual_rate", "fitted_rate"), "0.0000%"),
    **dict.fromkeys(("at_risk", "events"), _COUNT),
    **dict.fromkeys(("expected", "ratio", "z_binomial", "z_shock", "low_events", "high_events"), "#,##0.00"),
    **dict.fromkeys(("d2", "d2_together", "d2_apart", "excess", "z"), "#,##0.00"),
    **dict.fromkeys(("tail", "tail_together"), "0.00E+00"),
    **dict.fromkeys(("low", "high", "middle"), "0.0000"),
    "p_value": "0.0000",
    "value": "0.0000",
}  # fmt: skip


def write_workbook(result: StudyResult, path: Path) -> None:
    """Write the workbook. Raises OSError when the file cannot be written."""
    path.write_bytes(render_workbook(sheets(result)))


def sheets(result: StudyResult) -> tuple[Sheet, ...]:
    """The sheets of a result, in their order."""
    return (
        Sheet("summary", _summary(result), "summary.csv"),
        Sheet("segment curves", result.segments, "segments.parquet"),
        *_optional(result),
        Sheet("paths", result.paths, "paths.csv"),
        Sheet("coefficients", result.coefficients, "coefficients.csv"),
        Sheet("reconciliation", result.reconciliation, "reconciliation.csv"),
        Sheet("findings", result.findings, "findings.csv"),
        *_recovery(result),
        *_plausibility(result),
        *_evidence(result),
        *analysis_sheets(result.analyses),
        Sheet("record", _record(result), "manifest.json"),
    )


def _plausibility(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.plausibility
    if found is None:
        return ()
    return (
        Sheet("plausibility", found.scenarios, "plausibility/scenarios.csv"),
        Sheet("variables of paths", found.variables, "plausibility/variables.csv"),
        Sheet("pairs of variables", found.pairs, "plausibility/pairs.csv"),
        Sheet("episodes", found.episodes, "plausibility/episodes.csv"),
        Sheet("forecast", found.forecast, "plausibility/forecast.csv"),
    )


def _recovery(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.recovery
    if found is None:
        return ()
    names = {
        "LGD by segment": "summary",
        "recovery curves": "curves",
        "treatment of open cases": "treatments",
        "workouts by year": "resolved",
        "recovery triangle": "triangle",
        "open cases": "open_cases",
    }
    return tuple(Sheet(title, found.tables[name], f"recovery/{name}.csv") for title, name in names.items())


def _optional(result: StudyResult) -> tuple[Sheet, ...]:
    """Sheets of what only some studies ask for."""
    tables = (("years", result.years), ("adjustments", result.adjustments))
    return tuple(Sheet(name, table, f"{name}.csv") for name, table in tables if table is not None)


def _evidence(result: StudyResult) -> tuple[Sheet, ...]:
    found = result.evidence
    if found is None:
        return ()
    compared = found.tables.get("actual_expected")
    verdicts = Sheet("verdicts", found.verdict_table(), "evidence/verdicts.csv")
    if compared is None:
        return (verdicts,)
    return (verdicts, Sheet("actual against expected", compared, "evidence/actual_expected.csv"))


def render_workbook(content: Sequence[Sheet]) -> bytes:
    """The file's bytes. A table too long for a sheet is replaced by a note that names the file that has it."""
    out = io.BytesIO()
    workbook = xlsxwriter.Workbook(
        out,
        {
            "in_memory": True,
            "strings_to_formulas": False,
            "strings_to_urls": False,
            "strings_to_numbers": False,
            "nan_inf_to_errors": False,
        },
    )
    workbook.set_properties({"created": _CREATED})
    formats = _Formats(workbook)
    for sheet in content:
        worksheet = workbook.add_worksheet(sheet.name)
        if len(sheet.table) > MOST_ROWS:
            _refuse(worksheet, sheet, formats)
        else:
            _fill(worksheet, sheet.table, formats)
    workbook.close()
    return out.getvalue()


class _Formats:
    """Cell formats of one workbook, made once each."""

    def __init__(self, workbook: Any) -> None:
        self._workbook = workbook
        self._numbers: dict[str, Format] = {}
        self.head: Format = workbook.add_format(
            {"bold": True, "bottom": 1, "text_wrap": True, "valign": "top", "bg_color": "#E7E3D8"}
        )
        self.quoted: Format = workbook.add_format({"quote_prefix": True})
        self.note: Format = workbook.add_format({"italic": True})

    def number(self, pattern: str) -> Format:
        if pattern not in self._numbers:
            self._numbers[pattern] = self._workbook.add_format({"num_format": pattern})
        return self._numbers[pattern]


def _refuse(worksheet: Worksheet, sheet: Sheet, formats: _Formats) -> None:
    worksheet.write_string(
        0,
        0,
        f"{len(sheet.table):,} rows are more than a sheet can hold ({MOST_ROWS:,}). "
        f"They are in the file {sheet.elsewhere} of this run's folder.",
        formats.note,
    )


def _fill(worksheet: Worksheet, table: pd.DataFrame, formats: _Formats) -> None:
    for j, name in enumerate(table.columns):
        _text(worksheet, 0, j, str(name), formats.head, formats.head)
        column = table[name]
        if pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column):
            _numbers(worksheet, j, column, formats.number(_pattern(str(name), column)))
            width = 15
        else:
            for i, value in enumerate(column):
                _cell(worksheet, i + 1, j, value, formats)
            width = min(60, max([len(str(name)), *(len(str(v)) for v in column.head(200))], default=8) + 2)
        worksheet.set_column(j, j, width)
    worksheet.freeze_panes(1, min(3, _leading_text(table)))
    if len(table) and len(table.columns):
        worksheet.autofilter(0, 0, len(table), len(table.columns) - 1)


def _leading_text(table: pd.DataFrame) -> int:
    """Text columns before the first number: those stay in view."""
    n = 0
    for name in table.columns:
        if pd.api.types.is_numeric_dtype(table[name]):
            break
        n += 1
    return n if n < len(table.columns) else 1


def _pattern(name: str, column: pd.Series) -> str:
    if name in _NUMBER_FORMATS:
        return _NUMBER_FORMATS[name]
    return "0" if pd.api.types.is_integer_dtype(column) else "General"


def _numbers(worksheet: Worksheet, j: int, column: pd.Series, pattern: Format) -> None:
    """Numbers as numbers; missing ones stay empty, infinite ones become text."""
    for i, value in enumerate(column.to_numpy(dtype=np.float64, na_value=np.nan)):
        number = float(value)
        if math.isfinite(number):
            worksheet.write_number(i + 1, j, number, pattern)
        elif math.isinf(number):
            worksheet.write_string(i + 1, j, "infinite" if number > 0 else "minus infinite")


def _cell(worksheet: Worksheet, i: int, j: int, value: Any, formats: _Formats) -> None:
    """One cell of a column that is not all numbers."""
    if value is None or value is pd.NA or (isinstance(value, float) and math.isnan(value)):
        return
    if isinstance(value, bool | np.bool_):
        worksheet.write_boolean(i, j, bool(value))
    elif isinstance(value, int | float | np.integer | np.floating) and math.isfinite(value):
        worksheet.write_number(i, j, float(value))
    else:
        _text(worksheet, i, j, str(value), None, formats.quoted)


def _text(worksheet: Worksheet, i: int, j: int, text: str, plain: Format | None, quoted: Format) -> None:
    """Text as text; cut, and saying so, where a cell cannot hold it."""
    if len(text) > MOST_CHARACTERS:
        text = text[: MOST_CHARACTERS - len(_CUT)] + _CUT
    dangerous = text.lstrip(" \n\x00").startswith(_DANGEROUS)
    if worksheet.write_string(i, j, text, quoted if dangerous else plain) != 0:
        raise ValueError(f"cell ({i}, {j}) of the workbook could not be written")


def _summary(result: StudyResult) -> pd.DataFrame:
    """The summary with its differences to the reference scenario, in amounts and as shares."""
    table = result.summary.copy()
    base = reference(result)
    before = table[table["scenario"] == base].set_index(["by", "segment"])
    at = pd.MultiIndex.from_frame(table[["by", "segment"]])
    for column in ("el_12m", "el_lifetime"):
        own = before[column].reindex(at).to_numpy(dtype=np.float64)
        gap = table[column].to_numpy(dtype=np.float64) - own
        table[f"{column}_difference"] = gap
        table[f"{column}_change"] = np.divide(gap, own, out=np.full(len(own), np.nan), where=own != 0)
    return table


def _record(result: StudyResult) -> pd.DataFrame:
    """Notes, cautions and the run record; texts line by line."""
    base = reference(result)
    rows = [
        ("note", "study", result.study.study),
        ("note", "as_of", result.study.as_of),
        ("note", "reference", f"differences in the sheet summary are to scenario {base}"),
        ("note", "whole book", f"{len(book(result))} scenarios; by is empty and segment is portfolio"),
        ("note", "units", "shares as fractions shown in percent; amounts in the currency of the loan file"),
        ("note", "loan by loan", "loans.parquet in this run's folder"),
        *(("caution", str(k), c) for k, c in enumerate(result.cautions, start=1)),
    ]
    for cause, facts in result.fits.items():
        rows += [("fit", f"{cause}.{key}", str(value)) for key, value in facts.items()]
    short, long = flat_record(result.record)
    rows += [("record", key, value) for key, value in short.items()]
    rows += [("text", key, line) for key, text in long.items() for line in text.splitlines()]
    return pd.DataFrame(rows, columns=["kind", "item", "value"])
