"""Macro variables as levels that loans look up by period: one variable for all, or one per value of a column."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.definitions import index_of
from stresskit.contract.terms import codes_of
from stresskit.core.errors import DataError, NumericError
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import AFTERWARDS, MacroHistory, ScenarioPath, frozen
from stresskit.macro.levels import first_level, flagged_levels, levels
from stresskit.spec.contract import RATE_UNITS
from stresskit.spec.moving import Index, RateLess
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class MacroLevels:
    """Where levels come from: history, and in a projection the path joined to it.

    end  last model period (ordinal) that may be asked for
    """

    history: MacroHistory | None
    path: ScenarioPath | None
    model: Frequency
    end: int

    @property
    def start(self) -> int:
        return 0 if self.history is None else first_level(self.history, self.model)

    def of(self, variable: str, *, positive: bool = False) -> Floats:
        """(P,) values in model periods start .. end; DataError with ``positive`` where one is zero or below."""
        if self.history is None:
            raise NumericError(f"{variable!r} is needed, but there is no macro history")
        found = levels(
            self.history, variable, model=self.model, start=self.start, end=self.end, path=self.path
        )
        bad = np.flatnonzero(found <= 0.0)
        if positive and bad.size:
            where = "history" if self.path is None else f"history or scenario {self.path.name!r}"
            raise DataError(
                f"{variable!r} moves a value in proportion, and is {found[bad[0]]:g} in "
                f"{format_period(self.start + int(bad[0]), self.model)} ({where}); an index has values above zero"
            )
        return found

    def afterwards(self, variable: str, start: int, steps: int) -> NDArray[np.bool_]:
        """(steps,) whether the values from ``start`` on rest on path values past the last given one."""
        if self.history is None:
            return np.zeros(steps, dtype=bool)
        _, flags = flagged_levels(
            self.history, variable, model=self.model, start=start, end=start + steps - 1, path=self.path
        )
        return np.asarray(flags == AFTERWARDS)


@dataclass(frozen=True, slots=True, eq=False)
class IndexLevels:
    """Levels (g, P) of g variables from period ``start`` on, and which of them each case reads, (n,)."""

    start: int
    table: Floats
    which: Ints

    def __post_init__(self) -> None:
        object.__setattr__(self, "table", frozen(self.table))
        object.__setattr__(self, "which", frozen(self.which))

    def rows(self, start: int, steps: int) -> Floats:
        """(g, steps) levels from period ``start`` on; NaN before the first known one."""
        column = start - self.start + np.arange(steps)
        return np.where(column >= 0, self.table[:, np.maximum(column, 0)], np.nan)

    def at(self, cases: Ints | slice, periods: Ints) -> Floats:
        """Levels of cases in periods (broadcast against each other); NaN before the first known one.

        Periods that are one row for all cases of one variable give one row.
        """
        which = self.which[cases]
        column = periods - self.start
        known = column >= 0
        column = np.where(known, column, 0)
        if column.ndim == 2 and column.shape[0] == 1:
            rows = np.where(known, self.table[:, column[0]], np.nan)
            return rows if rows.shape[0] == 1 else rows[which]
        if self.table.shape[0] == 1:
            found = self.table[0][column]
        else:
            if column.ndim == 2:
                which = which[:, None]
            found = self.table[which, column]
        return np.where(known, found, np.nan)


def index_levels(
    index: Index,
    source: MacroLevels,
    column: Callable[[str], NDArray[Any]],
    ids: Callable[[], NDArray[Any]],
    *,
    place: str,
    n: int,
    positive: bool = True,
) -> IndexLevels:
    """The levels that ``index`` means for n cases whose loan columns ``column`` gives. DataError for unknown values."""
    if isinstance(index, str):
        table = source.of(index, positive=positive)[None, :]
        return IndexLevels(source.start, table, np.zeros(n, dtype=np.int64))
    which = codes_of(column(index.by), index.of, place=f"{place}.of", by=index.by, ids=ids)
    table = np.stack([source.of(variable, positive=positive) for variable in index.of.values()])
    return IndexLevels(source.start, table, which)


def moving_indices(
    study: Study,
    source: MacroLevels,
    column: Callable[[str], NDArray[Any]],
    ids: Callable[[], NDArray[Any]],
    n: int,
) -> dict[str, IndexLevels]:
    """Moving column in use -> levels of its index, or of its variable as an annual fraction."""
    out = {}
    for name, moving in study.moving_in_use.items():
        found = index_of(name, moving)
        if found is None:
            continue
        index, place, positive = found
        made = index_levels(index, source, column, ids, place=place, n=n, positive=positive)
        if isinstance(moving, RateLess) and study.macro is not None:
            unit = study.macro.variables[moving.rate_less.variable].unit
            made = IndexLevels(made.start, made.table * RATE_UNITS[unit], made.which)
        out[name] = made
    return out
