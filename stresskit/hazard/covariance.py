"""Covariances of a fit: from the information, and clustered by loan, by period or both.

B is the inverse of the observed information, s_g the score of cluster g, G the number of clusters.

model_expected    inverse of the expected information; normal quantiles
model_observed    B; normal quantiles
loan              G/(G-1) B (sum_g s_g s_g') B, g a loan; normal quantiles (Liang and Zeger 1986, Biometrika 73)
period            the same with g a calendar period; t quantiles, G - 1 degrees of freedom
two_way           loan + period - row, each with its own G/(G-1), a row being a loan in a period (Cameron, Gelbach
                  and Miller 2011, Journal of Business & Economic Statistics 29, eq. 2.8). Where the difference is
                  not positive semidefinite its negative eigenvalues become 0 (their section 2.3), here in units
                  of the model-based errors, so that units do not matter. t, min(loans, periods) - 1
period_hac        G/(G-1) B (sum_{|l| <= lag} (1 - |l|/(lag+1)) sum_t s_t s_{t-l}') B (Newey and West 1987,
                  Econometrica 55), lags on the calendar: a period without rows scores 0. t, G - 1
period_jackknife  (G-1)/G sum_g d_g d_g', d_g = (H - H_g)^-1 s_g the move of the coefficients by one Newton step
                  when period g is left out (Bell and McCaffrey 2002, Survey Methodology 28; MacKinnon, Nielsen and
                  Webb 2023, Journal of Applied Econometrics 38: CV3). t, G - 1

Macro coefficients vary by period only, so the spread between periods is what their errors must come from. The
last two kinds named, two_way and period_jackknife, need further sums and are computed when the spec asks.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError, UsageError
from stresskit.hazard.sums import Evaluation, ScoreProducts, Sums
from stresskit.kernels.linalg import inverse_scaled

Floats = NDArray[np.float64]
CovarianceKind = Literal[
    "model_expected", "model_observed", "loan", "period", "period_hac", "two_way", "period_jackknife"
]
KINDS: tuple[CovarianceKind, ...] = (
    "model_expected", "model_observed", "loan", "period", "period_hac", "two_way", "period_jackknife",
)  # fmt: skip
#: Kinds that a fit has only when its spec names them.
ON_REQUEST: tuple[CovarianceKind, ...] = ("two_way", "period_jackknife")
#: Kinds whose errors come from the spread between calendar periods.
BY_PERIOD: tuple[CovarianceKind, ...] = ("period", "period_hac", "two_way", "period_jackknife")
WORDS: Mapping[CovarianceKind, str] = MappingProxyType(
    {
        "model_expected": "model, expected information",
        "model_observed": "model, observed information",
        "loan": "clustered by loan",
        "period": "clustered by period",
        "period_hac": "by period, robust to serial correlation",
        "two_way": "clustered by loan and by period",
        "period_jackknife": "by leaving out one period at a time",
    }
)
#: Macro p-values and intervals are withheld below this many periods: with few clusters, tests on clustered errors
#: reject far too often (Cameron, Gelbach and Miller 2008, Review of Economics and Statistics 90), the more so the
#: more unevenly the periods weigh, as those of a macro series do; docs/gates.md has the simulation.
FEWEST_PERIODS = 20
#: 1 - R^2 of a column on the others below which leaving out a period has taken it away.
_GONE = 1e-10


class Products(Protocol):
    """Sums that two_way and period_jackknife need beyond those of every fit."""

    @property
    def n_rows(self) -> int: ...

    def of_scores(self, params: Floats) -> Floats:
        """(k, k) sum over rows of the outer product of the row's score."""

    def by_period(self, params: Floats) -> Floats:
        """(periods, k, k) observed information of every calendar period from the first at risk to the last."""


