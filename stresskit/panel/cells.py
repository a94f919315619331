"""From what a cell holds to text, numbers and periods, as SQL; nothing is turned into something else unsaid.

Text is trimmed, and empty text is missing. Whole numbers lose a trailing ".0" and True and False become lower
case, in text as in columns of numbers and booleans, so that an identifier, a code or a category is the same
whether a CSV file, a Parquet file or a frame brought it. In columns of numbers and dates the words NA, NaN,
NaT, null and None also mean missing; any other text that is not a number or a date is reported.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

import duckdb

from stresskit.core.errors import Problem
from stresskit.core.period import Frequency, parse_period
from stresskit.panel.source import Source, quoted

_FLOATS = ("DOUBLE", "FLOAT", "REAL", "DECIMAL")
_WHOLE = (
    "TINYINT",
    "SMALLINT",
    "INTEGER",
    "BIGINT",
    "HUGEINT",
    "UTINYINT",
    "USMALLINT",
    "UINTEGER",
    "UBIGINT",
)
#: In lower case, they mean a missing number or date.
MISSING_WORDS = ("na", "nan", "nat", "null", "none")
MISSING_SQL = str(MISSING_WORDS)
_LARGEST = "1e18"
#: Whole numbers written with a point, below 1e15.
_WHOLE_TEXT = r"(-?[1-9]\d{0,14}|0)\.0+"
_TRUTH = ("True", "TRUE", "False", "FALSE")


def is_date(kind: str) -> bool:
    return kind == "DATE" or kind.startswith("TIMESTAMP")


def text(column: str, kind: str) -> str:
    """SQL for the trimmed text of a column of relation ``s``, NULL when empty."""
    name = "s." + quoted(column)
    if kind.startswith(_FLOATS):
        return (
            f"CASE WHEN NOT isfinite({name}::DOUBLE) THEN NULL WHEN {name} = floor({name}) AND abs({name}) < 1e15 "
            f"THEN {name}::BIGINT::VARCHAR ELSE {name}::VARCHAR END"
        )
    words = rf"nullif(trim({name}::VARCHAR, E' \t\r\n'), '')"
    if kind != "VARCHAR":
        return words
    whole = f"suffix({words}, '0') AND regexp_full_match({words}, '{_WHOLE_TEXT}')"
    return (
        f"CASE WHEN {words} IN {_TRUTH} THEN lower({words}) WHEN {whole} THEN split_part({words}, '.', 1) "
        f"ELSE {words} END"
    )


def plain_text(code: str) -> str:
    """What :func:`text` makes of a text, for codes that the study names."""
    code = code.strip(" \t\r\n")
    if code in _TRUTH:
        return code.lower()
    return code.split(".")[0] if re.fullmatch(_WHOLE_TEXT, code, re.ASCII) else code


def holds_numbers(kind: str) -> bool:
    return kind.startswith(_FLOATS + _WHOLE) or kind == "BOOLEAN"


def as_double(column: str, kind: str, words: str) -> str:
    """SQL for a column as DOUBLE, NULL where its text is no number; ``words`` is SQL for its trimmed text."""
    return f"(s.{quoted(column)})::DOUBLE" if holds_numbers(kind) else f"TRY_CAST({words} AS DOUBLE)"


def number(value: str, words: str | None) -> tuple[str, str]:
    """SQL for the number that counts (NULL when missing or unusable), and for "something is there, but no number".

    value  SQL of :func:`as_double`;  words: SQL for the text behind it, None for a column of numbers
    """
    good = f"isfinite({value}) AND abs({value}) < {_LARGEST}"
    if words is None:
        return f"CASE WHEN {good} THEN {value} END", f"coalesce(NOT ({good}) AND NOT isnan({value}), false)"
    good += f" AND NOT contains({words}, '_')"
    return (
        f"CASE WHEN {good} THEN {value} END",
        f"({words} IS NOT NULL AND lower({words}) NOT IN {MISSING_SQL} AND NOT coalesce({good}, false))",
    )


def check_kinds(source: Source, numbers: Iterable[str]) -> list[Problem]:
    """Problems of columns whose type in the file cannot hold numbers."""
    odd = [
        c for c in numbers if is_date(source.types[c]) or "[" in source.types[c] or "(" in source.types[c][:7]
    ]
    return [
        Problem("column_type", f"column {c!r} of {source.name} holds {source.types[c]}, expected numbers", 1)
        for c in odd
    ]


def month_of_date(column: str) -> str:
    """SQL for the month ordinal of a column that holds dates or timestamps."""
    name = f"s.{quoted(column)}::TIMESTAMP"
    return f"(year({name}) * 12 + month({name}) - 1)::INTEGER"


def make_labels(
    connection: duckdb.DuckDBPyConnection,
    table: str,
    labels: Sequence[str],
    *,
    calendar: Frequency,
    counter_month: int | None,
) -> frozenset[str]:
    """Table (label, m) of month ordinals for every distinct period text; returns those that cannot be read.

    A quarter label means the quarter's last month, so the quarter calendar's ordinal is m // 3. With
    ``counter_month`` every whole number is a counter, and 1 stands for the period that ends in that month.
    """
    months: dict[str, int] = {}
    unreadable = set()
    for label in labels:
        try:
            months[label] = _month(label, calendar, counter_month)
        except ValueError:
            unreadable.add(label)
    connection.execute(f"CREATE TABLE {table} (label VARCHAR, m INTEGER)")
    if months:
        connection.execute(
            f"INSERT INTO {table} SELECT unnest(?::VARCHAR[]), unnest(?::INTEGER[])",
            [list(months), list(months.values())],
        )
    return frozenset(unreadable)


def _month(label: str, calendar: Frequency, counter_month: int | None) -> int:
    if counter_month is not None and label.removeprefix("-").isdecimal():
        counter = int(label)
        if abs(counter) > 12000:
            raise ValueError(f"{label!r} is no counter of periods")
        return counter_month + (counter - 1) * (1 if calendar is Frequency.MONTH else 3)
    return parse_period(label, Frequency.MONTH)
