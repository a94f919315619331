"""How plausible scenarios are: their distance from the VAR's forecast, and what history offers beside it.

Judged is what a scenario states of the VAR's variables, values and changes to other paths: filled values lie at the
conditional mean and add nothing to the distance, and what an afterwards rule continues is a convention, not a view.
d^2 of a stated path is chi-square with as many degrees of freedom as stated values, if the VAR is true
and its parameters are known (Breuer, Jandacka, Rheinberger & Summer 2009 for the use; Waggoner & Zha 1999
for the moments). The same statistic of every window of history of the same length, with the same values
stated, ranks the scenario among episodes.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc

from stresskit.core.values import FILLED, GIVEN, ScenarioPath
from stresskit.macro.var import Forecast, VarModel, forecast, standard_residuals
from stresskit.scenario.completion import Filled, filled, stated_table
from stresskit.scenario.gaussian import condition
from stresskit.scenario.innovations import squared_distances

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

#: Episodes named per scenario and span.
MOST_EPISODES = 3


@dataclass(frozen=True, slots=True)
class Distance:
    """Squared distance from the forecast, number of stated values, and the share of paths that lie further."""

    d2: float
    dof: int

    @property
    def tail(self) -> float:
        """Chi-square probability of a larger d2."""
        return float(chdtrc(self.dof, self.d2))


@dataclass(frozen=True, slots=True)
class Episode:
    """A window of history, first to last period (ordinals), at its own distance from its own forecast."""

    first: int
    last: int
    distance: Distance


@dataclass(frozen=True, slots=True)
class Span:
    """The stated path over its first ``periods`` periods, and windows of history of that length.

    rank      place of the scenario among it and the windows, 1 = the furthest from its forecast
    windows   number of windows, overlapping; 0 where history is too short
    beyond    how many of them lie beyond the radius that one path in twenty should exceed
    episodes  the furthest windows that do not overlap, furthest first
    """

    periods: int
    distance: Distance
    rank: int
    windows: int
    beyond: int
    episodes: tuple[Episode, ...]


@dataclass(frozen=True, slots=True)
class Move:
    """One variable by itself.

    z         largest standardised distance of a value from the forecast of that period, with its sign
    period    ordinal of that period
    distance  of the variable's own stated path; None for a filled variable
    """

    name: str
    periods: int
    z: float
    period: int
    distance: Distance | None


@dataclass(frozen=True, slots=True)
class Pair:
    """Two variables together.

    excess  d2 together less the two d2 apart: above 0 the pair moves against what history ties together
    """

    names: tuple[str, str]
    together: Distance
    apart: tuple[Distance, Distance]

    @property
    def excess(self) -> float:
        return self.together.d2 - self.apart[0].d2 - self.apart[1].d2


@dataclass(frozen=True, slots=True)
class Plausibility:
    """Everything about one scenario.

    start       ordinal of the path's first period
    pair        the one with the largest excess, None with one stated variable
    filled      variable -> its filled values with band, up to the last stated period
    """

    scenario: str
    start: int
    whole: Span
    first_year: Span
    moves: tuple[Move, ...]
    pair: Pair | None
    filled: Mapping[str, Filled]


def given_levels(path: ScenarioPath, model: VarModel) -> dict[str, Floats]:
    """What the path states of the VAR's variables: variable -> (n,) levels from the first period, NaN where not stated."""
    out = {}
    for name in model.names:
        if name not in path.values:
            continue
        if name in path.stated:
            if path.stated[name]:
                out[name] = path.values[name][: path.stated[name]]
            continue
        rows = np.flatnonzero(path.flags[name] == GIVEN)
        if rows.size:
            values = path.values[name][: rows[-1] + 1]
            out[name] = np.where(path.flags[name][: rows[-1] + 1] == GIVEN, values, np.nan)
    return out


