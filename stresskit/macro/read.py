"""Macro history from a wide table."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import MacroHistory
from stresskit.macro.rules import check_calendars, check_features, growth_users, not_positive
from stresskit.macro.table import Layout, WideTable, problem_of, read_csv, wide_table
from stresskit.spec.study import Macro


def read_history(
    macro: Macro, *, base: Path, model: Frequency, frame: pd.DataFrame | None = None
) -> MacroHistory:
    """Observed macro variables, complete from each variable's first value on.

    macro  the study's macro section
    base   folder that macro.file is relative to
    model  frequency of the study
    frame  the table itself, instead of macro.file: a row per period

    Raises DataError (every problem of the table) and TextError (a study that does not say how the
    table's periods become model periods, or a feature whose span makes no sense).
    """
    if frame is None:
        file = base / macro.file
        frame, source = read_csv(file), str(file)
    else:
        source = "macro frame"
    columns = {name: variable.column or name for name, variable in macro.variables.items()}
    table = wide_table(frame, Layout(macro.period, macro.only, columns), source=source)
    check_calendars(macro, model=model, frequency=table.frequency)
    check_features(macro, frequency=table.frequency)
    problems = _unit_problems(macro, table)
    if problems:
        raise DataError(f"{source}: values do not fit what the study says about them", problems)
    return MacroHistory(
        frequency=table.frequency,
        start=table.start,
        values=table.values,
        units={name: variable.unit for name, variable in macro.variables.items()},
        place={name: v.place for name, v in macro.variables.items() if v.place is not None},
    )


def _unit_problems(macro: Macro, table: WideTable) -> list[Problem]:
    problems = []
    for name, variable in macro.variables.items():
        values = table.values[name]
        known = values[np.isfinite(values)]
        if variable.unit == "fraction" and np.median(np.abs(known)) > 1:
            rows = np.flatnonzero(np.abs(values) > 1)
            problems.append(
                problem_of(
                    "unit_fraction",
                    f"values of {name} above 1 in size, though its unit is fraction",
                    _cases(table, values, rows),
                    "Declare unit: percent (or level, for a ratio that lives above 1).",
                )
            )
        growing = growth_users(macro, name)
        rows = not_positive(values)
        if growing and rows.size:
            problems.append(
                problem_of(
                    "value_not_positive",
                    f"values of {name} at or below zero, of which {', '.join(growing)} takes growth",
                    _cases(table, values, rows),
                    "Use transform: difference, or an index that stays above zero.",
                )
            )
    return problems


def _cases(table: WideTable, values: NDArray[np.float64], rows: NDArray[np.int64]) -> list[str]:
    return [f"{format_period(table.start + int(i), table.frequency)}: {values[i]:g}" for i in rows]
