"""Draws of the macro path around a scenario, from the innovations of the study's VAR.

A path is the scenario plus a deviation F u in working values (levels, or logarithms where the VAR takes them), F the
forecast's factor (macro.var) and u standard normal, the same u for every scenario. With ``stated: fixed`` the deviation
is what is left of it once the scenario's stated values are known, F (I - Q Q') u (scenario.gaussian; Waggoner & Zha 1999):
0 where a value is stated, wider where the VAR filled it or a rule continues it. With ``stated: vary`` nothing is held.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import UsageError
from stresskit.core.period import format_period
from stresskit.core.values import GIVEN, ScenarioPath
from stresskit.macro.var import VarModel, forecast
from stresskit.scenario.gaussian import basis

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class PathSpread:
    """How a scenario's path varies.

    path    the scenario: the centre of all draws
    factor  (H, k, H * k) deviation of working values = factor @ u
    """

    model: VarModel
    path: ScenarioPath
    factor: Floats

    @property
    def varies(self) -> bool:
        return bool(self.factor.any())

    def at(self, u: Floats) -> ScenarioPath:
        """The path of a draw, u (H * k,) standard normal; floors of the VAR hold for it."""
        deviation = np.einsum("hkj,j->hk", self.factor, u)
        values = dict(self.path.values)
        for i, (name, transform) in enumerate(zip(self.model.names, self.model.transforms, strict=True)):
            if name not in values:
                continue
            moved = deviation[:, i] != 0.0
            centre = values[name]
            new = (
                centre * np.exp(deviation[:, i])
                if transform == "log_difference"
                else centre + deviation[:, i]
            )
            floor = min(self.model.floors.get(name, -np.inf), float(centre.min()))
            values[name] = np.where(moved, np.maximum(new, floor), centre)
        return replace(self.path, values=values)


def stated_rows(path: ScenarioPath, model: VarModel) -> Flags:
    """(H, k) whether the text says something of a value: what stays where it is with ``stated: fixed``."""
    out = np.zeros((path.horizon, model.k), dtype=np.bool_)
    for i, name in enumerate(model.names):
        if name in path.stated:
            out[: path.stated[name], i] = True
        elif name in path.values:
            out[:, i] = path.flags[name] == GIVEN
    return out


def path_spread(model: VarModel, path: ScenarioPath, *, vary_stated: bool) -> PathSpread:
    """Raises UsageError for a path that does not begin where the VAR's history ends."""
    if path.start != model.last + 1:
        begins, ends = (format_period(p, model.frequency) for p in (path.start, model.last))
        raise UsageError(f"scenario {path.name!r} begins in {begins}, the VAR's history ends in {ends}")
    found = forecast(model, path.horizon)
    known = stated_rows(path, model)
    factor = found.factor
    if not vary_stated and known.any():
        if known.all():
            factor = np.zeros_like(factor)
        else:
            q = basis(found, known).q
            assert q is not None
            through = np.einsum("ij,jm->im", factor, q)
            factor = factor - np.einsum("im,jm->ij", through, q)
            factor[known.ravel()] = 0.0
    return PathSpread(model, path, factor.reshape(path.horizon, model.k, -1))
