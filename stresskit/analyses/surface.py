"""A figure over peak shifts of two variables: how they add up, and where a threshold runs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.elasticity import in_shares
from stresskit.analyses.free_path import FreePaths
from stresskit.analyses.reversed import Surface
from stresskit.analyses.thresholds import Measured
from stresskit.core.values import ScenarioPath
from stresskit.macro.var import levels

Floats = NDArray[np.float64]

#: Shifts per variable, and how far beyond the path found they go.
POINTS, BEYOND = 7, 1.5


def shift_shape(periods: int, horizon: int) -> tuple[Floats, int]:
    """(H,) straight up to 1 in a third of the free periods, straight back to 0 by their end; and the peak's row."""
    peak = max(0, periods // 3 - 1)
    row = np.arange(horizon, dtype=np.float64)
    back = max(periods - 1, peak + 1)
    up, down = (row + 1.0) / (peak + 1.0), (back - row) / (back - peak)
    return np.clip(np.minimum(up, down), 0.0, 1.0), peak


def loss_surface(
    free: FreePaths,
    target: Measured,
    y: Floats,
    read: Sequence[str],
    wanted: tuple[str, ...] | Literal["none"] | None,
) -> Surface:
    """Figures over a grid that holds no shift and one and a half times the furthest shift of a path found, ``y`` (n, k).

    The default pair: the two variables read whose path lies furthest from the reference in usual moves.
    """
    furthest = {v: _furthest(free, y, v) for v in read}
    spread = np.sqrt((free.found.factor**2).sum(axis=1)).reshape(free.found.mean.shape)
    usual = {v: float(spread[-1, i]) for i, v in enumerate(free.model.names)}
    if isinstance(wanted, tuple):
        names = (wanted[0], wanted[1])
    else:
        order = sorted(read, key=lambda v: -abs(_working_gap(free, y, v)) / usual[v])
        names = (order[0], order[1])
    units = {
        v: "level" if free.setting.data.history is None else free.setting.data.history.units[v] for v in read
    }
    shifts = (
        np.linspace(0.0, BEYOND * furthest[names[0]], POINTS),
        np.linspace(0.0, BEYOND * furthest[names[1]], POINTS),
    )
    shape, peak = shift_shape(free.periods, free.base.horizon)
    relative = (not in_shares(units[names[0]]), not in_shares(units[names[1]]))
    paths = [
        _shifted(_shifted(free.base, names[0], a * shape, relative[0]), names[1], b * shape, relative[1])
        for a in shifts[0]
        for b in shifts[1]
    ]
    figures = target(paths).reshape(POINTS, POINTS)
    start = free.base.start
    return Surface(names, relative, shifts, start + peak, start + max(free.periods - 1, peak + 1), figures)


def _working_gap(free: FreePaths, y: Floats, variable: str) -> float:
    i = free.model.names.index(variable)
    gap = y[:, i] - free.found.mean[:, i]
    return float(gap[np.argmax(np.abs(gap))])


def _furthest(free: FreePaths, y: Floats, variable: str) -> float:
    """Largest shift of the path from the reference: in points, or for an index or level as a fraction."""
    i = free.model.names.index(variable)
    x, base = levels(y[:, i], free.model.transforms[i]), free.base.values[variable][: free.periods]
    history = free.setting.data.history
    shares = history is not None and in_shares(history.units[variable])
    gap = x - base if shares else x / base - 1.0
    return float(gap[np.argmax(np.abs(gap))])


def _shifted(path: ScenarioPath, variable: str, shift: Floats, relative: bool) -> ScenarioPath:
    x = path.values[variable]
    return replace(path, values={**path.values, variable: x * (1.0 + shift) if relative else x + shift})
