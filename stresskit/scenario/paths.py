"""From what scenarios say to numbers: one variable of one scenario at a time, references followed.

Values are continued by the nearest afterwards rule, or held. A shock (add_to, multiply, change_from)
changes the other scenario's complete path, that one's afterwards included, over the whole horizon:
by what it lists, then by its ``then``. So a shock of nothing is the other path to the bit. Only an
afterwards rule that the shocked scenario itself states (or one between it and the scenario it
inherits the shock from) ends this; a rule from further below is in the other path already.
Such a rule departs where both the shock and the path it changes have been stated: earlier, it would
drop stated values of the other path and leave ``then`` without effect.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import format_period, parse_period
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, MacroHistory
from stresskit.macro.var import VarModel
from stresskit.scenario.completion import fill
from stresskit.scenario.lineage import BASELINE, Entry, Lineage, Statement, unknown
from stresskit.scenario.shapes import Floats, added, continued, reverting, there_and_back
from stresskit.spec.scenario import AddTo, Afterwards, GivenValues, MultiplyBy, PeakAndBack

#: Stands for a variable's name while a scenario's missing variables are being filled; no variable is called so.
_FILLING = "[filled]"


@dataclass(frozen=True, slots=True)
class VariablePath:
    """One variable of one scenario.

    values  (H,) float64, finite
    last    last row with a stated (or filled) value or shock, here or in the path that it changes
    settled row whose value an afterwards rule departs from: ``last``, or the row after it where the
            shock goes back to nothing at the end of its list (as back_by is the row where a peak is back)
    filled  whether the VAR gave the values up to ``last``, not the text
    """

    values: Floats
    last: int
    settled: int
    filled: bool = False

    @property
    def flags(self) -> NDArray[np.int64]:
        """(H,) GIVEN or FILLED up to ``last``, then AFTERWARDS."""
        stated = FILLED if self.filled else GIVEN
        return np.where(np.arange(self.values.size) <= self.last, stated, AFTERWARDS).astype(np.int64)


@dataclass(slots=True)
class PathBook:
    """All paths of a study's scenarios, computed when asked for.

    history  observed variables, already cut at as_of: its end is the period before row 0
    periods  H, rows of every path
    var      what fills variables that a scenario leaves out, None when the study declares none
    """

    lineage: Lineage
    history: MacroHistory
    periods: int
    var: VarModel | None = None
    _done: dict[tuple[str, str], VariablePath] = field(default_factory=dict)
    _open: list[tuple[str, str]] = field(default_factory=list)

    @property
    def start(self) -> int:
        return self.history.end + 1

    def label(self, row: int) -> str:
        return format_period(self.start + row, self.history.frequency)

    def path(self, name: str, variable: str) -> VariablePath | None:
        """The complete path, None when neither the scenario nor what it is based on states one or has it filled.

        Raises TextError for everything that the text gets wrong about this variable, references
        that go in a circle included.
        """
        key = (name, variable)
        if key in self._done:
            return self._done[key]
        found = self.lineage.path(name, variable)
        if found is None:
            return self._completed(name, variable)
        owner, spec = found
        if key in self._open:
            walk = (*self._open[self._open.index(key) :], key)
            circle = " -> ".join(scenario for scenario, what in walk if what != _FILLING)
            raise owner.error(("paths", variable), f"{variable} is defined in a circle: {circle}")
        self._open.append(key)
        try:
            # overflow is found below, where it can be named
            with np.errstate(over="ignore", invalid="ignore"):
                path = self._stated(owner, variable, spec)
                shocked = not isinstance(spec, GivenValues)
                found_rule = self.lineage.rule(name, variable, up_to=owner.name if shocked else None)
                if found_rule is not None:
                    path = self._followed(path, name, variable, found_rule)
        finally:
            self._open.pop()
        if not np.isfinite(path.values).all():
            row = int(np.argmin(np.isfinite(path.values)))
            raise owner.error(("paths", variable), f"{variable} is too large to compute in {self.label(row)}")
        self._demand_logs(owner, variable, path)
        self._done[key] = path
        return path

    def _demand_logs(self, owner: Entry, variable: str, path: VariablePath) -> None:
        """The VAR takes logarithms of stated values of a log_difference variable."""
        if self.var is None or not self.var.takes_log(variable):
            return
        bad = np.flatnonzero(path.values[: path.last + 1] <= 0)
        if bad.size:
            raise owner.error(
                ("paths", variable),
                f"{variable} is {path.values[bad[0]]:g} in {self.label(int(bad[0]))}, and macro.var takes its logarithm, "
                "which needs values above zero",
            )

    def _completed(self, name: str, variable: str) -> VariablePath | None:
        """A variable that nobody states, given those that are stated; None where the scenario does not ask for it."""
        owner, var = self.lineage.completes(name), self.var
        if owner is None or var is None or variable not in var.names:
            return None
        keys, mark = ("missing",), (name, _FILLING)
        if mark in self._open:
            raise owner.error(
                keys, f"what {name!r} leaves out is filled from values that are themselves made from it"
            )
        self._open.append(mark)
        try:
            given = {
                v: self._conditions(name, v) for v in var.names if self.lineage.path(name, v) is not None
            }
        finally:
            self._open.pop()
        if not given:
            raise owner.error(
                keys,
                f"scenario {name!r} states no variable of macro.var ({', '.join(var.names)}), so there is nothing to fill "
                "the others from; state at least one",
            )
        for v, filled in fill(var, given).items():
            if not np.isfinite(filled.values).all():
                raise owner.error(keys, f"{v} filled by the VAR is too large to compute")
            last = filled.values.size - 1
            path = VariablePath(continued(filled.values, self.periods, None), last, last, filled=True)
            rule = self.lineage.rule(name, v)
            self._done[name, v] = path if rule is None else self._followed(path, name, v, rule)
        return self._done[name, variable]

    def _conditions(self, name: str, variable: str) -> Floats:
        """Stated values of one variable; what its afterwards rule adds is no condition."""
        path = self.path(name, variable)
        assert path is not None
        return path.values[: path.last + 1]

    def _stated(self, owner: Entry, variable: str, spec: Statement) -> VariablePath:
        """The path before an afterwards rule: values held to the end, or the shocked path in all its length."""
        n = self.periods
        if isinstance(spec, GivenValues):
            given = self._numbers(owner, variable, spec.values)
            last = min(given.size, n) - 1
            return VariablePath(continued(given, n, None), last, last)
        kind, reference = _reference(spec)
        base = self._base(owner, ("paths", variable, kind), reference, variable)
        if isinstance(spec, PeakAndBack):
            change, last = self._peak(owner, variable, spec)
            settled = last
            values = base.values * (1.0 + change) if spec.peak is not None else added(base.values, change)
        else:
            numbers = self._numbers(owner, variable, spec.values)
            last = numbers.size - 1
            settled = last if spec.then == "hold" else last + 1
            if isinstance(spec, AddTo):
                values = added(base.values, continued(numbers, n, None if spec.then == "hold" else 0.0))
            else:
                values = base.values * continued(numbers, n, None if spec.then == "hold" else 1.0)
        return VariablePath(values, min(max(base.last, last), n - 1), min(max(base.settled, settled), n - 1))

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

    def _followed(
        self, stated: VariablePath, name: str, variable: str, found: tuple[Entry, Afterwards]
    ) -> VariablePath:
        """The stated part continued by an afterwards rule."""
        owner, rule = found
        target = self._target(owner, rule, variable)
        values = stated.values.copy()
        tail = slice(stated.settled + 1, None)
        end = float(values[stated.settled])
        if rule == "hold":
            values[tail] = end
        elif rule == "baseline":
            values[tail] = self._baseline(owner, name, variable)[tail]
        else:
            assert not isinstance(rule, str)
            values[tail] = reverting(end, target, rule.over, self.periods - 1 - stated.settled)
        return VariablePath(values, stated.last, stated.settled, stated.filled)

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
