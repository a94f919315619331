"""The option --what-if, shared by the commands that take it."""

from __future__ import annotations

from typing import Annotated

from cyclopts import Parameter

WhatIf = Annotated[
    list[str] | None,
    Parameter(
        name="--what-if",
        negative=(),
        help="one more scenario from a line like 'unemployment_rate + 4 over 4 quarters'; repeat it for more variables",
    ),
]
