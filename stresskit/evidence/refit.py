"""Maximum likelihood of some of a frozen design's coefficients on other rows, the rest held."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.evidence.rows import FitRows, survives_the_certain, within_reach
from stresskit.kernels.linalg import inverse_scaled, solve_scaled

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

ITERATIONS = 40
#: Converged when no coefficient moves by more than this share of its standard error.
STEP_TOLERANCE = 1e-6
#: A fit whose linear predictor has walked this far is chasing an infinite coefficient.
FURTHEST = 35.0


@dataclass(frozen=True, slots=True, eq=False)
class Refit:
    """params (f,) of the free coefficients; events; periods with rows.

    covariance (f, f) clustered by period; model (f, f) inverse observed information
    """

    params: Floats
    covariance: Floats
    model: Floats
    events: float
    periods: int


@dataclass(frozen=True, slots=True, eq=False)
class _Sums:
    llf: float
    score: Floats
    information: Floats
    by_period: Floats
    furthest: float


def refit(rows: FitRows, free: Flags) -> Refit:
    """Newton with step halving from the fit's own coefficients; those not ``free`` (k,) stay where they are.

    Raises NumericError when a coefficient has no finite estimate, or ITERATIONS do not settle it.
    """
    params = np.array(rows.fit.coefficients)
    at = _sums(rows, params, free)
    if not np.isfinite(at.llf):
        raise NumericError(
            "a row without event has a fitted probability of 1, so its log-likelihood is not finite"
        )
    for _ in range(ITERATIONS):
        try:
            step = solve_scaled(at.information, at.score)
            error = np.sqrt(np.diag(inverse_scaled(at.information)))
        except np.linalg.LinAlgError:
            raise NumericError("these rows cannot tell the coefficients apart") from None
        if np.abs(step / error).max() <= STEP_TOLERANCE:
            return _finished(rows, params[free], at)
        params, at = _halving(rows, params, free, step, at)
        if at.furthest > FURTHEST:
            raise NumericError(
                "a coefficient runs away on these rows: a column parts the events from the rest"
            )
    raise NumericError(f"no convergence in {ITERATIONS} iterations")


def _halving(rows: FitRows, params: Floats, free: Flags, step: Floats, at: _Sums) -> tuple[Floats, _Sums]:
    for _ in range(30):
        trial = params.copy()
        trial[free] += step
        following = _sums(rows, trial, free)
        if np.isfinite(following.llf) and following.llf >= at.llf - 1e-12 * abs(at.llf):
            return trial, following
        step = 0.5 * step
    raise NumericError("no step improves the log-likelihood")


def _finished(rows: FitRows, params: Floats, at: _Sums) -> Refit:
    t = int((rows.rows.by_period()[0] > 0.0).sum())
    bread = inverse_scaled(at.information)
    covariance = t / (t - 1.0) * bread @ (at.by_period.T @ at.by_period) @ bread
    return Refit(params, covariance, bread, rows.rows.event_weight, t)


def _sums(rows: FitRows, params: Floats, free: Flags) -> _Sums:
    columns = np.flatnonzero(free)
    link, f = rows.fit.link, columns.size
    llf, furthest = 0.0, 0.0
    information, by_period = np.zeros((f, f)), np.zeros((rows.n_periods, f))
    change = params - rows.fit.coefficients
    for block in rows.blocks():
        eta = block.eta + block.x @ change
        if survives_the_certain(link, eta, block.event):
            return _Sums(-np.inf, np.zeros(f), information, by_period, furthest)
        loglik, score, info = link.survive(eta, "observed")
        at = np.flatnonzero(block.event)
        loglik[at], score[at], info[at] = link.event(within_reach(link, eta[at]), "observed")
        x = block.x[:, columns]
        llf += float(block.weight @ loglik)
        information += x.T @ (x * (block.weight * info)[:, None])
        for j in range(f):
            by_period[:, j] += np.bincount(block.period, x[:, j] * (block.weight * score), rows.n_periods)
        # What an offset puts into the predictor is no walk of the coefficients.
        furthest = max(furthest, float(np.abs(block.x @ params).max()))
    return _Sums(llf, by_period.sum(axis=0), information, by_period, furthest)
