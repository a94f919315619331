"""What every model of study and scenario text has in common."""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Annotated, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    StringConstraints,
    WithJsonSchema,
)

from stresskit.core.period import Frequency, parse_period


@dataclass(frozen=True, slots=True)
class Words:
    """How messages name a type, as metadata of an Annotated type: "expected {words}, got ...".

    ``quotes``: whether a number that stands where this text is expected becomes right in quotes.
    """

    words: str
    quotes: bool = True


class ErrorAt(ValueError):
    """A validator's complaint about a value below the model it sits on; ``at``: keys from that model down."""

    def __init__(self, message: str, *at: str | int) -> None:
        super().__init__(message)
        self.at = at


def closest(name: str, names: Iterable[str], likeness: float = 0.6) -> str | None:
    """The name that ``name`` was probably meant to be, or None; ``likeness``: how near it must be, 0 to 1."""
    by_lower = {n.lower(): n for n in names}
    found = difflib.get_close_matches(name.lower(), by_lower, n=1, cutoff=likeness)
    return by_lower[found[0]] if found else None


def meant(name: str, names: Iterable[str]) -> str:
    """``; did you mean 'x'?`` when a near name exists, else nothing."""
    near = closest(name, names)
    return f"; did you mean {near!r}?" if near is not None else ""


class Strict(BaseModel):
    """Frozen, no unknown keys, no silent conversion of types."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, str_strip_whitespace=True)


Name = Annotated[str, StringConstraints(min_length=1, max_length=120), Words("text of 1 to 120 characters")]
#: Names that become file names or column names: letters, digits, underscore, hyphen.
Identifier = Annotated[
    str,
    StringConstraints(pattern=r"^[A-Za-z][A-Za-z0-9_\-]{0,79}$"),
    Words("a name that begins with a letter and holds letters, digits, '_' and '-' only, 80 at most"),
]
FrequencyName = Literal["month", "quarter"]
Sign = Literal["positive", "negative"]
Finite = Annotated[float, Field(allow_inf_nan=False)]


def _as_text(value: object) -> object:
    """Dates and years reach us as text or int; a period label is always kept as text."""
    return str(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _is_period(text: str) -> str:
    """The text, if it names a period that exists (which calendar it is read in is settled later)."""
    parse_period(text, Frequency.MONTH)
    return text


PeriodText = Annotated[
    str,
    BeforeValidator(_as_text),
    AfterValidator(_is_period),
    Words("a period such as 2025-12, 2025Q4 or 2025-12-31", quotes=False),
    WithJsonSchema({"type": ["string", "integer"], "examples": ["2025-12", "2025Q4", "2025-12-31"]}),
]
