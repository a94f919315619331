"""What a reverse stress test found, as numbers."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.free_path import FreePaths
from stresskit.analyses.nearest import Point
from stresskit.analyses.thresholds import Measured
from stresskit.core.values import ScenarioPath

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Reached:
    """One path found, as its scenario text says it.

    y         (n, k) working values of the free periods
    figure    of a projection of the path that the text resolves to
    distance  root of d², over ``dof`` stated values
    """

    name: str
    path: ScenarioPath
    y: Floats
    figure: float
    distance: float
    dof: int
    point: Point


@dataclass(frozen=True, slots=True, eq=False)
class Surface:
    """The figure over peak shifts of two variables from the reference path, the others as they are there.

    names    the two; shifts (7,) each, in points or (index, level) as fractions
    at       macro period (ordinal) of the peak, straight up to it and straight back by ``back``
    figures  (len first, len second)
    """

    names: tuple[str, str]
    relative: tuple[bool, bool]
    shifts: tuple[Floats, Floats]
    at: int
    back: int
    figures: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Reversed:
    """A reverse stress test.

    before, at_forecast   figure along the reference, and along the VAR's forecast (with the rule for afterwards)
    reached   paths that reach the threshold (within the distance, where one is stated), nearest first
    worst     the path with the largest figure within the stated distance; empty without one
    nearest   distance of the nearest path found, NaN where none was
    starts    points that were searched from
    read      variables of the VAR that are read
    all_read  every variable that is read, of the VAR or not
    others    the study's own scenarios: name, figure, distance
    on_surface   projections of the surface
    """

    free: FreePaths
    target: Measured
    before: float
    at_forecast: float
    reached: tuple[Reached, ...]
    worst: tuple[Reached, ...]
    nearest: float
    within: float | None
    starts: int
    gradients: int
    read: tuple[str, ...]
    all_read: tuple[str, ...]
    others: tuple[tuple[str, float, float], ...]
    surface: Surface | None
    on_surface: int
