"""Shocks that all loans of a calendar period share, estimated from the period residuals of the fits.

In period t the hazard of cause c is that of the model times e^u(c, t), u normal and an autoregression of order one
(a frailty: Duffie, Eckner, Horel & Saita 2009, Journal of Finance 64, "Frailty correlated default"; Das, Duffie, Kapadia &
Saita 2007, Journal of Finance 62, for why conditional independence fails). E[e^u] = 1, u = -sd^2 / 2 + sd x: coefficients
are fitted so that expected and actual events agree over the history, shocks included, so the fitted hazard is the mean one.

Estimated net of binomial noise, which has no memory, r_t = events / expected - 1:
    variance, memory   restricted likelihood (Patterson & Thompson 1971, Biometrika 58; for autoregressions Cheang & Reinsel
                  2000, JASA 95): that of the part of r which the period's own level, intercept and macro terms, cannot
                  have absorbed. Plain moments of r are too small where shocks last, because the fit takes their slow part
                  for its mean. Over a grid of both, the means with the likelihood for weight are taken; the grid's
                  variances are multiples of Breslow's moment estimate, :func:`stresskit.evidence.groups.relative_variance`.
                  Where noise hides the shocks all memories are about as likely, and it is near the middle
    between causes   mean of r_c r_d over common periods
    of u          ln(1 + moments of e^u), those of a lognormal
The error of these estimates themselves is in none of the bands; with T periods that of the standard deviation is about
1 / sqrt(2 T) of it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular
from threadpoolctl import threadpool_limits

from stresskit.analyses.bands.tallies import PeriodTally
from stresskit.core.errors import NumericError
from stresskit.evidence.groups import relative_variance

Floats = NDArray[np.float64]

#: Fewer periods than this say too little about the spread of shocks.
FEWEST_PERIODS = 12
#: Largest autocorrelation that is looked at, and largest correlation between causes.
LARGEST_MEMORY, LARGEST_CORRELATION = 0.95, 0.99
#: Grid of the restricted likelihood: so many memories and variances, these up to so many times the moment estimate.
MEMORIES, VARIANCES, WIDEST = 20, 25, 8.0


@dataclass(frozen=True, slots=True, eq=False)
class PeriodShocks:
    """Shocks u of C causes: standard deviations and autocorrelations (C,), correlations (C, C) in one period.

    periods  number of periods that each estimate rests on
    """

    causes: tuple[str, ...]
    sd: Floats
    memory: Floats
    correlation: Floats
    periods: Mapping[str, int]

    def _innovations(self) -> Floats:
        """(C, C) factor of the innovations' covariance that keeps u stationary with the stated moments."""
        keep = 1.0 - np.outer(self.memory, self.memory)
        covariance = self.correlation * np.outer(self.sd, self.sd) * keep
        spread = np.sqrt(np.diag(covariance))
        unit = np.divide(
            covariance, np.outer(spread, spread), out=np.eye(spread.size), where=np.outer(spread, spread) > 0
        )
        return np.asarray(spread[:, None] * _root(unit))

    def between_periods(self, steps: int) -> Floats:
        """(C, steps, C, steps) covariance of e^u between different periods; 0 within one."""
        t = np.arange(steps)
        ahead = np.maximum(t[:, None] - t[None, :], 0)
        of_first = self.memory[:, None, None] ** ahead
        lag = of_first[:, None] * np.swapaxes(of_first, 1, 2)[None, :]
        covariance = (self.correlation * np.outer(self.sd, self.sd))[:, :, None, None] * lag
        out = np.expm1(covariance)
        out[:, :, t, t] = 0.0
        return np.asarray(out.transpose(0, 2, 1, 3))

    def paths(self, normals: Floats) -> Floats:
        """(.., C, H) shocks u from independent standard normal numbers (.., H, C), stationary from the first step on."""
        x = np.empty(normals.shape)
        start = self.sd[:, None] * _root(self.correlation)
        root = self._innovations()
        steps = normals.shape[-2]
        for h in range(steps):
            if h == 0:
                x[..., h, :] = np.einsum("cd,...d->...c", start, normals[..., h, :])
            else:
                x[..., h, :] = self.memory * x[..., h - 1, :] + np.einsum(
                    "cd,...d->...c", root, normals[..., h, :]
                )
        return np.asarray(np.swapaxes(x - 0.5 * self.sd**2, -1, -2))


def _root(correlation: Floats) -> Floats:
    """Lower triangular factor of a correlation matrix; drawn towards independence where it has none."""
    for pull in (0.0, 1e-9, 1e-6, 1e-3, 0.05, 0.2, 0.5, 1.0):
        try:
            matrix = (1.0 - pull) * correlation + pull * np.eye(correlation.shape[0])
            return np.asarray(np.linalg.cholesky(matrix))
        except np.linalg.LinAlgError:
            continue
    return np.eye(correlation.shape[0])


