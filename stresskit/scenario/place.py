"""One variable as one scenario's text speaks of it: the calendar, the history it joins, and where errors stand."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from stresskit.core.period import Frequency, format_period, frequency_of_label, parse_period
from stresskit.core.values import MacroHistory
from stresskit.scenario.lineage import Entry
from stresskit.scenario.shapes import Floats
from stresskit.scenario.units import Keys, in_unit

SHARES = ("percent", "fraction")


@dataclass(frozen=True, slots=True)
class Place:
    """Where a statement or rule stands.

    owner    scenario whose text it is
    history  observed variables up to the period before row 0
    periods  H, rows of the path
    rates    variable -> what kind of growth rate it is, of those that are one
    others   names of the study's scenarios
    """

    owner: Entry
    variable: str
    history: MacroHistory
    periods: int
    rates: Mapping[str, str]
    others: tuple[str, ...]

    @property
    def unit(self) -> str:
        return self.history.units[self.variable]

    @property
    def per_year(self) -> int:
        return self.history.frequency.per_year

    @property
    def observed(self) -> Floats:
        """All finite values of history, newest last."""
        values = self.history.values[self.variable]
        return values[np.isfinite(values)]

    def label(self, row: int) -> str:
        return format_period(self.history.end + 1 + row, self.history.frequency)

    def row(self, label: str) -> int:
        return parse_period(label, self.history.frequency) - self.history.end - 1

    def row_ahead(self, keys: Keys, label: str) -> int:
        """Row of a period that must not lie before the scenario."""
        row = self.row(label)
        if row < 0:
            raise self.owner.error(
                keys, f"{self.label(row)} lies before the first period of the scenario, {self.label(0)}"
            )
        return row

    def in_unit(self, keys: Keys, values: Floats, stated: str | None) -> Floats:
        """Numbers in the variable's unit. ``keys``: of the unit that they were stated in."""
        return in_unit(self.owner, keys, values, stated=stated, declared=self.unit, variable=self.variable)

    def last_observed(self, keys: Keys) -> float:
        last = float(self.history.values[self.variable][-1])
        if not np.isfinite(last):
            raise self.owner.error(
                keys, f"{self.variable} has no observed value in {self.label(-1)} to start from"
            )
        return last

    def last_year(self, keys: Keys, needed: int) -> Floats:
        """(periods per year,) values that growth starts from, newest last; only the ``needed`` newest are filled."""
        known = self.history.values[self.variable][-needed:]
        missing = needed - int(np.isfinite(known).sum())
        if missing:
            raise self.owner.error(
                keys,
                f"growth needs the last {needed} observed value{'s' if needed > 1 else ''} of {self.variable} up to "
                f"{self.label(-1)}, and history lacks {missing}",
            )
        if (known <= 0).any():
            raise self.owner.error(
                keys, f"growth needs values above zero, and {self.variable} was {known.min():g} in history"
            )
        return np.concatenate([np.full(self.per_year - needed, np.nan), known])

    def numbers(self, values: tuple[float, ...] | dict[str, float], *, key: str = "values") -> Floats:
        """Stated numbers in order from the first period on; labels must be unbroken from there."""
        keys: Keys = ("paths", self.variable, key)
        if not values:
            raise self.owner.error(keys, f"{key} is empty; state at least the value of {self.label(0)}")
        if not isinstance(values, dict):
            return np.array(values, dtype=np.float64)
        labels: dict[int, str] = {}
        for label in values:
            row = self.row(label)
            if row in labels:
                raise self.owner.error(
                    (*keys, label), f"{label!r} names a period that is already stated{self._calendar(label)}"
                )
            labels[row] = label
        for row, stated in enumerate(sorted(labels)):
            if stated != row:
                raise self.owner.error(
                    keys,
                    f"{key} by period must run without holes from {self.label(0)}; "
                    f"expected {self.label(row)}, found {self.label(stated)}{self._calendar(labels[stated])}",
                )
        return np.array([values[labels[row]] for row in sorted(labels)])

    def _calendar(self, label: str) -> str:
        """Words for a label of the other calendar: a month where periods are quarters, or a quarter where they are months."""
        theirs, ours = frequency_of_label(label), self.history.frequency
        if theirs is ours:
            return ""
        if ours is Frequency.QUARTER:
            return f" ({label} lies in {self.label(self.row(label))}: the macro table is quarterly)"
        return f" ({label} means its last month: the macro table is monthly)"
