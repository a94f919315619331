"""Cells of the workbook: formats, plain tables, text that stays text, and the limits of a sheet.

Text from data is written as text whatever it begins with. What a spreadsheet might take for a formula when
the cell is edited or copied carries the quote prefix besides, so that it stays text there too.
"""

from __future__ import annotations

import datetime
import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from xlsxwriter.format import Format
from xlsxwriter.worksheet import Worksheet

from stresskit.core.period import Frequency, frequency_of_label, parse_period
from stresskit.report.sheet import Sheet
from stresskit.report.style import COLOURS

#: Characters that a cell can hold.
MOST_CHARACTERS = 32_767
_CUT = " ... (cut)"
_DANGEROUS = ("=", "+", "-", "@", "\t", "\r")
_DATE = "yyyy-mm-dd"
#: Characters beyond which a text is wrapped, and those that fit across a landscape page.
_LONG_TEXT, _PAGE_WIDTH = 90, 190
_DAY_ZERO = np.datetime64("1899-12-30")

PERCENT, AMOUNT, COUNT = "0.00%", "#,##0", "#,##0"
_LONG = "0.000000"
_NUMBER_FORMATS: Mapping[str, str] = {
    **dict.fromkeys(
        (
            "pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime", "lgd", "from_extrapolated_age", "beyond_path",
            "el_12m_change", "el_lifetime_change", "pd", "default_share", "pd_regulatory", "lgd_regulatory",
        ),
        PERCENT,
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
        AMOUNT,
    ),
    **dict.fromkeys(
        (
            "loans_start", "loans_end", "default_loans", "payoff_loans", "matured_loans",
            *(f"loans_stage_{k}" for k in (1, 2, 3)),
        ),
        "#,##0.0",
    ),
    **dict.fromkeys(("loans", "rows", "count", "events_default", "events_payoff"), COUNT),
    **dict.fromkeys(("coef", "se", "statistic", "lower", "upper", "se_model", "se_loan", "se_period"), _LONG),
    **dict.fromkeys(("actual_rate", "fitted_rate"), "0.0000%"),
    **dict.fromkeys(("at_risk", "events"), COUNT),
    **dict.fromkeys(("expected", "ratio", "z_binomial", "z_shock", "low_events", "high_events"), "#,##0.00"),
    **dict.fromkeys(("d2", "d2_together", "d2_apart", "excess", "z"), "#,##0.00"),
    **dict.fromkeys(("tail", "tail_together"), "0.00E+00"),
    **dict.fromkeys(("low", "high", "middle"), "0.0000"),
    "p_value": "0.0000",
    "value": "0.0000",
}  # fmt: skip


def with_dates(table: pd.DataFrame, column: str) -> pd.DataFrame:
    """The table with the last day of each period as a date, beside the column of period labels."""
    if column not in table:
        return table
    place = list(table.columns).index(column) + 1
    out = table.copy(deep=False)
    out.insert(place, f"{column}_date" if column != "period" else "period_end", last_days(table[column]))
    return out


def last_days(labels: pd.Series) -> NDArray[np.datetime64]:
    """Last day of each labelled period, datetime64[s]."""
    codes, names = pd.factorize(labels.astype(str))
    return np.array([_last_day(str(text)) for text in names], dtype="datetime64[s]")[codes]


def _last_day(label: str) -> np.datetime64:
    frequency = frequency_of_label(label)
    months = 12 // Frequency(frequency).per_year
    after = (parse_period(label, frequency) + 1) * months
    return np.datetime64(f"{after // 12:04d}-{after % 12 + 1:02d}", "D") - np.timedelta64(1, "D")


#: How names of columns begin whose tables other sections make (report/analysis.py goes by the same).
_SHARES = ("pd", "lgd", "share", "rate", "coverage")
_AMOUNTS = ("el", "loss", "exposure", "balance", "amount", "rwa")


