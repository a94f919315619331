"""Covariances of a fit: from the information, and clustered by loan or by period.

Clustered: C = G/(G-1) * H^-1 (sum_g s_g s_g') H^-1 with H the observed information and s_g the score of
cluster g (Liang and Zeger 1986, Biometrika 73; White 1982 for one row per cluster). Macro coefficients
vary by period only, so their errors come from the spread between periods: clustered by period, with
t quantiles of G - 1 degrees of freedom.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError, UsageError
from stresskit.hazard.sums import Evaluation, Sums
from stresskit.kernels.linalg import inverse_scaled

Floats = NDArray[np.float64]
CovarianceKind = Literal["model_expected", "model_observed", "loan", "period"]
KINDS: tuple[CovarianceKind, ...] = ("model_expected", "model_observed", "loan", "period")
WORDS: Mapping[CovarianceKind, str] = MappingProxyType(
    {
        "model_expected": "model, expected information",
        "model_observed": "model, observed information",
        "loan": "clustered by loan",
        "period": "clustered by period",
    }
)


@dataclass(frozen=True, slots=True, eq=False)
class Covariances:
    """Every covariance of a fit.

    matrices  kind -> (k, k); NaN where there are fewer than two clusters
    clusters  {"loan": number of loans, "period": number of periods at risk}
    """

    matrices: Mapping[CovarianceKind, Floats]
    clusters: Mapping[str, int]

    def __post_init__(self) -> None:
        for matrix in self.matrices.values():
            matrix.setflags(write=False)
        object.__setattr__(self, "matrices", MappingProxyType(dict(self.matrices)))
        object.__setattr__(self, "clusters", MappingProxyType(dict(self.clusters)))

    def degrees(self, kind: CovarianceKind) -> float:
        """Degrees of freedom of the t distribution; infinite (normal) unless clustered by period."""
        return float(self.clusters["period"] - 1) if kind == "period" else float("inf")

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
        out: Floats = 2.0 * (stats.norm.sf(np.abs(statistic)) if np.isinf(df) else stats.t.sf(np.abs(statistic), df))
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
    """All kinds at the optimum. Raises NumericError when an information matrix is singular."""
    try:
        bread = inverse_scaled(observed.information)
        model = inverse_scaled(sums.expected_information(params))
    except np.linalg.LinAlgError:
        raise NumericError(
            "the information matrix is singular at the optimum: the data cannot tell the coefficients apart"
        ) from None
    products = sums.score_products(params)
    return Covariances(
        {
            "model_expected": model,
            "model_observed": bread,
            "loan": _sandwich(bread, products.by_loan, products.loans),
            "period": _sandwich(bread, products.by_period, products.periods),
        },
        {"loan": products.loans, "period": products.periods},
    )


def _sandwich(bread: Floats, middle: Floats, clusters: int) -> Floats:
    if clusters < 2:
        return np.full_like(bread, np.nan)
    matrix = clusters / (clusters - 1.0) * bread @ middle @ bread
    half: Floats = 0.5 * (matrix + matrix.T)
    return half
