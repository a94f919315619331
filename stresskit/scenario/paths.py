"""From what scenarios say to numbers: one variable of one scenario at a time, references followed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import format_period, parse_period
from stresskit.core.values import AFTERWARDS, GIVEN, MacroHistory
from stresskit.scenario.lineage import BASELINE, Entry, Lineage, Statement, unknown
from stresskit.scenario.shapes import Floats, continued, reverting, there_and_back
from stresskit.spec.scenario import AddTo, Afterwards, GivenValues, MultiplyBy, PeakAndBack


@dataclass(frozen=True, slots=True)
class VariablePath:
    """One variable of one scenario.

    values  (H,) float64, finite
    flags   (H,) int64, GIVEN or AFTERWARDS
    last    row of the last stated value: later rows follow the afterwards rule
    """

    values: Floats
    flags: NDArray[np.int64]
    last: int


@dataclass(slots=True)
class PathBook:
    """All paths of a study's scenarios, computed when asked for.

    history  observed variables, already cut at as_of: its end is the period before row 0
    periods  H, rows of every path
    """

    lineage: Lineage
    history: MacroHistory
    periods: int
    _done: dict[tuple[str, str], VariablePath] = field(default_factory=dict)
    _open: list[tuple[str, str]] = field(default_factory=list)

    @property
    def start(self) -> int:
        return self.history.end + 1

    def label(self, row: int) -> str:
        return format_period(self.start + row, self.history.frequency)

    def path(self, name: str, variable: str) -> VariablePath | None:
        """The complete path, None when neither the scenario nor what it is based on states one.

        Raises TextError for everything that the text gets wrong about this variable, references
        that go in a circle included.
        """
        key = (name, variable)
        if key in self._done:
            return self._done[key]
        found = self.lineage.path(name, variable)
        if found is None:
            return None
        owner, spec = found
        if key in self._open:
            circle = " -> ".join(scenario for scenario, _ in (*self._open[self._open.index(key) :], key))
            raise owner.error(("paths", variable), f"{variable} is defined in a circle: {circle}")
        self._open.append(key)
        try:
            # overflow is found below, where it can be named
            with np.errstate(over="ignore", invalid="ignore"):
                path = self._followed(self._stated(owner, variable, spec), name, variable)
        finally:
            self._open.pop()
        if not np.isfinite(path.values).all():
            row = int(np.argmin(np.isfinite(path.values)))
            raise owner.error(("paths", variable), f"{variable} is too large to compute in {self.label(row)}")
        self._done[key] = path
        return path

    def _stated(self, owner: Entry, variable: str, spec: Statement) -> VariablePath:
        """The stated part; rows after ``last`` are still to be written."""
        n = self.periods
        if isinstance(spec, GivenValues):
            given = self._numbers(owner, variable, spec.values)
            flags = np.full(n, GIVEN, dtype=np.int64)
            return VariablePath(continued(given, n, None), flags, min(given.size, n) - 1)
        kind, reference = _reference(spec)
        base = self._base(owner, ("paths", variable, kind), reference, variable)
        if isinstance(spec, PeakAndBack):
            change, last = self._peak(owner, variable, spec)
            values = base.values * (1.0 + change) if spec.peak is not None else base.values + change
        else:
            numbers = self._numbers(owner, variable, spec.values)
            last = numbers.size - 1
            if isinstance(spec, AddTo):
                values = base.values + continued(numbers, n, None if spec.then == "hold" else 0.0)
            else:
                values = base.values * continued(numbers, n, None if spec.then == "hold" else 1.0)
        return VariablePath(values, base.flags, min(max(base.last, last), n - 1))

    def _base(self, owner: Entry, keys: tuple[str | int, ...], reference: str, variable: str) -> VariablePath:
        if reference not in self.lineage.entries:
            raise owner.error(keys, unknown(reference, tuple(self.lineage.entries)))
        base = self.path(reference, variable)
        if base is None:
            raise owner.error(
                keys,
                f"scenario {reference!r} gives no path of {variable!r} to start from; state it there, or give values here",
            )
        return base

    def _numbers(self, owner: Entry, variable: str, values: tuple[float, ...] | dict[str, float]) -> Floats:
        """Stated numbers in order from the first period on; labels must be unbroken from there."""
        keys = ("paths", variable, "values")
        if not values:
            raise owner.error(keys, f"values is empty; state at least the value of {self.label(0)}")
        if not isinstance(values, dict):
            return np.array(values, dtype=np.float64)
        by_period: dict[int, float] = {}
        for label, value in values.items():
            period = parse_period(label, self.history.frequency)
            if period in by_period:
                raise owner.error((*keys, label), f"{label!r} names a period that is already stated")
            by_period[period] = value
        for row, period in enumerate(sorted(by_period)):
            if period != self.start + row:
                stated = format_period(period, self.history.frequency)
                raise owner.error(
                    keys,
                    f"values by period must run without holes from {self.label(0)}; "
                    f"expected {self.label(row)}, found {stated}",
                )
        return np.array([by_period[p] for p in sorted(by_period)])

    def _row(self, label: str) -> int:
        return parse_period(label, self.history.frequency) - self.start

    def _peak(self, owner: Entry, variable: str, spec: PeakAndBack) -> tuple[Floats, int]:
        """The change by row, and the last row that it states."""
        keys = ("paths", variable)
        at = self._row(spec.at)
        if at < 0:
            raise owner.error(
                (*keys, "at"), f"the peak in {self.label(at)} lies before the first period, {self.label(0)}"
            )
        back_by = None
        if spec.back_by is not None:
            back_by = self._row(spec.back_by)
            if back_by <= at:
                raise owner.error(
                    (*keys, "back_by"),
                    f"back_by {self.label(back_by)} must come after the peak in {self.label(at)}",
                )
        unit = self.history.units.get(variable)
        if spec.peak is not None and unit in ("percent", "fraction"):
            raise owner.error(
                (*keys, "peak"),
                f"{variable} is in {unit}, where a change by {100 * spec.peak:+.4g}% of its value is easily taken for "
                f"{100 * spec.peak:+.4g} percentage points; use peak_points (an amount in the variable's unit), or multiply",
            )
        size = spec.peak if spec.peak is not None else spec.peak_points
        assert size is not None
        return size * there_and_back(self.periods, at, back_by), at if back_by is None else back_by

    def _followed(self, stated: VariablePath, name: str, variable: str) -> VariablePath:
        """The stated part continued by the afterwards rule that holds for this scenario and variable."""
        owner, rule = self.lineage.rule(name, variable)
        rest = self.periods - 1 - stated.last
        target = self._target(owner, rule, variable)
        values, flags = stated.values.copy(), stated.flags.copy()
        tail = slice(stated.last + 1, None)
        end = float(values[stated.last])
        if rule == "hold":
            values[tail] = end
        elif rule == "baseline":
            values[tail] = self._baseline(owner, name, variable)[tail]
        else:
            assert not isinstance(rule, str)
            values[tail] = reverting(end, target, rule.over, rest)
        flags[tail] = AFTERWARDS
        return VariablePath(values, flags, stated.last)

    def _baseline(self, owner: Entry, name: str, variable: str) -> Floats:
        keys = _rule_keys(owner, variable)
        if name == BASELINE:
            raise owner.error(
                keys, f"the scenario {BASELINE!r} cannot return to itself; use hold or revert_to"
            )
        if BASELINE not in self.lineage.entries:
            raise owner.error(
                keys,
                f"baseline means the scenario called {BASELINE!r}, and the study has none "
                f"(it has {', '.join(self.lineage.entries)}); add it, or use hold or revert_to",
            )
        return self._base(owner, keys, BASELINE, variable).values

    def _target(self, owner: Entry, rule: Afterwards, variable: str) -> float:
        """Where a reverting rule leads, checked even when the horizon ends before it; NaN for the others."""
        if isinstance(rule, str):
            return np.nan
        if rule.revert_to != "long_run_mean":
            return rule.revert_to
        keys = _rule_keys(owner, variable)
        if self.history.units[variable] == "index":
            raise owner.error(
                keys,
                f"{variable} is an index, and the mean of an index over history is no level to return to; "
                "give one rule per variable: hold, baseline or a number for this one",
            )
        observed = self.history.values[variable]
        known = observed[np.isfinite(observed)]
        if known.size == 0:
            raise owner.error(keys, f"{variable} has no observed value up to as_of to take a mean of")
        return float(known.mean())


def _reference(spec: AddTo | MultiplyBy | PeakAndBack) -> tuple[str, str]:
    if isinstance(spec, AddTo):
        return "add_to", spec.add_to
    return ("multiply", spec.multiply) if isinstance(spec, MultiplyBy) else ("change_from", spec.change_from)


def _rule_keys(owner: Entry, variable: str) -> tuple[str | int, ...]:
    return ("afterwards", variable) if isinstance(owner.spec.afterwards, Mapping) else ("afterwards",)
