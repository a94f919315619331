"""What every model of study and scenario text has in common."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, StringConstraints


class Strict(BaseModel):
    """Frozen, no unknown keys, no silent conversion of types."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, str_strip_whitespace=True)


Name = Annotated[str, StringConstraints(min_length=1, max_length=120)]
#: Names that become file names or column names: letters, digits, underscore, hyphen.
Identifier = Annotated[str, StringConstraints(pattern=r"^[A-Za-z][A-Za-z0-9_\-]{0,79}$")]
FrequencyName = Literal["month", "quarter"]
Sign = Literal["positive", "negative"]
Finite = Annotated[float, Field(allow_inf_nan=False)]


def _as_text(value: object) -> object:
    """Dates and years reach us as text or int; a period label is always kept as text."""
    return str(value) if isinstance(value, int) and not isinstance(value, bool) else value


PeriodText = Annotated[str, BeforeValidator(_as_text), StringConstraints(min_length=4, max_length=32)]
