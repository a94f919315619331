"""Variables that a scenario leaves out, filled by the conditional mean of the VAR given those it states."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtri

from stresskit.macro.var import VarModel, forecast, levels, working
from stresskit.scenario.gaussian import Conditioned, condition

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Filled:
    """One filled variable, in its own unit.

    values    (n,) conditional mean; of a log_difference variable e to the conditional mean of the log (its median)
    low, high (n,) ends of the band, as likely to be left below as above
    at_floor  (n,) whether the value lay below the variable's floor and was put there
    """

    values: Floats
    low: Floats
    high: Floats
    at_floor: NDArray[np.bool_]


def stated_table(model: VarModel, given: Mapping[str, Floats]) -> Floats:
    """Working values of stated levels, (H, k), NaN where nothing is stated; H is the longest stated length.

    given  variable -> (n,) levels from the first period on (NaN where one is not stated), those of a
           log_difference variable above zero; variables that the VAR does not have are passed over
    """
    mine = {v: x for v, x in given.items() if v in model.names}
    out = np.full((max((x.size for x in mine.values()), default=0), model.k), np.nan)
    for i, (name, transform) in enumerate(zip(model.names, model.transforms, strict=True)):
        if name in mine:
            out[: mine[name].size, i] = working(mine[name], transform)
    return out


def fill(model: VarModel, given: Mapping[str, Floats]) -> Mapping[str, Filled]:
    """Every variable of the VAR that ``given`` lacks, over the periods up to the last stated one."""
    stated = stated_table(model, given)
    found = condition(forecast(model, stated.shape[0]), stated)
    return {name: filled(model, found, name) for name in model.names if name not in given}


def filled(model: VarModel, found: Conditioned, name: str) -> Filled:
    """One variable's conditional path in levels, with its band and floor."""
    i = model.names.index(name)
    middle, half = found.mean[:, i], float(ndtri(0.5 + model.band / 2.0)) * found.sd[:, i]
    values, low, high = (levels(y, model.transforms[i]) for y in (middle, middle - half, middle + half))
    floor = model.floors.get(name, -np.inf)
    return Filled(np.maximum(values, floor), np.maximum(low, floor), np.maximum(high, floor), values < floor)