def assess_paths(model: VarModel, paths: Sequence[ScenarioPath]) -> tuple[Plausibility, ...]:
    """Plausibility of every path that states at least one value of the VAR's variables, in the order given."""
    units = standard_residuals(model)
    out = []
    for path in paths:
        stated = stated_table(model, given_levels(path, model))
        if stated.shape[0]:
            out.append(_assessed(model, path, stated, units))
    return tuple(out)


def _assessed(model: VarModel, path: ScenarioPath, stated: Floats, units: Floats) -> Plausibility:
    found = forecast(model, stated.shape[0])
    year = min(stated.shape[0], model.frequency.per_year)
    names = [n for n, column in zip(model.names, stated.T, strict=True) if np.isfinite(column).any()]
    apart = {n: _distance(model, found, stated, n) for n in names}
    pairs = [
        Pair((a, b), _distance(model, found, stated, a, b), (apart[a], apart[b]))
        for a, b in combinations(names, 2)
    ]
    rows = [n for n in model.names if n not in names and n in path.flags and (path.flags[n] == FILLED).any()]
    whole = condition(found, stated) if rows else None
    mean = stated if whole is None else whole.mean
    return Plausibility(
        scenario=path.name,
        start=path.start,
        whole=_span(model, found, stated, units),
        first_year=_span(model, forecast(model, year), stated[:year], units),
        moves=_moves(model, found, mean, apart, [n for n in model.names if n in (*names, *rows)]),
        pair=max(pairs, key=lambda p: p.excess) if pairs else None,
        filled={} if whole is None else {n: filled(model, whole, n) for n in rows},
    )


def _distance(model: VarModel, found: Forecast, stated: Floats, *names: str) -> Distance:
    """Of these variables' stated values alone."""
    known: Flags = np.isfinite(stated) & np.array([n in names for n in model.names])
    d2 = squared_distances(model, (stated - found.mean)[:, :, None], known)
    return Distance(float(d2[0]), int(known.sum()))


def _span(model: VarModel, found: Forecast, stated: Floats, units: Floats) -> Span:
    """The path's distance and that of every window of history in which the same entries are stated.

    A window's path deviates from its own forecast by factor @ u with u its standardised residuals.
    """
    periods, known = stated.shape[0], np.isfinite(stated)
    if not known.any():
        return Span(periods, Distance(0.0, 0), 1, 0, 0, ())
    count = max(0, units.shape[0] - periods + 1)
    shocks = np.array([units[i : i + periods].ravel() for i in range(count)]).reshape(count, known.size)
    paths = np.column_stack([(stated - found.mean).ravel(), found.factor @ shocks.T])
    d2 = squared_distances(model, paths.reshape(*known.shape, 1 + count), known)
    own, windows = Distance(float(d2[0]), int(known.sum())), d2[1:]
    chosen: list[int] = []
    for i in np.argsort(-windows, kind="stable"):
        if all(abs(int(i) - j) >= periods for j in chosen) and len(chosen) < MOST_EPISODES:
            chosen.append(int(i))
    return Span(
        periods,
        own,
        1 + int((windows > own.d2).sum()),
        count,
        int((chdtrc(own.dof, windows) < 0.05).sum()),
        tuple(
            Episode(model.first + i, model.first + i + periods - 1, Distance(float(windows[i]), own.dof))
            for i in chosen
        ),
    )


def _moves(
    model: VarModel, found: Forecast, mean: Floats, apart: Mapping[str, Distance], names: Sequence[str]
) -> tuple[Move, ...]:
    """Variables stated or filled; z of the value itself against the forecast that nothing is conditioned on.

    mean  (H, k) stated values, and the filled ones given them; NaN where there is neither
    """
    sd = np.sqrt((found.factor**2).sum(axis=1)).reshape(mean.shape)
    z = (mean - found.mean) / sd
    out = []
    for name in names:
        i = model.names.index(name)
        rows = np.flatnonzero(np.isfinite(z[:, i]))[: apart[name].dof if name in apart else None]
        row = int(rows[np.argmax(np.abs(z[rows, i]))])
        out.append(Move(name, rows.size, float(z[row, i]), model.last + 1 + row, apart.get(name)))
    return tuple(out)
