"""The estimator that a spec asks for: maximum likelihood, with a ridge, within bounds, or bias-reduced."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.bounds import at_bound, bound_signs, feasible, maximise_bounded
from stresskit.hazard.covariance import Covariances, covariances
from stresskit.hazard.design import Design
from stresskit.hazard.estimation import FIRTH_LOGIT, FIRTH_MEAN, RIDGE, Estimation
from stresskit.hazard.firth import AdjustedSums, adjusted_sums, solve_adjusted
from stresskit.hazard.gates import check_rank
from stresskit.hazard.newton import Objective, Solution, Watch, maximise
from stresskit.hazard.penalty import PenalisedSums, PinnedSums, effective_parameters, ridge_weights
from stresskit.hazard.sums import HazardData, Sums
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Means:
    """What an estimator needs beyond the sums, taken from the data before they are let go.

    weights   (k,) of the ridge; None without one
    adjusted  sums of the bias-reducing score; None for other estimators
    """

    weights: Floats | None
    adjusted: AdjustedSums | None


@dataclass(frozen=True, slots=True, eq=False)
class Estimated:
    """llf is the log-likelihood at the estimate, without any penalty."""

    solution: Solution
    covariance: Covariances
    record: Estimation
    llf: float


def means_of(
    spec: HazardSpec, data: HazardData, *, firth: bool, choose: Callable[[HazardData], Sums]
) -> Means:
    """Raises NumericError when there are too many rows for bias reduction."""
    return Means(
        ridge_weights(spec, data, choose) if spec.ridge > 0.0 else None,
        adjusted_sums(data) if firth else None,
    )


def estimate(
    spec: HazardSpec,
    design: Design,
    sums: Sums,
    start: Floats,
    *,
    means: Means,
    watch: Watch,
    record: Estimation,
) -> Estimated:
    """Coefficients, covariances and the record of how they came about.

    record  what is known beforehand: what was separated or pooled
    """
    first = sums.evaluate(start)
    check_rank(design, first.information)
    if means.adjusted is not None:
        return _bias_reduced(design, sums, start, means.adjusted, record)
    objective: Sums = sums
    if means.weights is not None:
        objective = PenalisedSums(sums, means.weights)
        first = objective.evaluate(start)
    solution = maximise(objective, start, first, watch=watch)
    signs = bound_signs(spec, design)
    if signs.any():
        record = replace(record, free=tuple(solution.params.tolist()), free_llf=solution.at.llf)
        if (feasible(solution.params, signs) != solution.params).any():
            solution = _within(objective, start, solution.params, signs, watch)
    pinned = at_bound(solution.params, signs)
    llf = solution.at.llf
    if means.weights is not None:
        penalty = 0.5 * float(means.weights @ solution.params**2)
        llf = sums.evaluate(solution.params).llf
        record = replace(
            record,
            method=RIDGE,
            weights=tuple(means.weights.tolist()),
            penalty=-penalty,
            effective=effective_parameters(solution.at.information, means.weights, ~pinned),
        )
    elif pinned.any():
        record = replace(record, effective=float((~pinned).sum()))
    if not pinned.any():
        return Estimated(solution, covariances(objective, solution.params, solution.at), record, llf)
    record = replace(record, at_bound=tuple(design.labels[j] for j in np.flatnonzero(pinned)))
    held = PinnedSums(objective, pinned)
    covariance = covariances(held, solution.params, held.evaluate(solution.params))
    return Estimated(solution, _unknown(covariance, pinned), record, llf)


def _within(sums: Objective, start: Floats, free: Floats, signs: Floats, watch: Watch) -> Solution:
    """From the free fit put into the bounds, or from the start where the likelihood is higher."""
    near, far = feasible(free, signs), feasible(start, signs)
    at, other = sums.evaluate(near), sums.evaluate(far)
    if not np.isfinite(at.information).all() or not at.llf >= other.llf:
        near, at = far, other
    return maximise_bounded(sums, near, at, signs=signs, watch=watch)


def _unknown(covariance: Covariances, pinned: NDArray[np.bool_]) -> Covariances:
    """No covariance for coefficients at a bound: their distribution is not the normal one."""
    matrices = {}
    for kind, matrix in covariance.matrices.items():
        masked = matrix.copy()
        masked[pinned, :] = np.nan
        masked[:, pinned] = np.nan
        matrices[kind] = masked
    return replace(covariance, matrices=matrices)


def _bias_reduced(
    design: Design, sums: Sums, start: Floats, adjusted: AdjustedSums, record: Estimation
) -> Estimated:
    solution, point = solve_adjusted(adjusted, sums, start, design.labels)
    method, penalty = (FIRTH_MEAN, 0.0) if adjusted.log_hazard else (FIRTH_LOGIT, point.half_log_det)
    record = replace(record, method=method, penalty=penalty)
    return Estimated(solution, covariances(sums, solution.params, solution.at), record, solution.at.llf)
