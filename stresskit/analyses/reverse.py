"""Reverse stress: the most plausible path that reaches a threshold, under the study's own VAR.

The path is a point in the space of the VAR's standard normal shocks, its distance from the forecast the length of that
point (docs/plausibility.md), so the search of :mod:`stresskit.analyses.nearest` applies with G = log(figure / threshold),
which is nearly linear in the path. Gradients are differences along the variables that anything reads, period by
period, at full projections; solutions are projected again from their own scenario text before they are told.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.free_path import FreePaths, free_name, free_paths, resolved
from stresskit.analyses.nearest import Point, Search, furthest_loss, nearest, same
from stresskit.analyses.reads import channel_reads, read_variables
from stresskit.analyses.reverse_tables import reverse_answer, reverse_notes, reverse_tables, text_of
from stresskit.analyses.reversed import Reached, Reversed, Surface
from stresskit.analyses.surface import loss_surface
from stresskit.analyses.thresholds import Measured, measured
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import ScenarioPath
from stresskit.macro.var import forecast_sd
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.scenario.plausibility import assess_paths
from stresskit.spec.base import meant
from stresskit.spec.reverse import Reverse

if TYPE_CHECKING:
    # The register of analyses imports this module.
    from stresskit.analyses.ask import Question

Floats = NDArray[np.float64]

#: Rise that is asked for when no threshold is given.
RISE = 0.5
#: Step of a difference, in standard deviations of the forecast of that period.
STEP = 1e-3
#: Periods that a rough gradient moves together.
ROUGHLY = 3
#: How much of a threshold the path written as text may miss by rounding.
MISSED = 1e-6


def reverse(question: Question) -> Analysis:
    """The maker of the analysis ``reverse``."""
    found = reversed_(question)
    texts = {f"{r.name}.yaml": text_of(found, r) for r in (*found.reached, *found.worst)}
    facts: dict[str, Any] = {
        "figure": found.target.what,
        "threshold": found.target.threshold,
        "reference": found.free.base.name,
        "reference_figure": found.before,
        "reached": bool(found.reached),
        "projections": found.target.count - found.on_surface,
        "projections_surface": found.on_surface,
        "gradients": found.gradients,
        "periods": found.free.periods,
        "within": found.within,
    }
    if found.reached:
        best = found.reached[0]
        facts |= {"distance": best.distance, "d2": best.distance**2, "figure_reached": best.figure}
    return Analysis(
        key="reverse",
        title="What would break it",
        answer=reverse_answer(found),
        tables=reverse_tables(found),
        notes=reverse_notes(found),
        facts=facts,
        files=texts,
    )


@dataclass(slots=True, eq=False)
class _Slopes:
    """G and its gradient along free paths; ``read``: places in the VAR of the variables that are read."""

    free: FreePaths
    target: Measured
    read: list[int]
    progress: Any
    gradients: int = 0

    def value(self, points: Floats) -> Floats:
        """(m,) log of the figure over the threshold."""
        return self._log([self.free.working(u) for u in points])

    def _log(self, ys: list[Floats]) -> Floats:
        figures = self.target([self.free.path(y) for y in ys])
        self.progress(self.target.count)
        return np.asarray(np.log(np.maximum(figures, 1e-300) / self.target.threshold))

    def gradient(self, u: Floats, value: float) -> Floats:
        """(n * k,) by one difference per variable read and period; the others move nothing."""
        self.gradients += 1
        return self._differences(u, value, 1)

    def rough(self, u: Floats, value: float) -> Floats:
        """The same with a few periods moved together, each by as many standard deviations."""
        return self._differences(u, value, ROUGHLY)

    def _differences(self, u: Floats, value: float, together: int) -> Floats:
        y, n, k = self.free.working(u), self.free.periods, self.free.model.k
        step = STEP * forecast_sd(self.free.model, n)
        blocks = [slice(h, min(n, h + together)) for h in range(0, n, together)]
        moved = []
        for rows in blocks:
            for i in self.read:
                there = y.copy()
                there[rows, i] += step[rows, i]
                moved.append(there)
        found = (self._log(moved) - value).reshape(len(blocks), len(self.read))
        slope = np.zeros((n, k))
        for b, rows in enumerate(blocks):
            slope[rows, self.read] = found[b] / ((rows.stop - rows.start) * step[rows, self.read])
        return np.asarray(self.free.found.factor.T @ slope.ravel())


def reversed_(question: Question) -> Reversed:
    """The search as numbers.

    Raises UsageError for a threshold that the reference reaches already, a study without VAR, and one whose VAR has no
    variable that is read.
    """
    setting, spec = question.setting, question.spec
    base = setting.path(spec.reference) if spec.reference is not None else setting.reference()
    periods = spec.periods or 3 * (
        1 if setting.data.history is None else setting.data.history.frequency.per_year
    )
    free = free_paths(setting, base, periods=periods, rules=_rules(spec))
    target = measured(setting, spec)
    before = _threshold(target, base, spec)
    names = read_variables(channel_reads(setting))
    read = [i for i, v in enumerate(free.model.names) if v in names]
    if not read:
        raise UsageError(
            f"no variable of macro.var ({', '.join(free.model.names)}) is read by a hazard, a contract or the LGD: whatever path "
            f"they take, the {target.what} stays as it is"
        )
    _check_surface(spec, [free.model.names[i] for i in read])
    expected = spec.most_projections + 60
    slopes = _Slopes(free, target, read, lambda done: question.progress(min(done, expected - 1), expected))
    rows, least = free.floors()
    search = Search(free.size, slopes.value, slopes.gradient, rows, least, slopes.rough)
    question.say(f"searching for {target.what} of {target.words(target.threshold)}")
    at_forecast = float(slopes.value(np.zeros((1, free.size)))[0])
    points, tried = _solutions(search, slopes, spec, at_forecast)
    kept = [p for p in points if spec.within is None or p.distance <= spec.within]
    worst = _worst(search, spec, points, at_forecast)
    name = free_name(setting, "reverse")
    reached = tuple(
        _verified(free, target, p, name if k == 0 else f"{name}_{k + 1}") for k, p in enumerate(kept)
    )
    for r in reached:
        if r.figure < target.threshold * (1.0 - MISSED):
            raise NumericError(
                f"reverse stress: the path found gives {target.words(r.figure)} when it is projected again, below the threshold "
                f"{target.words(target.threshold)}"
            )
    found = Reversed(
        free, target, before, float(np.exp(at_forecast) * target.threshold), reached,
        () if worst is None else (_verified(free, target, worst, free_name(setting, "worst_within")),),
        min((p.distance for p in points), default=float("nan")), spec.within, tried, slopes.gradients,
        tuple(free.model.names[i] for i in read), names, _others(setting, target), None, 0,
    )  # fmt: skip
    surface, count = _surface(found, spec)
    question.progress(expected, expected)
    return replace(found, surface=surface, on_surface=count)


def _rules(spec: Reverse) -> Any:
    return spec.model_dump(mode="json", exclude_unset=True, by_alias=True).get("afterwards")


def _threshold(target: Measured, base: ScenarioPath, spec: Reverse) -> float:
    """Sets the threshold; the figure of the reference. Raises UsageError where it is there already."""
    before = float(target([base])[0])
    if np.isnan(target.threshold):
        target.threshold = before * (1.0 + (RISE if spec.loss_rise is None else spec.loss_rise))
    if before >= target.threshold:
        raise UsageError(
            f"reached already: the {target.what} is {target.words(before)} along {base.name}, and the threshold is "
            f"{target.words(target.threshold)}; give a higher one"
        )
    return before


def _check_surface(spec: Reverse, read: list[str]) -> None:
    for name in spec.surface if isinstance(spec.surface, tuple) else ():
        if name not in read:
            raise UsageError(
                f"surface: {name!r} is no variable of macro.var that is read{meant(name, read)} (there are {', '.join(read)})"
            )


def _solutions(search: Search, slopes: _Slopes, spec: Reverse, at_forecast: float) -> tuple[list[Point], int]:
    """Different solutions, nearest first, and from how many starts; further starts stop where projections run out."""
    if at_forecast >= 0.0:
        return [Point(np.zeros(search.size), at_forecast, np.zeros(search.size), 0.0, True)], 1
    first = nearest(search, np.zeros(search.size))
    assert first is not None
    found, tried = [first] if first.settled else [], 1
    per_gradient = len(slopes.read) * slopes.free.periods
    for start in _other_starts(slopes, first, spec.starts - 1):
        # a search takes a rough gradient where it starts and, where it ends somewhere new, a whole one
        if slopes.target.count + per_gradient // ROUGHLY + 20 > spec.most_projections:
            break
        other = nearest(search, start, found)
        tried += 1
        if other is not None and other.settled and not any(same(other, p) for p in found):
            found.append(other)
    return sorted(found, key=lambda p: p.distance), tried


def _other_starts(slopes: _Slopes, first: Point, count: int) -> list[Floats]:
    """As far out as the first solution, along one variable each, the others at what the VAR makes of that; the variables
    that the solution leans on least come first, since from the others the search would come back."""
    free = slopes.free
    factor = free.found.factor.reshape(free.periods, free.model.k, free.size)
    # gradient with respect to working values, of which F' makes the gradient in shocks
    per_value = np.linalg.solve(free.found.factor.T, first.gradient).reshape(free.periods, free.model.k)
    out = []
    for i in slopes.read:
        way = per_value[:, i] @ factor[:, i, :]
        size = float(np.linalg.norm(way))
        if size > 0:
            out.append((abs(float(way @ first.u)) / size, way * (max(first.distance, 1.0) / size)))
    out.sort(key=lambda pair: pair[0])
    return [way for _, way in out[:count]]


def _worst(search: Search, spec: Reverse, points: list[Point], at_forecast: float) -> Point | None:
    """The largest figure within the stated distance, searched from where the nearest solution points."""
    if spec.within is None:
        return None
    known = points[0].gradient if points and at_forecast < 0.0 else None
    return furthest_loss(search, spec.within, np.zeros(search.size), known)


def _verified(free: FreePaths, target: Measured, point: Point, name: str) -> Reached:
    """The path read back from its own text and projected; distance and figure are those of the text."""
    y = free.working(point.u)
    made = free.path(y, name)
    text = free.text(y, name=name, head=(), notes={"made": "trial"})
    path = resolved(free.setting, text)
    for v in free.model.names:
        if not np.allclose(
            path.values[v], made.values[v], rtol=1e-6, atol=1e-6 * np.abs(made.values[v]).max()
        ):
            raise NumericError(
                f"reverse stress: {v} of the path found is not what its scenario text says; this is a bug in stresskit"
            )
    figure = float(target([path])[0])
    judged = assess_paths(free.model, [path])[0]
    return Reached(
        name, path, y, figure, float(np.sqrt(judged.whole.distance.d2)), judged.whole.distance.dof, point
    )


def _others(setting: Setting, target: Measured) -> tuple[tuple[str, float, float], ...]:
    """The study's own scenarios: name, figure, distance of what they state (NaN where they state nothing of the VAR)."""
    paths = setting.data.paths
    model = setting.data.var
    judged = {} if model is None else {j.scenario: j for j in assess_paths(model, paths)}
    figures = target(paths)
    return tuple(
        (
            p.name,
            float(x),
            float(np.sqrt(judged[p.name].whole.distance.d2)) if p.name in judged else float("nan"),
        )
        for p, x in zip(paths, figures, strict=True)
    )


def _surface(found: Reversed, spec: Reverse) -> tuple[Surface | None, int]:
    """The figure over two variables, and the projections that it took."""
    if spec.surface == "none" or len(found.read) < 2 or not (found.reached or found.worst):
        return None, 0
    before = found.target.count
    best = (found.reached or found.worst)[0]
    made = loss_surface(found.free, found.target, best.y, found.read, spec.surface)
    return made, found.target.count - before
