"""Signs that a coefficient must keep: the maximum of a concave log-likelihood over half-lines.

Newton with an active set: every iteration maximises the quadratic model of the log-likelihood over the
bounds exactly (primal active set for strictly concave quadratics: Nocedal and Wright 2006, Numerical
Optimization, 16.5; for bounds alone Lawson and Hanson 1974, Solving Least Squares Problems, 23) and
steps towards its solution with halving. Conventions: ``signs`` (k,) is 1 for a coefficient >= 0, -1 for
one <= 0, 0 for a free one; a coefficient at its bound is exactly 0.0.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.design import Design
from stresskit.hazard.newton import (
    DEVIANCE_TOLERANCE,
    GRADIENT_TOLERANCE,
    MAX_ITERATIONS,
    Objective,
    Solution,
    Watch,
    halving,
    relative_change,
    unit,
)
from stresskit.hazard.sums import Evaluation
from stresskit.kernels.linalg import solve_scaled
from stresskit.spec.terms import HazardSpec, LoanTerm, MacroTerm, term_name

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

#: Slope at a bound, on coefficients scaled to unit curvature, that is taken for 0 against the largest slope.
_SLOPE = 1e-13


@dataclass(frozen=True, slots=True)
class Optimality:
    """First-order conditions at a point, recomputed from the data alone (Karush, Kuhn and Tucker).

    infeasible  coefficients on the wrong side of their bound; 0 asked
    slope_free  largest |score_j| / sqrt(u information_jj), u as in newton.Solution, over coefficients that are not at a bound
    slope_bound largest such slope that would lead off a bound into the allowed side; 0 when none does
    """

    infeasible: int
    slope_free: float
    slope_bound: float

    @property
    def holds(self) -> bool:
        # one by one: the larger of a number and NaN may be the number
        slopes = (self.slope_free, self.slope_bound)
        return self.infeasible == 0 and all(slope <= GRADIENT_TOLERANCE for slope in slopes)


def bound_signs(spec: HazardSpec, design: Design) -> Floats:
    """(k,) of the terms' bounds; a bound is on the columns of the term itself, not on its interactions."""
    wanted = {term_name(t): t.bound for t in spec.terms if isinstance(t, LoanTerm | MacroTerm) and t.bound}
    sign = {"positive": 1.0, "negative": -1.0}
    return np.array([sign[wanted[name]] if name in wanted else 0.0 for name in design.owner])


def feasible(params: Floats, signs: Floats) -> Floats:
    """params with those beyond their bound put on it."""
    return np.where(signs * params < 0.0, 0.0, params)


def at_bound(params: Floats, signs: Floats) -> Flags:
    """(k,) which coefficients stand at their bound."""
    out: Flags = (signs != 0.0) & (params == 0.0)
    return out


def optimality(at: Evaluation, params: Floats, signs: Floats) -> Optimality:
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = at.score / np.sqrt(np.diag(at.information) * unit(at.llf))
    pinned = at_bound(params, signs)
    return Optimality(
        int((signs * params < 0.0).sum()),
        float(np.max(np.abs(slope[~pinned]), initial=0.0)),
        float(np.max((signs * slope)[pinned], initial=0.0)),
    )


def maximise_bounded(
    sums: Objective, start: Floats, at: Evaluation, *, signs: Floats, watch: Watch
) -> Solution:
    """The maximum over ``signs`` from a feasible ``start``, whose evaluation is ``at``.

    Converged when the deviance changes by <= DEVIANCE_TOLERANCE and both slopes of :class:`Optimality` are
    <= GRADIENT_TOLERANCE; both are computed once more from a fresh evaluation before the solution is given
    out. Raises NumericError as :func:`stresskit.hazard.newton.maximise` does.
    """
    params, change, state = start, np.inf, optimality(at, start, signs)
    for iteration in range(1, MAX_ITERATIONS + 1):
        try:
            target = bounded_quadratic(at.information, at.score + at.information @ params, signs, params)
        except np.linalg.LinAlgError:
            watch.singular(iteration, params, at)
            raise NumericError(
                f"the information matrix became singular in iteration {iteration} of the fit with bounds: the data "
                "cannot tell the coefficients apart. Leave terms out or pool levels."
            ) from None
        params, following, step = halving(
            sums, params, at, target - params, land=lambda p: feasible(p, signs)
        )
        change = relative_change(at, following)
        at = following
        state = optimality(at, params, signs)
        if change <= DEVIANCE_TOLERANCE and state.holds:
            params = params + 0.0  # -0.0 at a bound would print a sign that it does not have
            at = sums.evaluate(params)
            _recheck(optimality(at, params, signs))
            return Solution(params, at, iteration, change, max(state.slope_free, state.slope_bound))
        watch.after_step(iteration, params, step, at)
    raise NumericError(
        f"no convergence of the fit with bounds in {MAX_ITERATIONS} iterations: relative change of the deviance "
        f"{change:.2e} (asked <= {DEVIANCE_TOLERANCE:g}), slope of free coefficients {state.slope_free:.2e}, slope off a "
        f"bound {state.slope_bound:.2e} (asked <= {GRADIENT_TOLERANCE:g}). Look for near-separation or columns of very different size."
    )


def _recheck(state: Optimality) -> None:
    if not state.holds:
        raise NumericError(
            f"the fit with bounds stopped where its conditions do not hold: {state.infeasible} coefficients beyond their "
            f"bound, slope of free coefficients {state.slope_free:.2e}, slope off a bound {state.slope_bound:.2e} "
            f"(asked <= {GRADIENT_TOLERANCE:g})"
        )


def bounded_quadratic(matrix: Floats, right: Floats, signs: Floats, start: Floats) -> Floats:
    """The maximum of right'x - x'matrix x / 2 over ``signs``, from a feasible ``start``; bounds met exactly.

    matrix  (k, k) positive definite, else numpy.linalg.LinAlgError
    """
    diagonal = np.diag(matrix)
    if not np.isfinite(matrix).all() or (diagonal <= 0.0).any():
        raise np.linalg.LinAlgError("not positive definite")
    scale = np.sqrt(diagonal)
    h, c, x = matrix / np.outer(scale, scale), right / scale, start * scale
    pinned = at_bound(x, signs)
    refused = np.zeros(x.size, dtype=bool)
    for _ in range(20 * x.size + 20):
        wanted = np.zeros(x.size)
        free = ~pinned
        if free.any():
            wanted[free] = solve_scaled(h[np.ix_(free, free)], c[free])
        crossing = free & (signs * wanted < 0.0)
        if crossing.any():
            x, hit, length = _until_bound(x, wanted, crossing)
            pinned |= hit
            # A coefficient let go that turns back at once did so by rounding: its slope is 0.
            refused = refused | hit if length == 0.0 else np.zeros(x.size, dtype=bool)
            continue
        x = wanted
        slope = np.where(pinned & ~refused, signs * (c - h @ x), -np.inf)
        best = int(np.argmax(slope))
        if not slope[best] > _SLOPE * float(np.abs(c).max()):
            return x / scale
        pinned[best] = False
    raise NumericError(
        f"the bounds of {int((signs != 0).sum())} coefficients found no active set: report this fit"
    )


def _until_bound(x: Floats, wanted: Floats, crossing: Flags) -> tuple[Floats, Flags, float]:
    """x moved towards ``wanted`` until the first bound; which coefficients met it; share of the way."""
    share = np.full(x.size, np.inf)
    share[crossing] = x[crossing] / (x[crossing] - wanted[crossing])
    length = float(share.min())
    hit = share <= length
    moved = x + length * (wanted - x)
    moved[hit] = 0.0
    return moved, hit, length
