"""From what scenarios say to numbers: one variable of one scenario at a time, references followed.

Values (and hold, reach, growth on history) are continued by the nearest afterwards rule, or held. A shock
(add_to, multiply, change_from, growth on another scenario)
changes the other scenario's complete path, that one's afterwards included, over the whole horizon:
by what it lists, then by its ``then``. So a shock of nothing is the other path to the bit. Only an
afterwards rule that the shocked scenario itself states (or one between it and the scenario it
inherits the shock from) ends this; a rule from further below is in the other path already.
Such a rule departs where both the shock and the path it changes have been stated: earlier, it would
drop stated values of the other path and leave ``then`` without effect.

A value is as good as the worst of what it rests on: one that changes a filled value is filled, one that changes a
value from an afterwards rule is afterwards, however far the change itself is stated.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import format_period
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, MacroHistory
from stresskit.macro.var import VarModel
from stresskit.scenario.afterwards import followed
from stresskit.scenario.completion import fill
from stresskit.scenario.lineage import Entry, Lineage, Statement, unknown
from stresskit.scenario.place import Place
from stresskit.scenario.shapes import Floats, added, continued
from stresskit.scenario.statements import by_itself, growth, peak, reached_and_back, reference
from stresskit.scenario.units import Keys
from stresskit.spec.scenario import AddTo, Afterwards, GrowthPath, MultiplyBy, PeakAndBack, ReachLevel

Flags = NDArray[np.int64]

#: Stands for a variable's name while a scenario's missing variables are being filled; no variable is called so.
_FILLING = "[filled]"


@dataclass(frozen=True, slots=True)
class VariablePath:
    """One variable of one scenario.

    values  (H,) float64, finite
    flags   (H,) int64 GIVEN, FILLED or AFTERWARDS: the worst of everything that the value rests on
    last    last row with a stated (or filled) value or shock, here or in the path that it changes
    settled row whose value an afterwards rule departs from: ``last``, or the row after it where the
            shock goes back to nothing at the end of its list (as back_by is the row where a peak is back)
    filled  whether the VAR gave the values up to ``last``, not the text
    """

    values: Floats
    flags: Flags
    last: int
    settled: int
    filled: bool = False

    @property
    def stated(self) -> int:
        """Rows that the text says something of."""
        return 0 if self.filled else self.last + 1


def _flagged(n: int, how: int, last: int) -> Flags:
    """``how`` up to row ``last``, then AFTERWARDS. (n,)"""
    return np.where(np.arange(n) <= last, how, AFTERWARDS).astype(np.int64)


@dataclass(slots=True)
class PathBook:
    """All paths of a study's scenarios, computed when asked for.

    history  observed variables, already cut at as_of: its end is the period before row 0
    periods  H, rows of every path
    rates    variable -> what kind of growth rate it is, of those that are one
    var      what fills variables that a scenario leaves out, None when the study declares none
    """

    lineage: Lineage
    history: MacroHistory
    periods: int
    rates: Mapping[str, str] = field(default_factory=dict)
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
                shocked = reference(spec) is not None
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

    def _followed(
        self, path: VariablePath, name: str, variable: str, found: tuple[Entry, Afterwards]
    ) -> VariablePath:
        """The stated or filled part continued by an afterwards rule."""
        place, rule = self._place(found[0], variable), found[1]
        values = followed(
            place, rule, path.values, path.settled, name=name,
            other=lambda keys, other: self._base(place.owner, keys, other, variable).values,
        )  # fmt: skip
        flags = np.where(np.arange(values.size) > path.settled, AFTERWARDS, path.flags)
        return VariablePath(values, flags, path.last, path.settled, path.filled)

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
            told = [
                (v, self._condition(name, v)) for v in var.names if self.lineage.path(name, v) is not None
            ]
            given = {v: path.values[: path.last + 1] for v, path in told}
        finally:
            self._open.pop()
        if not given:
            raise owner.error(
                keys,
                f"scenario {name!r} states no variable of macro.var ({', '.join(var.names)}), so there is nothing to fill "
                "the others from; state at least one",
            )
        # a filled value rests on all conditions; from where each of them rests on an afterwards rule, so does it
        sound = max(int(np.flatnonzero(path.flags != AFTERWARDS).max(initial=-1)) for _, path in told)
        for v, filled in fill(var, given).items():
            if not np.isfinite(filled.values).all():
                raise owner.error(keys, f"{v} filled by the VAR is too large to compute")
            last = filled.values.size - 1
            values, flags = (
                continued(filled.values, self.periods, None),
                _flagged(self.periods, FILLED, min(last, sound)),
            )
            path = VariablePath(values, flags, last, last, filled=True)
            rule = self.lineage.rule(name, v)
            self._done[name, v] = path if rule is None else self._followed(path, name, v, rule)
        return self._done[name, variable]

    def _condition(self, name: str, variable: str) -> VariablePath:
        """The path of a variable that is stated; what its afterwards rule adds is no condition."""
        path = self.path(name, variable)
        assert path is not None
        return path

    def _place(self, owner: Entry, variable: str) -> Place:
        return Place(owner, variable, self.history, self.periods, self.rates, tuple(self.lineage.entries))

    def _stated(self, owner: Entry, variable: str, spec: Statement) -> VariablePath:
        """The path before an afterwards rule: values held to the end, or the shocked path in all its length."""
        n, place = self.periods, self._place(owner, variable)
        refers = reference(spec)
        if refers is None:
            stated, last = by_itself(place, spec)
            end = min(last, n - 1)
            return VariablePath(continued(stated, n, None), _flagged(n, GIVEN, end), end, end)
        base = self._base(owner, ("paths", variable, refers[0]), refers[1], variable)
        flags = base.flags
        if isinstance(spec, PeakAndBack):
            change, last = peak(place, spec)
            settled = last
            absolute = spec.peak_points is not None
            values = added(base.values, change) if absolute else base.values * (1.0 + change)
        elif isinstance(spec, ReachLevel):
            values, last = reached_and_back(place, spec, base.values)
            settled = last
            # the way up rests on history and the level alone
            flags = np.where(np.arange(n) <= place.row(spec.at), GIVEN, base.flags)
        elif isinstance(spec, GrowthPath):
            distance, last = growth(place, spec, np.ones(place.per_year))
            settled, values = last, base.values * distance
        else:
            assert isinstance(spec, AddTo | MultiplyBy)
            numbers = place.numbers(spec.values)
            last = numbers.size - 1
            settled = last if spec.then == "hold" else last + 1
            if isinstance(spec, AddTo):
                numbers = place.in_unit(("paths", variable, "unit"), numbers, spec.unit)
                values = added(base.values, continued(numbers, n, None if spec.then == "hold" else 0.0))
            else:
                values = base.values * continued(numbers, n, None if spec.then == "hold" else 1.0)
        reach, settled = max(base.last, last), max(base.settled, settled)
        return VariablePath(values, flags, min(reach, n - 1), min(settled, n - 1))

    def _base(self, owner: Entry, keys: Keys, other: str, variable: str) -> VariablePath:
        if other not in self.lineage.entries:
            raise owner.error(keys, unknown(other, tuple(self.lineage.entries)))
        base = self.path(other, variable)
        if base is None:
            raise owner.error(
                keys,
                f"scenario {other!r} gives no path of {variable!r} to start from; state it there, or give values here",
            )
        return base