class Formats:
    """Cell formats of one workbook, made once each."""

    def __init__(self, workbook: Any) -> None:
        self._workbook = workbook
        self._made: dict[tuple[tuple[str, Any], ...], Format] = {}
        ink, soft, wash, warn = (COLOURS[c][0] for c in ("ink", "soft", "wash", "warn"))
        head = {
            "bold": True,
            "bottom": 1,
            "text_wrap": True,
            "valign": "top",
            "bg_color": wash,
            "font_color": ink,
        }
        self.head, self.head_right = self.of(**head, indent=1), self.of(**head, align="right")
        self.head_quoted = self.of(**head, indent=1, quote_prefix=True)
        self.text = self.of(indent=1)
        self.quoted = self.of(quote_prefix=True, indent=1)
        self.long = self.of(indent=1, text_wrap=True, valign="top")
        self.long_quoted = self.of(quote_prefix=True, indent=1, text_wrap=True, valign="top")
        self.note = self.of(italic=True, font_color=soft, text_wrap=True, valign="top")
        self.title = self.of(bold=True, font_size=16, font_color=ink)
        self.lead = self.of(font_size=12, font_color=ink, text_wrap=True, valign="top")
        self.safety = self.of(bold=True, font_color=warn, text_wrap=True, valign="top")
        self.wrapped = self.of(text_wrap=True, valign="top")
        self.part = self.of(bold=True, font_size=12, font_color=COLOURS["accent"][0])
        self.warn = self.of(bold=True, font_color=warn)
        self.good = self.of(font_color=COLOURS["good"][0])

    def of(self, **properties: Any) -> Format:
        """The format with these properties (xlsxwriter's names)."""
        key = tuple(sorted(properties.items()))
        if key not in self._made:
            self._made[key] = self._workbook.add_format(properties)
        return self._made[key]

    def number(self, pattern: str) -> Format:
        return self.of(num_format=pattern)

    def total(self, pattern: str) -> Format:
        """A number in a row of totals."""
        return self.of(num_format=pattern, bold=True, top=1)


def fill(worksheet: Worksheet, sheet: Sheet, formats: Formats) -> None:
    """Write a plain table, or the words that say where it is."""
    if sheet.too_long:
        worksheet.set_column(0, 0, 110)
        write_text(worksheet, 0, 0, sheet.too_long, formats.note, formats.note)
        return
    table = sheet.table
    widths = [_fill_column(worksheet, j, table.iloc[:, j], sheet, formats) for j in range(table.shape[1])]
    for j, width in enumerate(widths):
        worksheet.set_column(j, j, width)
    kept = min(3, _leading_text(table))
    worksheet.freeze_panes(1, kept)
    if len(table) and len(table.columns):
        worksheet.autofilter(0, 0, len(table), len(table.columns) - 1)
    printed(worksheet, heading=True, across=math.ceil(sum(widths) / _PAGE_WIDTH) or 1)
    worksheet.repeat_columns(0, max(0, kept - 1))


def _fill_column(worksheet: Worksheet, j: int, column: pd.Series, sheet: Sheet, formats: Formats) -> int:
    """Heading and values of one column. Returns the width it needs, in characters."""
    name = str(column.name)
    numeric = pd.api.types.is_numeric_dtype(column) and not pd.api.types.is_bool_dtype(column)
    write_text(worksheet, 0, j, name, formats.head_right if numeric else formats.head, formats.head_quoted)
    if numeric:
        _numbers(worksheet, j, column, formats.number(sheet.formats.get(name) or _pattern(name, column)))
        return min(26, max(12, len(name) + 3))
    if pd.api.types.is_datetime64_dtype(column):
        _dates(worksheet, j, column, formats.number(_DATE))
        return max(13, len(name) + 3)
    longest = max((len(str(v)) for v in column), default=0)
    styles = (formats.text, formats.quoted) if longest <= _LONG_TEXT else (formats.long, formats.long_quoted)
    for i, value in enumerate(column):
        _value(worksheet, i + 1, j, value, formats, styles)
    return min(_LONG_TEXT, max(longest, len(name) + 3)) + 2


