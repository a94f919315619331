"""The point nearest to 0 at which a function is at least 0, and the largest value within a distance.

In coordinates u of independent standard normal shocks the squared distance of a path is |u|^2, so the most plausible
path beyond a threshold is the point nearest to the origin of {G(u) >= 0}: the design point of structural reliability
(Hasofer & Lind 1974; Rackwitz & Fiessler 1978). Each step makes G linear and goes to the nearest point of the
half-space, floors on variables as further linear inequalities; a merit function guards the step (Zhang & Der Kiureghian
1995). Between fresh gradients, secants keep the old one up to date (Broyden 1965): a gradient costs many projections.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import nnls

Floats = NDArray[np.float64]

#: How near to the threshold a solution lies, on the scale of G; and the longest last step, relative to the distance: it is
#: taken with a fresh gradient, and what it still leaves enters the squared distance by its square.
REACHED, SETTLED = 1e-7, 1e-2
#: How far a point may lie from where its gradient was taken whole, relative to its distance, secants in between.
STALE = 0.2
#: Where a rough gradient has done what it can: last step, and distance from the threshold on the scale of G.
NEAR, ROUGH_VALUE = 0.05, 0.02
#: Iterations, steps on secants before a fresh gradient, and halvings of a step.
MOST, SECANTS, HALVINGS = 40, 8, 4
#: No normal law is worth believing beyond so many standard deviations: what lies further counts as out of reach.
FURTHEST = 40.0
#: Points nearer to each other than this, relative to their distance, are one solution.
APART = 0.2


@dataclass(frozen=True, slots=True)
class Search:
    """A function to search on.

    value     points (m, n) -> (m,) G, at least 0 where the threshold is reached
    gradient  point (n,), its value -> (n,) gradient
    rough     the same at less cost and less exact, to set out with; no point is settled by it
    rows, least   floors: rows @ u >= least, (r, n) and (r,)
    """

    size: int
    value: Callable[[Floats], Floats]
    gradient: Callable[[Floats, float], Floats]
    rows: Floats
    least: Floats
    rough: Callable[[Floats, float], Floats] | None = None


@dataclass(frozen=True, slots=True)
class Point:
    """Where a search ended.

    residual   distance to where a step with a fresh gradient would lead, over the point's own distance
    settled    whether the search converged there
    """

    u: Floats
    value: float
    gradient: Floats
    residual: float
    settled: bool

    @property
    def distance(self) -> float:
        return float(np.linalg.norm(self.u))


def same(one: Point, other: Point) -> bool:
    """Whether two points stand for one solution."""
    return bool(np.linalg.norm(one.u - other.u) <= APART * max(one.distance, other.distance))


def least_norm(rows: Floats, least: Floats) -> Floats | None:
    """The u of smallest norm with rows @ u >= least, None where there is none (Lawson & Hanson 1974, ch. 23, LDP)."""
    if not (least > 0).any():
        return np.zeros(rows.shape[1])
    size = np.maximum(np.linalg.norm(rows, axis=1), 1e-300)
    e = np.vstack([(rows / size[:, None]).T, (least / size)[None, :]])
    goal = np.zeros(e.shape[0])
    goal[-1] = 1.0
    weights, left = nnls(e, goal)
    if left < 1e-12:
        return None
    r = e @ weights - goal
    return np.asarray(-r[:-1] / r[-1])


def nearest(search: Search, start: Floats, known: Sequence[Point] = ()) -> Point | None:
    """The point nearest to 0 with G >= 0, as a local search from ``start`` finds it; ``settled`` says whether it did.

    known  solutions found before; None when the search comes to one of them, which saves the last gradient
    """
    u, g = start, float(search.value(start[None])[0])
    rough = search.rough is not None
    slope, age, origin = (search.gradient if search.rough is None else search.rough)(u, g), 0, u
    for _ in range(MOST):
        size = max(1.0, float(np.linalg.norm(u)))
        fresh = not rough and float(np.linalg.norm(u - origin)) <= STALE * size
        goal = _closest(search, u, g, slope)
        lost = goal is None or float(np.linalg.norm(goal)) > FURTHEST
        if lost and not rough and age == 0:
            return Point(u, g, slope, float("inf"), False)
        if goal is not None and not lost:
            residual = float(np.linalg.norm(goal - u)) / size
            arrived = residual <= SETTLED and abs(g) <= 10 * REACHED
            arrived |= rough and residual <= NEAR and abs(g) <= ROUGH_VALUE
            here = Point(u, g, slope, residual, True)
            if arrived and any(same(here, p) for p in known):
                return None
            if arrived and fresh:
                return _landed(search, here)
            if not arrived and age < SECANTS:
                u, g, slope, age = _step(search, u, g, slope, goal, age)
                continue
        slope, age, origin, rough = search.gradient(u, g), 0, u, False
    return Point(u, g, slope, float("inf"), False)


def _closest(search: Search, u: Floats, g: float, slope: Floats) -> Floats | None:
    """Nearest point to 0 of the half-space where G made linear at u is at least 0, floors respected."""
    rows = np.vstack([slope[None, :], search.rows])
    least = np.concatenate([[float(slope @ u) - g], search.least])
    return least_norm(rows, least)


def _step(
    search: Search, u: Floats, g: float, slope: Floats, goal: Floats, age: int
) -> tuple[Floats, float, Floats, int]:
    """Towards the goal, shorter where the merit |u|^2 / 2 + c |G| asks for it; then the secant."""
    weight = 2.0 * max(1.0, float(np.linalg.norm(goal))) / max(float(np.linalg.norm(slope)), 1e-12)

    def merit(x: Floats, value: float) -> float:
        return 0.5 * float(x @ x) + weight * abs(value)

    before, t = merit(u, g), 1.0
    for k in range(HALVINGS + 1):
        x = u + t * (goal - u)
        value = float(search.value(x[None])[0])
        if merit(x, value) < before or k == HALVINGS:
            break
        t *= 0.5
    step = x - u
    length = float(step @ step)
    if length > 0:
        slope = slope + (value - g - float(slope @ step)) / length * step
    return x, value, slope, age + 1


def _landed(search: Search, point: Point) -> Point:
    """The same optimum put on the threshold: G between 0 and a hair above."""
    u, g, slope = point.u, point.value, point.gradient
    for _ in range(6):
        if 0.0 <= g <= 2 * REACHED:
            break
        goal = _closest(search, u, g - REACHED, slope)
        if goal is None:
            break
        u = goal
        g = float(search.value(u[None])[0])
    return Point(u, g, slope, point.residual, g >= 0.0)


def furthest_loss(search: Search, distance: float, start: Floats, slope: Floats | None = None) -> Point:
    """The largest G within ``distance`` of 0 (Breuer, Jandačka, Rheinberger & Summer 2009), searched from ``start``.

    slope  gradient near the start, where one is known already
    """
    g0 = float(search.value(np.zeros((1, search.size)))[0])
    if slope is None:
        slope = search.gradient(np.zeros(search.size), g0)
    u, g, age = np.zeros(search.size), g0, 1
    for _ in range(MOST):
        goal = furthest_along(search, slope, distance)
        residual = float(np.linalg.norm(goal - u)) / distance
        if residual <= SETTLED:
            if age == 0:
                value = float(search.value(goal[None])[0])
                return (
                    Point(goal, value, slope, residual, True)
                    if value > g
                    else Point(u, g, slope, residual, True)
                )
            slope, age = search.gradient(u, g), 0
            continue
        value = float(search.value(goal[None])[0])
        if value <= g + 1e-12:
            if age == 0:
                # no better along the gradient: the turn was too wide
                goal = furthest_along(search, slope + u * np.linalg.norm(slope) / distance, distance)
                value = float(search.value(goal[None])[0])
                if value <= g + 1e-12:
                    return Point(u, g, slope, residual, residual <= 10 * SETTLED)
            else:
                slope, age = search.gradient(u, g), 0
                continue
        step = goal - u
        slope = slope + (value - g - float(slope @ step)) / float(step @ step) * step
        u, g, age = goal, value, age + 1
    return Point(u, g, slope, residual, False)


def furthest_along(search: Search, slope: Floats, distance: float) -> Floats:
    """argmax slope @ u over |u| <= distance and the floors: the nearest allowed point to a multiple of the slope."""
    direction = slope / max(float(np.linalg.norm(slope)), 1e-300)

    def at(t: float) -> Floats:
        found = least_norm(search.rows, search.least - search.rows @ (t * direction))
        return t * direction + (np.zeros(search.size) if found is None else found)

    whole = at(distance)
    if float(np.linalg.norm(whole - distance * direction)) < 1e-12:
        return whole
    low, high = 0.0, distance
    while float(np.linalg.norm(at(high))) < distance and high < 1e6 * distance:
        high *= 2.0
    for _ in range(60):
        middle = 0.5 * (low + high)
        if float(np.linalg.norm(at(middle))) < distance:
            low = middle
        else:
            high = middle
    return at(low)
