"""Numbers as text for people: sensible rounding, thousands separators, a real minus sign.

A value that is missing or not finite is shown as an en dash, never as 0.
"""

from __future__ import annotations

import math
from typing import Any

import pandas as pd

MISSING = "–"
MINUS = "−"


def _number(value: Any) -> float | None:
    if value is None or value is pd.NA or isinstance(value, str):
        return None
    number = float(value)
    return number if math.isfinite(number) else None


def plain(value: Any, digits: int = 2) -> str:
    """``1,234.57``; what would round to zero without being zero is shown to three significant digits."""
    number = _number(value)
    if number is None:
        return MISSING
    text = f"{abs(number):,.{digits}f}"
    if number != 0 and float(text.replace(",", "")) == 0:
        text = f"{abs(number):.3g}"
        return (MINUS if number < 0 else "") + text
    return (MINUS if number < 0 and float(text.replace(",", "")) != 0 else "") + text


def count(value: Any) -> str:
    """``12,345``."""
    number = _number(value)
    return MISSING if number is None else (MINUS if number < 0 else "") + f"{abs(round(number)):,}"


def amount(value: Any, digits: int = 0) -> str:
    """An amount of money; a small one that would round to zero is shown as ``<1``."""
    number = _number(value)
    if number is None:
        return MISSING
    least = 10.0**-digits
    if 0 < abs(number) < least / 2:
        return ("<" if number > 0 else f">{MINUS}") + f"{least:.{digits}f}"
    return (MINUS if number < 0 else "") + f"{abs(number):,.{digits}f}"


def percent(value: Any, digits: int = 2) -> str:
    """A share as percent: 0.0123 -> ``1.23%``; a small one that would round to zero as ``<0.01%``."""
    number = _number(value)
    if number is None:
        return MISSING
    least = 10.0**-digits
    if 0 < abs(number) * 100 < least / 2:
        return ("<" if number > 0 else f">{MINUS}") + f"{least:.{digits}f}%"
    return (MINUS if number < 0 else "") + f"{abs(number) * 100:,.{digits}f}%"


def signed(text: str) -> str:
    """A plus sign before a text that shows a number above zero."""
    return text if text[:1] in (MINUS, MISSING, ">") or not text.strip("0.,%") else f"+{text}"


def difference(value: float, reference: float) -> float:
    """value / reference - 1, NaN where the reference is 0."""
    return value / reference - 1 if reference else math.nan


def p_value(value: Any) -> str:
    """Four decimals, ``<0.0001`` below."""
    number = _number(value)
    if number is None:
        return MISSING
    return "<0.0001" if number < 0.0001 else f"{number:.4f}"


def scale(largest: float) -> tuple[float, str]:
    """Divisor and its word for an axis of amounts that reaches ``largest``."""
    for divisor, word in ((1e9, "billions"), (1e6, "millions"), (1e3, "thousands")):
        if abs(largest) >= divisor:
            return divisor, word
    return 1.0, "units"


def short(value: float) -> str:
    """An amount for a headline: three significant digits with a word, ``12.3 million``."""
    number = _number(value)
    if number is None:
        return MISSING
    sign = MINUS if number < 0 else ""
    size = abs(number)
    for divisor, word in ((1e9, " billion"), (1e6, " million"), (1e3, " thousand")):
        if size >= divisor:
            scaled = size / divisor
            digits = 2 if scaled < 10 else 1 if scaled < 100 else 0
            return f"{sign}{scaled:,.{digits}f}{word}"
    return f"{sign}{size:,.0f}" if size >= 10 or size == 0 else f"{sign}{size:.2f}"