def printed(worksheet: Worksheet, *, heading: bool, across: int = 1, pages: int = 0) -> None:
    """Landscape A4, so many pages across and down (0: as many as it takes); headings on every page."""
    worksheet.set_landscape()
    worksheet.set_paper(9)
    worksheet.fit_to_pages(across, pages)
    worksheet.set_margins(left=0.4, right=0.4, top=0.5, bottom=0.6)
    worksheet.set_footer("&L&A&RPage &P of &N")
    if heading:
        worksheet.repeat_rows(0)


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
    if name.startswith(_SHARES) or name.endswith(("_share", "_rate", "_pd", "_change")):
        return PERCENT
    if name.startswith(_AMOUNTS) or name.endswith(("_el", "_loss", "_amount", "_balance")):
        return AMOUNT
    return "0" if pd.api.types.is_integer_dtype(column) else _by_size(column)


def _by_size(column: pd.Series) -> str:
    """A format for numbers of which only the size is known."""
    values = np.abs(column.to_numpy(dtype=np.float64, na_value=np.nan))
    largest = float(np.max(values, initial=0.0, where=np.isfinite(values)))
    for least, pattern in ((1e4, "#,##0"), (100.0, "#,##0.00"), (1e-3, "0.0000")):
        if largest >= least:
            return pattern
    return "0.00E+00" if largest > 0 else "0"


def _numbers(worksheet: Worksheet, j: int, column: pd.Series, pattern: Format) -> None:
    """Numbers as numbers; missing ones stay empty, infinite ones become text."""
    for i, value in enumerate(column.to_numpy(dtype=np.float64, na_value=np.nan)):
        number = float(value)
        if math.isfinite(number):
            worksheet.write_number(i + 1, j, number, pattern)
        elif math.isinf(number):
            worksheet.write_string(i + 1, j, "infinite" if number > 0 else "minus infinite")


def _dates(worksheet: Worksheet, j: int, column: pd.Series, pattern: Format) -> None:
    """Dates as the day numbers that a spreadsheet counts by; missing ones stay empty."""
    days = column.to_numpy(dtype="datetime64[D]")
    for i, day in enumerate(days):
        if not np.isnat(day):
            worksheet.write_number(i + 1, j, int((day - _DAY_ZERO).astype(np.int64)), pattern)


def _value(
    worksheet: Worksheet, i: int, j: int, value: Any, formats: Formats, styles: tuple[Format, Format]
) -> None:
    """One cell of a column that is not all numbers."""
    if value is None or value is pd.NA or value is pd.NaT or (isinstance(value, float) and math.isnan(value)):
        return
    if isinstance(value, bool | np.bool_):
        worksheet.write_boolean(i, j, bool(value))
    elif isinstance(value, int | float | np.integer | np.floating) and math.isfinite(value):
        worksheet.write_number(i, j, float(value))
    elif isinstance(value, datetime.date) and value.year >= 1900:
        worksheet.write_datetime(i, j, value, formats.number(_DATE))
    else:
        write_text(worksheet, i, j, str(value), *styles)


def write_text(worksheet: Worksheet, i: int, j: int, text: str, plain: Format | None, quoted: Format) -> None:
    """Text as text; cut, and saying so, where a cell cannot hold it. ``quoted`` is for what looks like a formula."""
    if len(text) > MOST_CHARACTERS:
        text = text[: MOST_CHARACTERS - len(_CUT)] + _CUT
    dangerous = text.lstrip(" \n\x00").startswith(_DANGEROUS)
    if worksheet.write_string(i, j, text, quoted if dangerous else plain) != 0:
        raise ValueError(f"cell ({i}, {j}) of the workbook could not be written")
