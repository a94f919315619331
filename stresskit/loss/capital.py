"""Risk weights by the formulas of the Basel Framework: an estimate, not a regulatory figure.

Basel Committee on Banking Supervision, Basel Framework, chapters CRE31 (risk-weight functions) and CRE32 (risk
components), versions effective 1 January 2023. PD, LGD and K are fractions, turnover is in millions of euros.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import get_args

import numpy as np
from numpy.typing import NDArray
from scipy.special import ndtr, ndtri

from stresskit.spec.provisions import CapitalClass

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

CLASSES: tuple[str, ...] = get_args(CapitalClass)
RESIDENTIAL, REVOLVING, TRANSACTOR, OTHER_RETAIL, CORPORATE, FINANCIAL, HIGH_VOLATILITY = range(7)
#: Classes with a full maturity adjustment (CRE31.6); retail has none (CRE31.13).
WITH_MATURITY = (CORPORATE, FINANCIAL, HIGH_VOLATILITY)
#: Confidence level of the formulas.
LEVEL = 0.999
#: Risk-weighted amount per unit of K (CRE31.5).
PER_K = 12.5

#: Least PD by class: CRE32.4 for corporates and institutions, CRE32.58 for retail; revolvers 0.1 %.
PD_FLOOR = np.array([0.0005, 0.001, 0.0005, 0.0005, 0.0005, 0.0005, 0.0005])
#: Least LGD of an unsecured exposure by class, and by kind of security where that lowers it: CRE32.17, CRE32.58.
LGD_FLOOR = np.array([0.05, 0.50, 0.50, 0.30, 0.25, 0.25, 0.25])
SECURED_FLOOR: Mapping[str, float] = {
    "financial": 0.0,
    "receivables": 0.10,
    "real_estate": 0.10,
    "other_physical": 0.15,
}


def correlation(pd: Floats, kind: Ints, turnover: Floats | None = None) -> Floats:
    """Asset correlation R.

    kind      class of each exposure, an index into CLASSES
    turnover  annual sales in millions of euros, NaN or None where no firm-size adjustment applies
    CRE31.5 (corporate), 31.7 (financial institutions: 1.25 times), 31.8 (firm size), 31.11 (high-volatility
    real estate), 31.14 to 31.16 (retail).
    """
    fifty = -np.expm1(-50.0 * pd) / -np.expm1(-50.0)
    thirty_five = -np.expm1(-35.0 * pd) / -np.expm1(-35.0)
    corporate = 0.12 * fifty + 0.24 * (1.0 - fifty)
    size = np.zeros(pd.shape)
    if turnover is not None:
        sales = np.clip(turnover, 5.0, 50.0)
        size = np.where(np.isfinite(turnover) & (kind == CORPORATE), 0.04 * (1.0 - (sales - 5.0) / 45.0), 0.0)
    choices = [
        np.full(pd.shape, 0.15),
        np.full(pd.shape, 0.04),
        np.full(pd.shape, 0.04),
        0.03 * thirty_five + 0.16 * (1.0 - thirty_five),
        corporate - size,
        1.25 * corporate,
        0.12 * fifty + 0.30 * (1.0 - fifty),
    ]
    return np.choose(kind, choices)


def capital_requirement(
    pd: Floats, lgd: Floats, kind: Ints, *, maturity: Floats | float = 2.5, turnover: Floats | None = None
) -> Floats:
    """K of exposures that are not in default; arguments broadcast. A PD of 0 or 1 needs no capital.

    K = LGD (N((G(PD) + sqrt(R) G(0.999)) / sqrt(1 - R)) - PD), times the maturity adjustment where the class has one.
    """
    pd, lgd, kind = np.broadcast_arrays(np.asarray(pd, np.float64), np.asarray(lgd, np.float64), kind)
    sure = (pd <= 0) | (pd >= 1)
    p = np.where(sure, 0.5, pd)
    r = correlation(p, kind, None if turnover is None else np.broadcast_to(turnover, p.shape))
    stressed = ndtr((ndtri(p) + np.sqrt(r) * ndtri(LEVEL)) / np.sqrt(1.0 - r))
    b = (0.11852 - 0.05478 * np.log(p)) ** 2
    full = (1.0 + (maturity - 2.5) * b) / (1.0 - 1.5 * b)
    k = lgd * (stressed - p) * np.where(np.isin(kind, WITH_MATURITY), full, 1.0)
    return np.where(sure, 0.0, np.maximum(k, 0.0))


def risk_weight(
    pd: Floats, lgd: Floats, kind: Ints, *, maturity: Floats | float = 2.5, turnover: Floats | None = None
) -> Floats:
    """12.5 x K: 0.5 is a risk weight of 50 %."""
    return PER_K * capital_requirement(pd, lgd, kind, maturity=maturity, turnover=turnover)


def defaulted_requirement(lgd: Floats, best_estimate: Floats) -> Floats:
    """K of a defaulted exposure: its LGD above the best estimate of its loss, not below 0 (CRE31.3).

    With amounts (LGD x EAD) in place of fractions it is K x EAD.
    """
    return np.maximum(0.0, np.asarray(lgd - best_estimate, dtype=np.float64))


@dataclass(frozen=True, slots=True)
class Inputs:
    """What the formulas need of each loan, apart from the stressed figures; (n,) each.

    kind       class, an index into CLASSES
    pd_floor, lgd_floor   least values (downturn LGD included); 0 where none applies
    turnover   millions of euros, NaN where no firm-size adjustment applies
    """

    kind: Ints
    pd_floor: Floats
    lgd_floor: Floats
    turnover: Floats

    def taken(self, rows: Ints) -> Inputs:
        return Inputs(self.kind[rows], self.pd_floor[rows], self.lgd_floor[rows], self.turnover[rows])


def capital_measures(
    inputs: Inputs,
    *,
    stressed: Floats,
    long_run: Floats,
    weight: float,
    lgd: Floats,
    balance: Floats,
    maturity: Floats,
) -> dict[str, Floats]:
    """(b, N + 1) risk-weighted amount, expected loss, and balance times PD and LGD as the formula takes them.

    stressed, long_run   12-month PDs, blended with ``weight`` on the stressed one
    lgd, balance, maturity   of the performing loan at each point; maturity in years
    """
    pd = np.maximum(weight * stressed + (1.0 - weight) * long_run, inputs.pd_floor[:, None])
    severity = np.maximum(lgd, inputs.lgd_floor[:, None])
    weights = risk_weight(
        pd, severity, inputs.kind[:, None], maturity=maturity, turnover=inputs.turnover[:, None]
    )
    return {
        "rwa_performing": weights * balance,
        "regulatory_el_performing": pd * severity * balance,
        "regulatory_pd_x_balance": pd * balance,
        "regulatory_lgd_x_balance": severity * balance,
    }
