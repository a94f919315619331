"""Ridge: the log-likelihood less sum_j w_j b_j^2 / 2, w_j = ridge * variance of column j over the rows at risk.

Hoerl and Kennard 1970, Technometrics 12; for binary regressions Le Cessie and Van Houwelingen 1992, Applied
Statistics 41. Weighing by the column's variance is a ridge on standardised coefficients, so the fit does not
depend on the units of a column. It is the mode under independent normal priors with mean 0 and variance
1/ridge of the standardised coefficients, and the inverse of the penalised information is the covariance of
the normal approximation around that mode.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.design import INTERCEPT, Design
from stresskit.hazard.link import LINKS
from stresskit.hazard.sums import Evaluation, HazardData, ScoreProducts, Sums, Tally
from stresskit.hazard.terms import Offset
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]


def penalised_columns(spec: HazardSpec, design: Design) -> Flags:
    """(k,) all columns but the intercept, what stands in for it, and (unless the spec says so) the age baseline."""
    out = np.array(
        [name != INTERCEPT and (name != "age" or spec.ridge_age) for name in design.owner], dtype=bool
    )
    constant = design.constant()
    return out if constant is None else out & (constant == 0.0)


def column_variances(data: HazardData, choose: Callable[[HazardData], Sums]) -> Floats:
    """(k,) weighted variance (divisor: total weight) of every column over the rows at risk.

    The second moments come from the sums themselves: without an offset and at coefficients 0, every row's
    information of the logit is 1/4.
    """
    # Terms keep their places, by which the loan side knows them; offsets of loans come from the data, here 0.
    terms = tuple(replace(t, moving=False) if isinstance(t, Offset) else t for t in data.design.terms)
    design = Design(data.design.intercept, terms)
    plain = choose(replace(data, design=design, link=LINKS["logit"], offset=np.zeros_like(data.offset)))
    total = data.rows.total_weight
    second = 4.0 * np.diag(plain.evaluate(np.zeros(design.k)).information) / total
    mean = plain.column_totals()[0] / total
    return np.maximum(second - mean * mean, 0.0)


def ridge_weights(spec: HazardSpec, data: HazardData, choose: Callable[[HazardData], Sums]) -> Floats:
    """(k,) w, 0 where nothing is penalised."""
    chosen = penalised_columns(spec, data.design)
    return np.where(chosen, spec.ridge * column_variances(data, choose), 0.0)


class ChangedSums:
    """Sums that differ from others in value, score or information; the rest is handed through."""

    def __init__(self, sums: Sums) -> None:
        self._sums = sums

    @property
    def k(self) -> int:
        return self._sums.k

    def score_products(self, params: Floats) -> ScoreProducts:
        return self._sums.score_products(params)

    def tally(self, params: Floats) -> Tally:
        return self._sums.tally(params)

    def column_totals(self) -> tuple[Floats, Floats]:
        return self._sums.column_totals()


class PenalisedSums(ChangedSums):
    """Sums of a log-likelihood less its ridge; value, score and both kinds of information carry the penalty.

    weights  (k,) >= 0
    Scores of clusters stay those of the log-likelihood: the penalty belongs to no loan and no period.
    """

    def __init__(self, sums: Sums, weights: Floats) -> None:
        super().__init__(sums)
        self._weights = weights

    def penalty(self, params: Floats) -> float:
        return 0.5 * float(self._weights @ (params * params))

    def evaluate(self, params: Floats) -> Evaluation:
        at = self._sums.evaluate(params)
        return Evaluation(
            at.llf - self.penalty(params),
            at.score - self._weights * params,
            at.information + np.diag(self._weights),
        )

    def expected_information(self, params: Floats) -> Floats:
        return self._sums.expected_information(params) + np.diag(self._weights)


class PinnedSums(ChangedSums):
    """Sums whose information does not know the pinned coefficients, so that the covariance of the others is
    the one given that those are held at their bound.

    pinned  (k,) bool; their rows and columns of the information become those of the identity
    """

    def __init__(self, sums: Sums, pinned: Flags) -> None:
        super().__init__(sums)
        self._pinned = pinned

    def without(self, information: Floats) -> Floats:
        out = information.copy()
        out[self._pinned, :] = 0.0
        out[:, self._pinned] = 0.0
        out[self._pinned, self._pinned] = 1.0
        return out

    def evaluate(self, params: Floats) -> Evaluation:
        at = self._sums.evaluate(params)
        return replace(at, information=self.without(at.information))

    def expected_information(self, params: Floats) -> Floats:
        return self.without(self._sums.expected_information(params))


def effective_parameters(information: Floats, weights: Floats, free: Flags) -> float:
    """trace((I + W)^-1 I) over the free coefficients, I the information without penalty (Gray 1992, JASA 87).

    information  (k, k) WITH the penalty
    """
    at = np.ix_(free, free)
    inner = information[at]
    scale = np.sqrt(np.diag(inner))
    share = np.linalg.solve(inner / np.outer(scale, scale), np.diag(weights[free] / scale**2))
    return float(free.sum() - np.trace(share))
