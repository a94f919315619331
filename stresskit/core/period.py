"""The period calendar: months and quarters as integers.

A period is an ordinal: months count ``12 * year + month - 1``, quarters ``4 * year + quarter - 1``.
Arithmetic on periods is integer arithmetic; text appears only at the edges.
"""

from __future__ import annotations

import re
from enum import Enum

import numpy as np
from numpy.typing import NDArray


class Frequency(Enum):
    """Length of one period. ``per_year`` is the number of periods in a year."""

    MONTH = "month"
    QUARTER = "quarter"

    @property
    def per_year(self) -> int:
        return 12 if self is Frequency.MONTH else 4


#: Without a separator the month has two digits: 46022 is a spreadsheet's day number, not the year 4602.
_MONTH = re.compile(r"^(\d{4})(?:[-/ ]M?|M|(?=\d{2}$))(\d{1,2})$")
_QUARTER = re.compile(r"^(\d{4})[-/ ]?[Qq]([1-4])$")
_DATE = re.compile(r"^(\d{4})-(\d{1,2})-(\d{1,2})(?:[T ].*)?$")
_SHAPES = "'2025-12', '2025Q4', '2025 Q4' or '2025-12-31'"


def parse_period(text: str, frequency: Frequency) -> int:
    """Ordinal of the period that ``text`` names, or that contains the date it gives.

    A quarter label in a monthly calendar means the quarter's last month. Raises ValueError, whose
    message names the text and the shapes expected.
    """
    text = str(text).strip()
    if m := _QUARTER.match(text):
        year, quarter = int(m[1]), int(m[2])
        return from_quarter(year * 4 + quarter - 1, frequency)
    if m := (_DATE.match(text) or _MONTH.match(text)):
        year, month = int(m[1]), int(m[2])
        if not 1 <= month <= 12:
            raise ValueError(f"{text!r} has no month {month}: expected {_SHAPES}")
        if m.re is _DATE:
            try:
                np.datetime64(f"{year:04d}-{month:02d}-{int(m[3]):02d}", "D")
            except ValueError:
                raise ValueError(f"{text!r} is not a date: expected {_SHAPES}") from None
        ordinal = year * 12 + month - 1
        return ordinal if frequency is Frequency.MONTH else ordinal // 3
    raise ValueError(f"{text!r} is not a period: expected {_SHAPES}")


def frequency_of_label(text: str) -> Frequency:
    """QUARTER for labels like ``2025Q4``, MONTH for everything else that names a period."""
    return Frequency.QUARTER if _QUARTER.match(str(text).strip()) else Frequency.MONTH


def format_period(ordinal: int, frequency: Frequency) -> str:
    """``2025-12`` for months, ``2025Q4`` for quarters."""
    n = frequency.per_year
    year, part = divmod(int(ordinal), n)
    return f"{year:04d}-{part + 1:02d}" if frequency is Frequency.MONTH else f"{year:04d}Q{part + 1}"


def from_quarter(quarter: int, frequency: Frequency) -> int:
    """The quarter itself, or its last month."""
    return quarter if frequency is Frequency.QUARTER else quarter * 3 + 2


def convert(
    ordinal: NDArray[np.int64] | int, source: Frequency, target: Frequency
) -> NDArray[np.int64] | int:
    """Period of ``target`` that holds (month to quarter) or ends (quarter to month) the given period."""
    if source is target:
        return ordinal
    return ordinal // 3 if source is Frequency.MONTH else ordinal * 3 + 2


def year_of(ordinal: int, frequency: Frequency) -> int:
    """Calendar year of a period."""
    return int(ordinal) // frequency.per_year
