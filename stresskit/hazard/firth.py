"""Bias reduction for rare events (Firth 1993, Biometrika 80): the root of an adjusted score.

With p the probability of an event, d = dp/deta, W = d^2 / (p (1 - p)) and h_i the row's hat value
W_i x_i' I^-1 x_i, I the expected information, the adjusted score is

    score + 1/2 sum_i h_i (d'_i / d_i) x_i ,      d' = d2p/deta2

(Kosmidis and Firth 2009, Biometrika 96, section 4). Its root has no bias of order 1/n, for any link.
logit:   d'/d = 1 - 2p. The adjusted score is the gradient of llf + log sqrt(det I), the likelihood
         penalised by Jeffreys' prior, and the root is finite under separation (Heinze and Schemper 2002).
cloglog: d'/d = 1 - e^eta. The link is not canonical, so this is mean bias reduction and NOT the mode under
         Jeffreys' prior; the two differ by terms of order 1/n.
Rows are visited in blocks, twice per iteration, because hat values need I first.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.newton import DEVIANCE_TOLERANCE, GRADIENT_TOLERANCE, MAX_HALVINGS, Solution
from stresskit.hazard.sums import HazardData, RowBlockSums, Sums
from stresskit.kernels.blocks import in_order
from stresskit.kernels.linalg import inverse_scaled

Floats = NDArray[np.float64]

#: Rows (loan-periods) up to which hat values are computed; beyond, the bias is far below the standard error.
MOST_ROWS = 5_000_000
#: Scoring with a fixed information converges linearly.
MAX_SCORINGS = 500
#: Length, in the metric of the information, of a step that is taken although the adjusted score grows.
LEAP = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class AdjustedPoint:
    """At a coefficient vector: llf, adjusted score (k,), inverse and diagonal of the expected information,
    log sqrt(det I), and the size of the adjusted score, score' I^-1 score."""

    llf: float
    score: Floats
    inverse: Floats
    diagonal: Floats
    half_log_det: float
    size: float

    @property
    def scaled_gradient(self) -> float:
        return float(np.max(np.abs(self.score) / np.sqrt(self.diagonal)))


class AdjustedSums(RowBlockSums):
    """Row blocks that also know the bias-reducing score."""

    @property
    def log_hazard(self) -> bool:
        return self._link.log_hazard

    def adjusted(self, params: Floats) -> AdjustedPoint:
        """Raises numpy.linalg.LinAlgError where the expected information is not positive definite."""
        at = self._evaluate(params, "expected", range(self.blocks))
        inverse = inverse_scaled(at.information)

        def work(b: int) -> Floats:
            block = self._block(b)
            _, _, information = self._terms(block, params, "expected")
            hat = (
                block.weight
                * information
                * np.einsum("ij,jk,ik->i", block.x, inverse, block.x, optimize=True)
            )
            with np.errstate(over="ignore", invalid="ignore"):
                out: Floats = block.x.T @ (0.5 * hat * self._link.bend(block.x @ params + block.offset))
            return out

        score = at.score.copy()
        for part in in_order(work, self.blocks, self._threads):
            score = score + part
        diagonal = np.diag(at.information)
        scale = np.sqrt(diagonal)
        log_det = float(np.linalg.slogdet(at.information / np.outer(scale, scale))[1]) + 2.0 * float(
            np.log(scale).sum()
        )
        return AdjustedPoint(at.llf, score, inverse, diagonal, 0.5 * log_det, float(score @ inverse @ score))


def adjusted_sums(data: HazardData) -> AdjustedSums:
    """Raises NumericError beyond MOST_ROWS."""
    if data.rows.n_rows > MOST_ROWS:
        raise NumericError(
            f"bias reduction needs a hat value for each of {data.rows.n_rows:,} rows at risk; it is offered up to "
            f"{MOST_ROWS:,}. With that many rows pool the levels without events (when_separated: pool) or state a ridge."
        )
    return AdjustedSums(data)


def solve_adjusted(
    adjusted: AdjustedSums, sums: Sums, start: Floats, labels: tuple[str, ...]
) -> tuple[Solution, AdjustedPoint]:
    """The root of the adjusted score by Fisher scoring with halving of its size score' I^-1 score.

    Converged by the inequalities of :class:`stresskit.hazard.newton.Solution`, on the adjusted score and the
    expected information. Raises NumericError when they are not met.
    """
    params, at = start, _point(adjusted, start)
    if at is None:
        raise NumericError(
            "the likelihood is not finite at the start: look for extreme values in the columns"
        )
    change = np.inf
    for iteration in range(1, MAX_SCORINGS + 1):
        params, following = _halving(adjusted, params, at)
        change = abs(following.llf - at.llf) / (abs(following.llf) + 0.05)
        at = following
        if change <= DEVIANCE_TOLERANCE and at.scaled_gradient <= GRADIENT_TOLERANCE:
            return Solution(params, sums.evaluate(params), iteration, change, at.scaled_gradient), at
    worst = labels[int(np.argmax(np.abs(at.score) / np.sqrt(at.diagonal)))]
    raise NumericError(
        f"no convergence of the bias-reduced fit in {MAX_SCORINGS} iterations: relative change of the deviance {change:.2e} "
        f"(asked <= {DEVIANCE_TOLERANCE:g}), scaled adjusted score {at.scaled_gradient:.2e} (asked <= {GRADIENT_TOLERANCE:g}), "
        f"largest for {worst}. Leave terms out or pool levels."
    )


def _point(adjusted: AdjustedSums, params: Floats) -> AdjustedPoint | None:
    """None where the sums are not finite or the information is singular."""
    try:
        at = adjusted.adjusted(params)
    except np.linalg.LinAlgError:
        return None
    return at if np.isfinite(at.llf) and np.isfinite(at.size) else None


def _halving(adjusted: AdjustedSums, params: Floats, at: AdjustedPoint) -> tuple[Floats, AdjustedPoint]:
    """The longest of step, step/2, ... that brings the root nearer (to rounding).

    logit: the step climbs the penalised likelihood, so some share of it must raise that. Its slope is no measure: where a
    column parts the events it grows on the way.
    cloglog has no penalised likelihood. The adjusted score should become smaller; where no share of the step does that, a
    step of half a standard error is taken all the same, and MAX_SCORINGS ends what does not settle.
    """
    step = at.inverse @ at.score
    for _ in range(MAX_HALVINGS):
        trial = _point(adjusted, params + step)
        if trial is not None and _nearer(trial, at, climbs=not adjusted.log_hazard):
            return params + step, trial
        step = 0.5 * step
    if adjusted.log_hazard and at.size > 0.0:
        step = (at.inverse @ at.score) * min(1.0, LEAP / np.sqrt(at.size))
        trial = _point(adjusted, params + step)
        if trial is not None:
            return params + step, trial
    raise NumericError(
        f"no scoring step brings the bias-reduced fit nearer (scaled adjusted score {at.scaled_gradient:.2e}) after {MAX_HALVINGS} "
        "halvings. Leave terms out or pool levels."
    )


def _nearer(trial: AdjustedPoint, at: AdjustedPoint, *, climbs: bool) -> bool:
    if trial.scaled_gradient <= GRADIENT_TOLERANCE:
        return True
    if climbs:
        before = at.llf + at.half_log_det
        return trial.llf + trial.half_log_det >= before - 1e-13 * (abs(at.llf) + abs(at.half_log_det))
    return trial.size <= at.size
