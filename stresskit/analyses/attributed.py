"""What an attribution found, as numbers."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.elasticity import Elasticity
from stresskit.analyses.games import Cast
from stresskit.analyses.shapley import Split
from stresskit.core.values import ScenarioPath
from stresskit.runs.setting import Setting

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Attributed:
    """What was found; arrays (.., cells, Y + 1) hold losses by calendar year, last the first 12 months.

    before, after   (cells, Y + 1)
    variables       split over the players
    channels        split over those of ``moving``
    matrix          (players, channels, cells, Y + 1); None where it was not made
    factors         factor of the log-mean split -> (totals, by segment and year) parts of the lifetime difference
    """

    setting: Setting
    start: ScenarioPath
    end: ScenarioPath
    cast: Cast
    moving: tuple[str, ...]
    years: tuple[int, ...]
    before: Floats
    after: Floats
    variables: Split
    channels: Split
    matrix: Floats | None
    factors: dict[str, tuple[float, float, float, float]]
    elasticities: tuple[Elasticity, ...]
    projections: int
