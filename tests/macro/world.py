"""Small macro worlds for tests: sections, tables and histories by one call each."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import AFTERWARDS, GIVEN, MacroHistory, ScenarioPath
from stresskit.spec.study import Macro
from tests.shared_inputs import shared

MONTH, QUARTER = Frequency.MONTH, Frequency.QUARTER


def section(variables: Mapping[str, Any], features: Mapping[str, Any] | None = None, **more: Any) -> Macro:
    """A macro section as the loader makes it; a variable may be given as its unit alone."""
    spelled = {k: {"unit": v, "place": "linear"} if isinstance(v, str) else v for k, v in variables.items()}
    data = {"file": "macro.csv", "variables": spelled, "features": features or {}} | more
    return Macro.model_validate_json(json.dumps(data), strict=True)


def labels(first: str, n: int, frequency: Frequency) -> list[str]:
    start = parse_period(first, frequency)
    return [format_period(start + i, frequency) for i in range(n)]


def table(first: str, frequency: Frequency, **columns: Sequence[object]) -> pd.DataFrame:
    n = len(next(iter(columns.values())))
    return pd.DataFrame({"period": labels(first, n, frequency), **{k: list(v) for k, v in columns.items()}})


def history(
    macro: Macro, first: str, frequency: Frequency = QUARTER, **columns: Sequence[float]
) -> MacroHistory:
    """A history made directly, without the reader."""
    return MacroHistory(
        frequency,
        parse_period(first, frequency),
        {k: np.array(v, dtype=np.float64) for k, v in columns.items()},
        {k: v.unit for k, v in macro.variables.items()},
        {k: v.place for k, v in macro.variables.items() if v.place is not None},
    )


def path(
    first: str, frequency: Frequency = QUARTER, *, given: int | None = None, **columns: Sequence[float]
) -> ScenarioPath:
    """A path whose values after the first ``given`` carry the flag AFTERWARDS."""
    values = {k: np.array(v, dtype=np.float64) for k, v in columns.items()}
    n = len(next(iter(values.values())))
    flag = np.where(np.arange(n) < (n if given is None else given), GIVEN, AFTERWARDS)
    return ScenarioPath(
        "stress", None, frequency, parse_period(first, frequency), values, dict.fromkeys(values, flag)
    )


def supervisory() -> Path:
    """Folder of the published supervisory tables; a run without them skips, a CI run fails."""
    return shared("data/us_supervisory_2025")
