"""Newton's method with step halving on a concave log-likelihood."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.sums import Evaluation
from stresskit.kernels.linalg import inverse_scaled, solve_scaled

Floats = NDArray[np.float64]

#: Converged when BOTH hold; see :class:`Solution`.
DEVIANCE_TOLERANCE = 1e-10
GRADIENT_TOLERANCE = 1e-8
MAX_ITERATIONS = 60
MAX_HALVINGS = 30


class Objective(Protocol):
    """A concave function of the coefficients: a log-likelihood, or one less a penalty."""

    def evaluate(self, params: Floats) -> Evaluation:
        """Value, gradient and minus the Hessian at ``params`` (k,)."""


class Watch(Protocol):
    """Looks at a fit under way and raises NumericError when it is hopeless, with the reason."""

    def after_step(self, iteration: int, params: Floats, step: Floats, at: Evaluation) -> None:
        """A step was taken to ``params``, where the sums are ``at``, and the fit has not converged."""

    def singular(self, iteration: int, params: Floats, at: Evaluation) -> None:
        """The information at ``params`` cannot be inverted."""


@dataclass(frozen=True, slots=True, eq=False)
class Solution:
    """Where Newton stopped.

    deviance_change  |D - D_before| / (|D| + 0.1 u), D = -2 llf, u = min(1, |llf|); converged when <= DEVIANCE_TOLERANCE
    scaled_gradient  max_j |score_j| / sqrt(u information_jj): distance from the optimum in standard
                     errors of a lone coefficient; converged when <= GRADIENT_TOLERANCE

    u is 1 but where all weights are tiny: standard errors are then so wide that any point would lie within a small part of one.
    """

    params: Floats
    at: Evaluation
    iterations: int
    deviance_change: float
    scaled_gradient: float


def scaled_gradient(at: Evaluation) -> float:
    with np.errstate(divide="ignore", invalid="ignore"):
        return float(np.max(np.abs(at.score) / np.sqrt(np.diag(at.information) * unit(at.llf))))


def unit(llf: float) -> float:
    """What the size of a log-likelihood is measured in; see :class:`Solution`."""
    return min(1.0, abs(llf)) or 1.0


def maximise(
    sums: Objective,
    start: Floats,
    at: Evaluation,
    *,
    watch: Watch,
    near: float | None = None,
) -> Solution:
    """The maximum of the log-likelihood from ``start``, whose evaluation is ``at``, by observed information.

    near  stop as soon as the scaled gradient is below this: for a start, never for a fit

    Raises NumericError when the information is singular, no step improves the log-likelihood, or
    MAX_ITERATIONS do not reach both tolerances.
    """
    params = start
    if not np.isfinite(at.llf):
        raise NumericError(
            "the log-likelihood is not finite at the start: look for extreme values in the columns"
        )
    change, gradient = np.inf, scaled_gradient(at)
    for iteration in range(1, MAX_ITERATIONS + 1):
        try:
            direction = solve_scaled(at.information, at.score)
        except np.linalg.LinAlgError:
            watch.singular(iteration, params, at)
            raise NumericError(
                f"the information matrix became singular in iteration {iteration}: the data cannot tell the "
                "coefficients apart. Leave terms out or pool levels."
            ) from None
        params, following, step = halving(sums, params, at, direction)
        change = relative_change(at, following)
        at = following
        gradient = scaled_gradient(at)
        converged = change <= DEVIANCE_TOLERANCE and gradient <= GRADIENT_TOLERANCE
        if converged or (near is not None and gradient <= near):
            return Solution(params, at, iteration, change, gradient)
        watch.after_step(iteration, params, step, at)
    raise NumericError(
        f"no convergence in {MAX_ITERATIONS} iterations: relative change of the deviance {change:.2e} (asked "
        f"<= {DEVIANCE_TOLERANCE:g}), scaled gradient {gradient:.2e} (asked <= {GRADIENT_TOLERANCE:g}). "
        "Look for near-separation or columns of very different size."
    )


def relative_change(before: Evaluation, after: Evaluation) -> float:
    """|D - D_before| / (|D| + 0.1 u); see :class:`Solution`."""
    return abs(after.llf - before.llf) / (abs(after.llf) + 0.05 * unit(after.llf))


def halving(
    sums: Objective,
    params: Floats,
    at: Evaluation,
    direction: Floats,
    *,
    land: Callable[[Floats], Floats] | None = None,
) -> tuple[Floats, Evaluation, Floats]:
    """The longest of step, step/2, step/4, ... that does not lower the log-likelihood.

    land  puts a trial point where it may stand; None: anywhere
    """
    slack = 1e-13 * abs(at.llf)
    step = direction
    for _ in range(MAX_HALVINGS):
        trial = params + step
        if land is not None:
            trial = land(trial)
        following = sums.evaluate(trial)
        if (
            np.isfinite(following.llf)
            and np.isfinite(following.information).all()
            and following.llf >= at.llf - slack
        ):
            return trial, following, step
        step = 0.5 * step
    raise NumericError(
        f"no step along Newton's direction improves the log-likelihood ({at.llf:.6f}) after {MAX_HALVINGS} halvings: look for "
        "extreme values in the columns, the offset and the counts, with which a hazard is 0 or 1 in floating point"
    )


def standard_errors(at: Evaluation) -> Floats:
    """From the information at hand; infinite when it is singular."""
    try:
        return np.sqrt(np.diag(inverse_scaled(at.information)))
    except np.linalg.LinAlgError:
        return np.full(at.score.size, np.inf)
