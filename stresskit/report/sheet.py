"""One sheet of a workbook."""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd


@dataclass(frozen=True, slots=True)
class Sheet:
    """Name of a sheet, its table, and the file of the run folder that holds the same in full."""

    name: str
    table: pd.DataFrame
    elsewhere: str
