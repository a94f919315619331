"""Where keys and values stand in a text, and how their paths are written in messages."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

#: Path of a value: mapping keys and list positions (0-based) from the top.
Keys = tuple[str | int, ...]

_PLAIN_KEY = re.compile(r"[A-Za-z0-9_\-]{1,60}")


@dataclass(frozen=True, slots=True)
class Mark:
    """Where a value stands, and how it was written.

    line, column          of the value, 1-based
    key_line, key_column  of its key; of the value itself for list items and the top
    written               text of a scalar as it stands in the file (without quotes), None for others
    quoted                whether that text was in quotes or a block
    """

    line: int
    column: int
    key_line: int
    key_column: int
    written: str | None = None
    quoted: bool = False


@dataclass(frozen=True, slots=True)
class Marks:
    """Marks of all values by their path; the top is ``()``."""

    by_keys: Mapping[Keys, Mark]

    def __post_init__(self) -> None:
        object.__setattr__(self, "by_keys", MappingProxyType(dict(self.by_keys)))

    def nearest(self, keys: Keys) -> Mark:
        """Mark of the value, or of the innermost value around it that the text holds."""
        while keys and keys not in self.by_keys:
            keys = keys[:-1]
        return self.by_keys[keys]

    def of_key(self, keys: Keys) -> tuple[int, int]:
        """Line and column of the key (list items: of the item)."""
        mark = self.nearest(keys)
        return mark.key_line, mark.key_column

    def of_value(self, keys: Keys) -> tuple[int, int]:
        """Line and column of the value; of the innermost key around it when the text does not hold it."""
        mark = self.nearest(keys)
        return (mark.line, mark.column) if keys in self.by_keys else (mark.key_line, mark.key_column)


@dataclass(frozen=True, slots=True)
class Document:
    """Plain data (dict, list, str, int, float, bool, None), its marks, and the text it came from."""

    data: dict[str, Any]
    marks: Marks
    text: str


def dotted(keys: Keys) -> str:
    """``hazards.default.terms#2.loan``: keys joined by dots, ``#2`` for the second item of a list."""
    out = ""
    for key in keys:
        if isinstance(key, int):
            out += f"#{key + 1}"
        else:
            word = key if _PLAIN_KEY.fullmatch(key) else repr(short(key))
            out += f".{word}" if out else word
    return out


def short(text: str, width: int = 60) -> str:
    """The text, cut at ``width`` characters."""
    return text if len(text) <= width else text[: width - 3] + "..."
