"""Elasticities: what the loss does when one variable lies a little higher all along a path."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.kernels.blocks import processors
from stresskit.runs.setting import Setting

Floats = NDArray[np.float64]

#: The step of the central difference, as a part of a unit.
STEP = 0.05
#: Paths that go through the book together.
BATCH = 8


@dataclass(frozen=True, slots=True)
class Elasticity:
    """One variable along one path.

    unit         what one more is: "1 point" or "1%"
    per_unit     change of the lifetime loss per unit that the variable lies higher in every period
    relative     the same over the loss along the path
    usual_year   standard deviation of the variable's change over a year in history, in these units; NaN without two
    """

    scenario: str
    variable: str
    unit: str
    per_unit: float
    relative: float
    usual_year: float


def in_shares(unit: str) -> bool:
    """Whether a variable moves by points; an index or a level moves by percent of its value."""
    return unit in ("percent", "fraction")


def moved(path: ScenarioPath, variable: str, unit: str, size: float) -> ScenarioPath:
    """The path with a variable ``size`` units higher in every period."""
    x = path.values[variable]
    if in_shares(unit):
        higher = x + size * (1.0 if unit == "percent" else 0.01)
    else:
        higher = x * (1.0 + 0.01 * size)
    return replace(path, values={**path.values, variable: higher}, weight=None)


def usual_year(history: MacroHistory, variable: str, end: int) -> float:
    """Standard deviation of the variable's change over one year, in units of :func:`moved`, up to macro period ``end``."""
    x = history.values[variable][: end - history.start + 1]
    x, k = x[np.isfinite(x)], history.frequency.per_year
    if x.size < k + 2:
        return float("nan")
    if in_shares(history.units[variable]):
        change = (x[k:] - x[:-k]) * (1.0 if history.units[variable] == "percent" else 100.0)
    else:
        if (x <= 0).any():
            return float("nan")
        change = 100.0 * (x[k:] / x[:-k] - 1.0)
    return float(change.std(ddof=1))


def elasticities(
    setting: Setting, paths: Sequence[ScenarioPath], variables: Sequence[str], losses: Sequence[float]
) -> tuple[list[Elasticity], int]:
    """Of every variable along every path, by central differences; and how many projections that took.

    losses  lifetime loss along each path
    """
    history = setting.data.history
    if history is None:
        return [], 0
    asked = [(p, v, side) for p in paths for v in variables for side in (1.0, -1.0)]
    found: list[float] = []
    for first in range(0, len(asked), BATCH):
        part = [moved(p, v, history.units[v], side * STEP) for p, v, side in asked[first : first + BATCH]]
        found += [
            float(r.cells["el"].sum())
            for r in setting.book.along([setting.route(p) for p in part], threads=processors())
        ]
    loss = {p.name: x for p, x in zip(paths, losses, strict=True)}
    out = []
    for k in range(0, len(asked), 2):
        path, variable, _ = asked[k]
        slope = (found[k] - found[k + 1]) / (2.0 * STEP)
        out.append(
            Elasticity(
                path.name,
                variable,
                "1 point" if in_shares(history.units[variable]) else "1%",
                slope,
                slope / loss[path.name] if loss[path.name] else float("nan"),
                usual_year(history, variable, path.start - 1),
            )
        )
    return out, len(asked)