def period_shocks(found: Mapping[str, PeriodTally]) -> PeriodShocks:
    """Shocks of every cause. Raises NumericError for fewer than FEWEST_PERIODS periods."""
    causes = tuple(found)
    used = {c: (t.at_risk > 0.0) & (t.expected > 0.0) for c, t in found.items()}
    for c, at in used.items():
        if int(at.sum()) - found[c].used < FEWEST_PERIODS:
            raise NumericError(
                f"{int(at.sum())} calendar periods with {found[c].used} coefficients fitted to their levels tell too little about "
                f"shocks of the {c} hazard; {FEWEST_PERIODS} more periods than coefficients are needed"
            )
    with threadpool_limits(limits=1, user_api="blas"):
        both = {c: _restricted(found[c], used[c], _variance(found[c], used[c])) for c in causes}
    spread = {c: both[c][0] for c in causes}
    sd = np.array([np.sqrt(np.log1p(spread[c])) for c in causes])
    memory = np.array([both[c][1] for c in causes])
    correlation = np.eye(len(causes))
    for i, a in enumerate(causes):
        for j, b in enumerate(causes[:i]):
            correlation[i, j] = correlation[j, i] = _together(found, used, spread, a, b)
    return PeriodShocks(causes, sd, memory, correlation, {c: int(at.sum()) for c, at in used.items()})


def _variance(t: PeriodTally, at: NDArray[np.bool_]) -> float:
    return relative_variance(t.events[at], t.expected[at], t.variance[at], t.used)


def _residuals(t: PeriodTally, at: NDArray[np.bool_], spread: float) -> tuple[Floats, Floats]:
    """(r, weight) of each period, 0 where it does not count."""
    r, weight = np.zeros(t.events.size), np.zeros(t.events.size)
    r[at] = t.events[at] / t.expected[at] - 1.0
    weight[at] = 1.0 / (spread + t.variance[at] / t.expected[at] ** 2)
    return r, weight


def _restricted(t: PeriodTally, at: NDArray[np.bool_], moment: float) -> tuple[float, float]:
    """(variance of e^u, autocorrelation) of one cause's shocks; see the module."""
    if moment <= 0.0:
        return 0.0, 0.0
    r = t.events[at] / t.expected[at] - 1.0
    noise = t.variance[at] / t.expected[at] ** 2
    levels = _independent(t.levels[at])
    lag = np.abs(np.subtract.outer(np.flatnonzero(at), np.flatnonzero(at)))
    variance = moment * np.geomspace(1.0 / WIDEST, WIDEST, VARIANCES)
    rho = np.linspace(0.0, LARGEST_MEMORY, MEMORIES)
    fit = np.array([[log_likelihood(r, noise, levels, v * p**lag) for v in variance] for p in rho])
    weight = np.exp(fit - fit.max())
    weight /= weight.sum()
    return float((weight.sum(axis=0) * variance).sum()), float((weight.sum(axis=1) * rho).sum())


def _independent(levels: Floats) -> Floats:
    """Orthonormal columns that span the same; columns that add nothing, or are not known in a period, are left out."""
    known = levels[:, np.isfinite(levels).all(axis=0)]
    scaled = known / np.maximum(np.abs(known).max(axis=0), np.finfo(float).tiny)
    u, s, _ = np.linalg.svd(scaled, full_matrices=False)
    return np.asarray(u[:, s > 1e-9 * s[0]])


def log_likelihood(r: Floats, noise: Floats, levels: Floats, covariance: Floats) -> float:
    """Restricted: of residuals r (T,) = levels @ b + x + noise with any b; x has the covariance, noise (T,) variances of its own."""
    root = np.linalg.cholesky(covariance + np.diag(noise))
    both = solve_triangular(root, np.column_stack([r, levels]), lower=True, check_finite=False)
    y, x = both[:, 0], both[:, 1:]
    inner = np.linalg.cholesky(np.einsum("tk,tl->kl", x, x))
    b = solve_triangular(inner, np.einsum("tk,t->k", x, y), lower=True, check_finite=False)
    logs = np.log(np.diag(root)).sum() + np.log(np.diag(inner)).sum()
    return float(-logs - 0.5 * ((y**2).sum() - (b**2).sum()))


def _together(
    found: Mapping[str, PeriodTally],
    used: Mapping[str, NDArray[np.bool_]],
    spread: Mapping[str, float],
    a: str,
    b: str,
) -> float:
    """Correlation of two causes' shocks in one period; sampling noise of two causes is independent given who is at risk."""
    if spread[a] <= 0.0 or spread[b] <= 0.0:
        return 0.0
    first = min(found[a].first, found[b].first)
    size = max(t.first + t.events.size for t in (found[a], found[b])) - first
    r, w = np.zeros((2, size)), np.zeros((2, size))
    for k, c in enumerate((a, b)):
        place = slice(found[c].first - first, found[c].first - first + found[c].events.size)
        r[k, place], w[k, place] = _residuals(found[c], used[c], spread[c])
    both = np.sqrt(w[0] * w[1])
    if not both.sum() > 0.0:
        return 0.0
    covariance = np.log1p(max(float((both * r[0] * r[1]).sum() / both.sum()), -0.9))
    scale = np.sqrt(np.log1p(spread[a]) * np.log1p(spread[b]))
    return float(np.clip(covariance / scale, -LARGEST_CORRELATION, LARGEST_CORRELATION))
