"""Paths that a search is free to choose: shocks of the study's VAR to levels, to a complete path, to scenario text.

In its first n macro periods every variable of the VAR is free; then the rule for afterwards holds, which leads from the
last free value on in a straight line of that value (hold, revert, back to a path, growth), so that two resolved texts
give it for all. Variables outside the VAR follow the reference scenario.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import UsageError
from stresskit.core.period import format_period
from stresskit.core.values import AFTERWARDS, GIVEN, ScenarioPath
from stresskit.macro.var import Forecast, VarModel, forecast, levels, working
from stresskit.runs.contracts import path_variables
from stresskit.runs.recovery import reach_of_recovery
from stresskit.runs.setting import Setting
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import scenario_from_text

Floats = NDArray[np.float64]

#: Significant digits of the values in scenario text.
DIGITS = 9
#: A file name for messages about text that was made here.
_FILE = Path("reverse.yaml")


@dataclass(frozen=True, slots=True, eq=False)
class FreePaths:
    """How shocks become paths.

    base      the reference scenario's path
    model     the study's VAR
    found     its forecast over the free periods: y = mean + factor @ u
    tails     variable -> (a, b), each (H - n,): after the free periods the level is a + b * last free level
    rules     the rule for afterwards as YAML value, None where the reference's own holds
    """

    setting: Setting
    base: ScenarioPath
    model: VarModel
    found: Forecast
    tails: Mapping[str, tuple[Floats, Floats]]
    rules: Any

    @property
    def periods(self) -> int:
        return int(self.found.mean.shape[0])

    @property
    def size(self) -> int:
        return int(self.found.mean.size)

    def working(self, u: Floats) -> Floats:
        """(n, k) working values of shocks (n * k,)."""
        return self.found.mean + (self.found.factor @ u).reshape(self.found.mean.shape)

    def path(self, y: Floats, name: str = "free") -> ScenarioPath:
        """The complete path of working values (n, k)."""
        values, flags, stated = dict(self.base.values), dict(self.base.flags), dict(self.base.stated)
        n, rest = self.periods, self.base.horizon - self.periods
        for i, (v, transform) in enumerate(zip(self.model.names, self.model.transforms, strict=True)):
            x = levels(y[:, i], transform)
            a, b = self.tails[v]
            values[v] = np.concatenate([x, a + b * x[-1]])
            flags[v] = np.concatenate([np.full(n, GIVEN), np.full(rest, AFTERWARDS)]).astype(np.int64)
            stated[v] = n
        return ScenarioPath(name, None, self.base.frequency, self.base.start, values, flags, stated=stated)

    def floors(self) -> tuple[Floats, Floats]:
        """rows @ u >= least: no value below its variable's floor under macro.var."""
        rows, least = [np.zeros((0, self.size))], [np.zeros(0)]
        for i, (v, transform) in enumerate(zip(self.model.names, self.model.transforms, strict=True)):
            floor = self.model.floors.get(v)
            if floor is None or (transform == "log_difference" and floor <= 0):
                continue
            at = np.arange(self.periods) * self.model.k + i
            rows.append(self.found.factor[at])
            least.append(float(working(np.array([floor]), transform)[0]) - self.found.mean[:, i])
        return np.vstack(rows), np.concatenate(least)

    def text(self, y: Floats, *, name: str, head: Sequence[str], notes: Mapping[str, str]) -> str:
        """The path as scenario YAML; values with so many digits that losses and distances come back."""
        lines = [f"# {line}" for line in head]
        lines += [f"scenario: {name}", f"based_on: {self.base.name}", "weighted: false"]
        lines += [f"starts: {format_period(self.base.start, self.base.frequency)}", "paths:"]
        per_line = self.base.frequency.per_year
        for i, (v, transform) in enumerate(zip(self.model.names, self.model.transforms, strict=True)):
            values = levels(y[:, i], transform)
            if (floor := self.model.floors.get(v)) is not None:
                # what binds at a floor must not stand a rounding error below it
                values = np.where(np.abs(values - floor) < 1e-7 * max(1.0, abs(floor)), floor, values)
            numbers = [_number(x) for x in values]
            parts = [", ".join(numbers[k : k + per_line]) for k in range(0, len(numbers), per_line)]
            joined = ",\n      ".join(parts)
            lines += [f"  {v}:", f"    values: [{joined}]"]
        if self.rules is not None:
            lines.append(f"afterwards: {json.dumps(self.rules)}")
        lines.append("notes:")
        lines += [f"  {key}: {json.dumps(value)}" for key, value in notes.items()]
        return "\n".join([*lines, ""])


def _number(x: float) -> str:
    """Decimal digits without an exponent, which the strict reader would take for text; with a point, so that it is a number."""
    text = np.format_float_positional(float(f"{x:.{DIGITS}g}"), trim="0")
    return str(text)


def resolved(setting: Setting, text: str) -> ScenarioPath:
    """A scenario text as the study would read it, beside its own scenarios."""
    file, study = setting.file, setting.file.study
    loaded = scenario_from_text(text, _FILE)
    return resolve(
        (*file.scenarios, loaded), study.macro, setting.data.history,
        as_of=file.as_of, model=file.frequency, horizon=setting.data.horizon + reach_of_recovery(study),
        var=setting.data.var, also=path_variables(study),
    )[-1]  # fmt: skip


def free_paths(setting: Setting, base: ScenarioPath, *, periods: int, rules: Any) -> FreePaths:
    """Free paths of ``periods`` macro periods, at most as many as the reference has.

    Raises UsageError without a VAR, and TextError for rules that do not fit a variable.
    """
    model = setting.data.var
    if model is None:
        raise UsageError(
            "a reverse stress test needs the study's VAR, which says how plausible a path is: declare macro.var (see plausibility.md)"
        )
    n = min(periods, base.horizon)
    found = forecast(model, n)
    made = FreePaths(setting, base, model, found, {v: (np.zeros(0), np.zeros(0)) for v in model.names}, rules)
    ends = []
    for size in (0.0, 1.0):
        # one standard deviation higher in the last free period
        y = made.found.mean.copy()
        y[-1] += size * np.sqrt((found.factor[-model.k :] ** 2).sum(axis=1))
        ends.append(
            resolved(setting, made.text(y, name=_free_name(setting), head=(), notes={"made": "a trial"}))
        )
    tails = {}
    for v in model.names:
        last, tail = ([e.values[v][n - 1] for e in ends], [e.values[v][n:] for e in ends])
        slope = (tail[1] - tail[0]) / (last[1] - last[0])
        tails[v] = (tail[0] - slope * last[0], slope)
    return FreePaths(setting, base, model, found, tails, rules)


def _free_name(setting: Setting) -> str:
    """A scenario name that the study does not use."""
    return free_name(setting, "reverse")


def free_name(setting: Setting, wanted: str) -> str:
    """``wanted``, or with a number where the study has such a scenario."""
    taken, name, k = {p.name for p in setting.data.paths}, wanted, 1
    while name in taken:
        k += 1
        name = f"{wanted}_{k}"
    return name
