"""Draws of all hazards' coefficients together, from how their scores vary between calendar periods.

With B the inverse observed information of each fit and s_t its score in period t, the coefficients' covariance clustered
by period is G/(G-1) sum_t (B s_t)(B s_t)'. With the fits' B s_t stacked the same sum holds across causes: what moved
defaults and repayments together in a month moves their coefficients together. The stacked vectors are themselves a
factor of that matrix, so nothing is decomposed and a draw is sum_t g_t B s_t sqrt(G/(G-1)) with g standard normal, over
sqrt(chi2 / df) with df = G - 1: a multivariate t, as the intervals of the fits use.

Scores of different periods vary together where shocks have memory, which the sum over periods does not see. With A_t the
derivative of expected events by the coefficients and G(t, s) the covariance of the shocks (shocks.between_periods),
B sum_{t != s} A_t G(t, s) A_s' B is added: the memory as estimated, where a robust matrix would have to find it again
from few periods. Without memory nothing is added.

Memory also takes away, where a coefficient leans on differences between neighbouring periods. The two parts are estimated
apart, so it can take more than the scores hold, and the sum is then no covariance. But shocks only ever add to chance, whose
part is B: in no direction may memory leave less than chance, or less than the scores alone where these are below it.

``period_hac``: the Newey & West (1987) matrix with Bartlett weights is the same with sums of L + 1 neighbouring scores
over sqrt(L + 1) in the place of scores. ``model``: each fit by itself, inverse information; it takes loan-months for
independent and is there to compare with.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import block_diag, solve_triangular

from stresskit.analyses.bands.shocks import PeriodShocks
from stresskit.analyses.bands.tallies import PeriodTally
from stresskit.core.errors import NumericError
from stresskit.hazard.covariance import newey_west_lag
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]
Kind = Literal["period", "period_hac", "model", "loan"]

NOT_ONE = "a covariance of the fits is not one: it has negative variances in some direction"


@dataclass(frozen=True, slots=True, eq=False)
class CoefficientSpread:
    """A factor of the covariance of all coefficients, stacked cause after cause.

    centre  cause -> (k,) fitted coefficients
    factor  (K, m): covariance = factor @ factor.T
    df      degrees of freedom of the t distribution; infinite for the normal one
    joint   whether causes vary together
    """

    causes: tuple[str, ...]
    centre: Mapping[str, Floats]
    factor: Floats
    df: float
    joint: bool

    @property
    def normals(self) -> int:
        """Standard normal numbers of a draw."""
        return int(self.factor.shape[1])

    def covariance(self) -> Floats:
        """(K, K) of the normal numerator."""
        return np.asarray(np.einsum("im,jm->ij", self.factor, self.factor))

    def at(self, normal: Floats, chi2: float) -> dict[str, Floats]:
        """cause -> (k,) coefficients of a draw; normal (m,), chi2 a number with df degrees of freedom."""
        scale = 1.0 if np.isinf(self.df) else np.sqrt(self.df / chi2)
        move = np.einsum("km,m->k", self.factor, normal) * scale
        out, place = {}, 0
        for cause in self.causes:
            centre = self.centre[cause]
            out[cause] = centre + move[place : place + centre.size]
            place += centre.size
        return out


def coefficient_spread(
    fits: Mapping[str, HazardFit],
    found: Mapping[str, PeriodTally],
    kind: Kind = "period",
    *,
    shocks: PeriodShocks | None = None,
    slopes: Mapping[str, Floats] | None = None,
) -> CoefficientSpread:
    """The joint factor of some fits; kind ``period`` takes the memory of ``shocks`` in, given the ``slopes`` of
    :func:`stresskit.analyses.bands.tallies.period_slopes`.

    Raises NumericError where there are as many coefficients with a macro feature as periods less one: nothing is left
    from which their errors could be told.
    """
    causes = tuple(fits)
    centre = {c: np.asarray(fits[c].coefficients) for c in causes}
    if kind in ("model", "loan"):
        name = "model_expected" if kind == "model" else "loan"
        return CoefficientSpread(causes, centre, _apart(fits, name), float("inf"), joint=False)
    for c, fit in fits.items():
        macros, periods = int((fit.design.index["feature"] >= 0).sum()), fit.n_periods
        if macros >= periods - 1:
            raise NumericError(
                f"the {c} hazard has {macros} macro coefficients on {periods} calendar periods: "
                "their errors between periods cannot be told"
            )
    first = min(found[c].first for c in causes)
    size = max(found[c].first + found[c].events.size for c in causes) - first
    rows, groups = [], []
    for c in causes:
        stacked = np.zeros((size, centre[c].size))
        at = found[c].first - first
        stacked[at : at + found[c].events.size] = np.einsum("tk,jk->tj", found[c].scores, _bread(fits[c]))
        count = int((found[c].at_risk > 0.0).sum())
        groups.append(count)
        rows.append(stacked.T * np.sqrt(count / (count - 1.0)))
    factor = np.concatenate(rows)
    if kind == "period_hac":
        factor = _windows(factor, max(newey_west_lag(g) for g in groups))
    elif shocks is not None and slopes is not None and shocks.memory.any():
        moved = {}
        for c in causes:
            moved[c] = np.zeros((size, centre[c].size))
            at = found[c].first - first
            moved[c][at : at + slopes[c].shape[0]] = np.einsum("tk,jk->tj", slopes[c], _bread(fits[c]))
        scores = np.einsum("im,jm->ij", factor, factor)
        factor = _factor(_at_least_chance(scores, _memory_part(shocks, causes, moved), _chance(fits)))
    return CoefficientSpread(causes, centre, factor, float(min(groups) - 1), joint=True)


def _memory_part(shocks: PeriodShocks, causes: tuple[str, ...], moved: Mapping[str, Floats]) -> Floats:
    """(K, K) what shocks of different periods add together; moved: cause -> (T, k) B A_t."""
    between = shocks.between_periods(moved[causes[0]].shape[0])
    rows = []
    for a in causes:
        i = shocks.causes.index(a)
        row = [
            np.einsum(
                "tk,ts,sj->kj", moved[a], between[i, :, shocks.causes.index(b)], moved[b], optimize=True
            )
            for b in causes
        ]
        rows.append(np.concatenate(row, axis=1))
    whole = np.concatenate(rows)
    return np.asarray(0.5 * (whole + whole.T))


def _at_least_chance(scores: Floats, memory: Floats, chance: Floats) -> Floats:
    """(K, K) scores + memory, raised where memory takes a direction below both chance and the scores alone."""
    whole = scores + memory
    kept = np.diag(chance) > 0.0
    at = np.ix_(kept, kept)
    root = _factor(chance[at])
    value, vector = np.linalg.eigh(_in_units_of(root, whole[at]))
    alone = np.einsum("im,ij,jm->m", vector, _in_units_of(root, scores[at]), vector)
    floor = np.minimum(1.0, alone)
    if (value >= floor).all():
        return whole
    lifted = np.einsum("ki,im->km", root, vector) * np.sqrt(np.maximum(value, floor))
    out = np.zeros_like(whole)
    out[at] = np.einsum("im,jm->ij", lifted, lifted)
    return out


def _in_units_of(root: Floats, matrix: Floats) -> Floats:
    """root^-1 matrix root^-T, symmetric; root lower triangular."""
    half = solve_triangular(root, matrix, lower=True)
    whole = solve_triangular(root, half.T, lower=True)
    return np.asarray(0.5 * (whole + whole.T))


def _chance(fits: Mapping[str, HazardFit]) -> Floats:
    """(K, K) inverse observed information of the fits, one block each."""
    return np.asarray(block_diag(*(_bread(fit) for fit in fits.values())))


def _bread(fit: HazardFit) -> Floats:
    """(k, k) inverse observed information; a coefficient at a bound is held, so it has none."""
    return np.nan_to_num(np.asarray(fit.covariances.matrices["model_observed"]), nan=0.0)


def _windows(factor: Floats, lag: int) -> Floats:
    """Sums over lag + 1 neighbouring columns, those that overlap the ends included, over sqrt(lag + 1)."""
    padded = np.pad(factor, ((0, 0), (lag, lag)))
    running = np.cumsum(np.pad(padded, ((0, 0), (1, 0))), axis=1)
    return np.asarray((running[:, lag + 1 :] - running[:, : -lag - 1]) / np.sqrt(lag + 1.0))


def _apart(fits: Mapping[str, HazardFit], name: str) -> Floats:
    """Block diagonal factor of the fits' own covariances."""
    blocks = []
    for fit in fits.values():
        matrix = np.nan_to_num(np.asarray(fit.covariances.matrices[name]), nan=0.0)  # type: ignore[index]
        blocks.append(_factor(matrix))
    out = np.zeros((sum(b.shape[0] for b in blocks), sum(b.shape[1] for b in blocks)))
    row = column = 0
    for b in blocks:
        out[row : row + b.shape[0], column : column + b.shape[1]] = b
        row, column = row + b.shape[0], column + b.shape[1]
    return out


def _factor(covariance: Floats) -> Floats:
    """Lower triangular factor of a covariance in units of its own errors; rows without variance are 0."""
    variance = np.diag(covariance)
    if not (variance >= 0.0).all():
        raise NumericError(NOT_ONE)
    sd = np.sqrt(variance)
    kept = sd > 0.0
    out = np.zeros_like(covariance)
    if kept.any():
        at = np.ix_(kept, kept)
        unit = covariance[at] / np.outer(sd[kept], sd[kept])
        for pull in (0.0, 1e-12, 1e-10, 1e-8, 1e-6):
            try:
                root = np.linalg.cholesky(unit + pull * np.eye(unit.shape[0]))
            except np.linalg.LinAlgError:
                continue
            out[at] = sd[kept][:, None] * root
            return out
        raise NumericError(NOT_ONE)
    return out
