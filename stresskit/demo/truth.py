"""The true hazards of the invented bank: stated coefficients, known before any loan is drawn.

A fit of the demo study is judged against these numbers. They are inventions; no estimate from any
real book went into them.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, format_period
from stresskit.demo.economy import Economy, difference, lagged, log_growth, place_linear

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class DefaultTruth:
    """Monthly default hazard on the complementary log-log scale.

    eta = intercept + height * x * exp(1 - x), x = age / peak_age      (a hump, ``height`` at the peak)
        + floating * [product is floating]
        + ltv_at_start * (loan-to-value at start, a fraction)
        + income_cover * (net income over debt service at start)
        + unemployment_change * u + floating_unemployment_change * [floating] * u
        + house_price_growth * g
        + policy_rate_change * r

    P(default | default or stay) = 1 - exp(-exp(eta)). Age counts months on book at the END of the month.
    u, r: change over four quarters, in percentage points; g: change of the log over four quarters;
    all lagged by one quarter, computed on quarters and then placed linearly on months (the value of
    a quarter stands at its last month). A coefficient of 0 says that the driver has no effect.
    """

    intercept: float = -8.55
    height: float = 1.60
    peak_age: float = 36.0
    floating: float = 0.25
    ltv_at_start: float = 2.20
    income_cover: float = -0.45
    unemployment_change: float = 0.16
    floating_unemployment_change: float = 0.12
    house_price_growth: float = -3.00
    policy_rate_change: float = 0.0


@dataclass(frozen=True, slots=True)
class PayoffTruth:
    """Monthly early-repayment hazard on the complementary log-log scale.

    eta = intercept + rise * (1 - exp(-age / rise_age)) + floating * [product is floating]
        + policy_rate_change * r + current_ltv * (balance over indexed home value, at the start of the month)

    Notation as in :class:`DefaultTruth`. Borrowers refinance when rates have fallen, so the sign of
    ``policy_rate_change`` is negative. Nobody looks at the current loan-to-value: the study asks for it all the same, as a
    control that a fit finds nothing where nothing is.
    """

    intercept: float = -5.35
    rise: float = 0.80
    rise_age: float = 15.0
    floating: float = 0.30
    policy_rate_change: float = -0.18
    current_ltv: float = 0.0


#: feature -> (variable, transform, span in quarters, lag in quarters); the study file declares the same.
TRUE_FEATURES: Mapping[str, tuple[str, str, int, int]] = MappingProxyType(
    {
        "unemployment_change": ("unemployment_rate", "difference", 4, 1),
        "house_price_growth": ("house_price_index", "log_growth", 4, 1),
        "policy_rate_change": ("policy_rate", "difference", 4, 1),
    }
)


@dataclass(frozen=True, slots=True)
class MonthlyFeatures:
    """The true macro features on months: ``values[name]`` is (P,) float64, row 0 is month ``start``."""

    start: int
    values: Mapping[str, Floats]


@dataclass(frozen=True, slots=True)
class Truth:
    """Both true hazards, and how they make the probabilities of a month.

    With odds o_c = expm1(exp(eta_c)) the month's exact joint probabilities are
    stay = 1 / (1 + o_default + o_payoff) and cause c = o_c * stay.
    """

    default: DefaultTruth = field(default_factory=DefaultTruth)
    payoff: PayoffTruth = field(default_factory=PayoffTruth)

    def as_json(self) -> dict[str, Any]:
        """Plain data for truth.json."""
        return {
            "link": "cloglog",
            "default": asdict(self.default),
            "payoff": asdict(self.payoff),
            "features": {
                name: {"of": of, "transform": transform, "over": over, "lag": lag, "place": "linear"}
                for name, (of, transform, over, lag) in TRUE_FEATURES.items()
            },
            "default_age_curve": "height * x * exp(1 - x), x = age / peak_age",
            "payoff_age_curve": "rise * (1 - exp(-age / rise_age))",
            "probabilities": "odds_c = expm1(exp(eta_c)), stay = 1 / (1 + sum of odds), cause c = odds_c * stay",
        }


def default_age_curve(truth: DefaultTruth, age: NDArray[Any]) -> Floats:
    """Age part of the default eta; age in months, any shape."""
    x = np.asarray(age, dtype=np.float64) / truth.peak_age
    return truth.height * x * np.exp(1.0 - x)


def payoff_age_curve(truth: PayoffTruth, age: NDArray[Any]) -> Floats:
    """Age part of the payoff eta; age in months, any shape."""
    return -truth.rise * np.expm1(-np.asarray(age, dtype=np.float64) / truth.rise_age)


def monthly_features(economy: Economy, *, start: int, end: int) -> MonthlyFeatures:
    """The true features on months ``start..end`` (month ordinals, both included)."""
    values: dict[str, Floats] = {}
    for name, (variable, transform, over, lag) in TRUE_FEATURES.items():
        series = economy.values[variable]
        moved = difference(series, over) if transform == "difference" else log_growth(series, over)
        placed = place_linear(lagged(moved, lag), economy.start, start, end)
        if not np.isfinite(placed).all():
            first = format_period(start, Frequency.MONTH)
            raise ValueError(
                f"the history is too short: {name} in {first} needs {over + lag} quarters before it"
            )
        values[name] = placed
    return MonthlyFeatures(start, MappingProxyType(values))


def loan_parts(
    truth: Truth, *, floating: NDArray[np.bool_], ltv: Floats, cover: Floats
) -> tuple[Floats, Floats]:
    """Parts of eta that stay constant over a loan's life, intercepts included: (default, payoff), each (n,)."""
    d, p = truth.default, truth.payoff
    f = floating.astype(np.float64)
    return (
        d.intercept + d.floating * f + d.ltv_at_start * ltv + d.income_cover * cover,
        p.intercept + p.floating * f,
    )


def true_odds(
    truth: Truth,
    features: MonthlyFeatures,
    month: int,
    *,
    age: NDArray[np.int64],
    floating: NDArray[np.bool_],
    fixed_parts: tuple[Floats, Floats],
) -> tuple[Floats, Floats]:
    """Odds of default and payoff in ``month`` for loans of the given ages, each (n,)."""
    d, p = truth.default, truth.payoff
    u, g, r = (float(features.values[name][month - features.start]) for name in TRUE_FEATURES)
    eta_default = fixed_parts[0] + default_age_curve(d, age) + d.house_price_growth * g
    eta_default += d.policy_rate_change * r + u * (
        d.unemployment_change + d.floating_unemployment_change * floating
    )
    eta_payoff = fixed_parts[1] + payoff_age_curve(p, age) + p.policy_rate_change * r
    return np.expm1(np.exp(eta_default)), np.expm1(np.exp(eta_payoff))


def joint_probabilities(odds_default: Floats, odds_payoff: Floats) -> tuple[Floats, Floats]:
    """(default, payoff) probabilities of one month from the odds of the two causes."""
    stay = 1.0 / (1.0 + odds_default + odds_payoff)
    return odds_default * stay, odds_payoff * stay