@dataclass(frozen=True, slots=True, eq=False)
class Covariances:
    """Every covariance of a fit.

    matrices  kind -> (k, k); NaN where there are fewer than two clusters
    clusters  {"loan": number of loans, "period": number of periods at risk}
    lag       of period_hac, periods
    repaired  negative eigenvalues of two_way that were set to 0
    """

    matrices: Mapping[CovarianceKind, Floats]
    clusters: Mapping[str, int]
    lag: int = 0
    repaired: int = 0

    def __post_init__(self) -> None:
        for matrix in self.matrices.values():
            matrix.setflags(write=False)
        object.__setattr__(self, "matrices", MappingProxyType(dict(self.matrices)))
        object.__setattr__(self, "clusters", MappingProxyType(dict(self.clusters)))

    def matrix(self, kind: CovarianceKind) -> Floats:
        """(k, k) of a kind. Raises UsageError for one that was not computed."""
        if kind not in self.matrices:
            raise UsageError(
                f"this fit has no covariance {kind!r}: it is computed when the study asks for it. Write "
                f"`covariance: {kind}` under the hazard and fit again. It has {', '.join(self.matrices)}"
            )
        return self.matrices[kind]

    def degrees(self, kind: CovarianceKind) -> float:
        """Degrees of freedom of the t distribution; infinite for the normal one."""
        if kind == "two_way":
            return float(min(self.clusters.values()) - 1)
        return float(self.clusters["period"] - 1) if kind in BY_PERIOD else float("inf")

    def quantile(self, kind: CovarianceKind, probability: float) -> float:
        df = self.degrees(kind)
        if df == 0.0:
            return float("nan")
        return float(stats.norm.ppf(probability) if np.isinf(df) else stats.t.ppf(probability, df))

    def p_values(self, kind: CovarianceKind, statistic: Floats) -> Floats:
        """Two-sided p-values of z or t statistics."""
        df = self.degrees(kind)
        if df == 0.0:
            return np.full_like(statistic, np.nan)
        out: Floats = 2.0 * (
            stats.norm.sf(np.abs(statistic)) if np.isinf(df) else stats.t.sf(np.abs(statistic), df)
        )
        return out


def known_kind(kind: str) -> CovarianceKind:
    """The kind, or UsageError; "model" means expected information."""
    if kind == "model":
        return "model_expected"
    for known in KINDS:
        if kind == known:
            return known
    raise UsageError(f"no covariance {kind!r}; there are {', '.join(KINDS)}")


def covariances(sums: Sums, params: Floats, observed: Evaluation) -> Covariances:
    """All kinds but those on request. Raises NumericError when an information matrix is singular."""
    try:
        bread = inverse_scaled(observed.information)
        model = inverse_scaled(sums.expected_information(params))
    except np.linalg.LinAlgError:
        raise NumericError(
            "the information matrix is singular at the optimum: the data cannot tell the coefficients apart"
        ) from None
    products = sums.score_products(params)
    lag = newey_west_lag(products.periods)
    return Covariances(
        {
            "model_expected": model,
            "model_observed": bread,
            "loan": _sandwich(bread, products.by_loan, products.loans),
            "period": _sandwich(bread, products.by_period, products.periods),
            "period_hac": _sandwich(bread, bartlett(products.period_scores, lag), products.periods),
        },
        {"loan": products.loans, "period": products.periods},
        lag=lag,
    )


def with_requested(
    plain: Covariances,
    kind: str,
    lag: int | None,
    params: Floats,
    *,
    sums: Sums,
    products_of: Callable[[], Products],
) -> Covariances:
    """``plain`` with the kind that a spec names, where it is not there yet, and with its stated lag.

    products_of  gives further sums; called only when they are needed
    """
    out = plain
    stated = lag if kind == "period_hac" else None
    if kind not in ON_REQUEST and stated is None:
        return out
    # A coefficient at a bound has no covariance: it stays out of the others' as one that is held.
    observed = plain.matrices["model_observed"]
    free = np.isfinite(np.diag(observed))
    bread = np.where(np.outer(free, free), observed, 0.0)
    products = sums.score_products(params)
    if stated is not None:
        middle = bartlett(products.period_scores, stated)
        matrix = _sandwich(bread, middle, products.periods)
        out = replace(out, matrices={**out.matrices, "period_hac": _masked(matrix, free)}, lag=stated)
    if kind == "two_way":
        matrix, repaired = _two_way(
            bread, products, products_of(), params, np.diag(plain.matrices["model_expected"])
        )
        out = replace(out, matrices={**out.matrices, "two_way": _masked(matrix, free)}, repaired=repaired)
    if kind == "period_jackknife":
        matrix = _jackknife(bread, products, products_of().by_period(params), free)
        out = replace(out, matrices={**out.matrices, "period_jackknife": _masked(matrix, free)})
    return out


def newey_west_lag(periods: int) -> int:
    """floor(4 (T/100)^(2/9)), T the number of periods (Newey and West 1994, Review of Economic Studies 61)."""
    return int(4.0 * (periods / 100.0) ** (2.0 / 9.0))


def bartlett(scores: Floats, lag: int) -> Floats:
    """(k, k) sum over lags -lag .. lag of (1 - |l|/(lag+1)) sum_t s_t s_{t-l}'; scores (t, k) in calendar order."""
    out: Floats = scores.T @ scores
    for step in range(1, min(lag, scores.shape[0] - 1) + 1):
        cross = scores[step:].T @ scores[:-step]
        out = out + (1.0 - step / (lag + 1.0)) * (cross + cross.T)
    return out


def _sandwich(bread: Floats, middle: Floats, clusters: int) -> Floats:
    if clusters < 2:
        return np.full_like(bread, np.nan)
    out = _symmetric(clusters / (clusters - 1.0) * bread @ middle @ bread)
    # a variance that is 0 may come out below it by rounding
    np.fill_diagonal(out, np.maximum(np.diag(out), 0.0))
    return out


def _symmetric(matrix: Floats) -> Floats:
    half: Floats = 0.5 * (matrix + matrix.T)
    return half


def _masked(matrix: Floats, free: NDArray[np.bool_]) -> Floats:
    return np.where(np.outer(free, free), matrix, np.nan)


def _two_way(
    bread: Floats, products: ScoreProducts, rows: Products, params: Floats, model: Floats
) -> tuple[Floats, int]:
    """(matrix, negative eigenvalues set to 0); model (k,) variances that set the scale."""
    loan = _sandwich(bread, products.by_loan, products.loans)
    period = _sandwich(bread, products.by_period, products.periods)
    matrix = loan + period - _sandwich(bread, rows.of_scores(params), rows.n_rows)
    if not np.isfinite(matrix).all():
        return np.full_like(matrix, np.nan), 0
    scale = np.sqrt(np.where(np.isfinite(model), model, 1.0))
    values, vectors = np.linalg.eigh(matrix / np.outer(scale, scale))
    negative = values < -1e-12 * max(float(np.abs(values).max()), 1e-300)
    if not negative.any() and (np.diag(matrix) >= 0.0).all():
        return matrix, 0
    kept = vectors * np.where(values > 0.0, values, 0.0)
    return _symmetric(kept @ vectors.T) * np.outer(scale, scale), int(negative.sum())


def _jackknife(bread: Floats, products: ScoreProducts, by_period: Floats, free: NDArray[np.bool_]) -> Floats:
    """NaN when a coefficient cannot be estimated without one of the periods."""
    out, g = np.full_like(bread, np.nan), products.periods
    if g < 2:
        return out
    at = np.ix_(free, free)
    whole = inverse_scaled(bread[at])
    total = np.zeros_like(whole)
    for scores, information in zip(products.period_scores, by_period, strict=True):
        if not information.any():
            continue
        rest = _symmetric(whole - information[at])
        try:
            inverse = inverse_scaled(rest)
        except np.linalg.LinAlgError:
            return out
        if (np.diag(inverse) * np.diag(whole) * _GONE > 1.0).any():
            return out
        move = inverse @ scores[free]
        total += np.outer(move, move)
    out[at] = (g - 1.0) / g * _symmetric(total)
    return out
