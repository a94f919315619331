"""An invented book with a known truth, and its rows spelled out for plain loops.

Months, quarterly macro that stands still within a quarter (place: step). Loans start before and during the
window (late entry), leave by default or payoff, or are censored at their term or the end. True default
hazard, cloglog: level + 0.5 log(age) + 0.6 x + 0.4 [floating] + slope m, m = the macro's level ``true_lag``
quarters ago, plus a shock per month when asked.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, MacroHistory, RiskSet
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.macro.features import build_features
from stresskit.spec.study import Macro
from stresskit.spec.terms import HazardSpec

START, MONTHS = 2010 * 12, 120
END = START + MONTHS - 1
QUARTERS = (2005 * 4, 2022 * 4 - 1)
TERMS = (
    {"age": "log", "support": 1},
    {"loan": "x"},
    {"loan": "product", "as": "category", "reference": "fixed"},
    {"macro": "m"},
)


@dataclass(frozen=True)
class World:
    risk_set: RiskSet
    macro: Macro
    history: MacroHistory
    features: FeatureTable

    def fit(
        self, terms: tuple[dict, ...] = TERMS, *, link: str = "cloglog", cause: str = "default"
    ) -> HazardFit:
        return fit_hazard(spec(*terms, link=link), self.risk_set, self.features, cause=cause)


def spec(*terms: dict, **more: object) -> HazardSpec:
    return HazardSpec.model_validate({"terms": terms, **more})


def macro_section(lag: int, *, transform: str = "level", over: int = 1, place: str = "step") -> Macro:
    return Macro.model_validate(
        {
            "file": "macro.csv",
            "variables": {"u": {"unit": "level", "place": place}},
            "features": {"m": {"of": "u", "transform": transform, "over": over, "lag": lag}},
        }
    )


def macro_history(rng: np.random.Generator, *, memory: float = 0.6, place: str = "step") -> MacroHistory:
    """An AR(1) of sd 1: neighbouring quarters differ enough for a lag to be told."""
    n = QUARTERS[1] - QUARTERS[0] + 1
    u = np.empty(n)
    u[0] = rng.normal()
    for q in range(1, n):
        u[q] = memory * u[q - 1] + np.sqrt(1 - memory**2) * rng.normal()
    return MacroHistory(Frequency.QUARTER, QUARTERS[0], {"u": u}, {"u": "level"}, {"u": place})


def simulate(
    seed: int,
    *,
    loans: int = 5000,
    slope: float = 0.5,
    slope_after: float | None = None,
    x_effect: float = 0.6,
    true_lag: int = 1,
    study_lag: int = 1,
    shock_sd: float = 0.0,
    memory: float = 0.6,
    level: float = -6.6,
) -> World:
    """slope_after: the macro slope in the second half of the window, where it differs."""
    rng = np.random.default_rng(seed)
    history = macro_history(rng, memory=memory)
    truth = build_features(
        macro_section(true_lag), history, model=Frequency.MONTH, start=START, end=END
    ).column("m")
    slopes = np.where(np.arange(MONTHS) < MONTHS // 2, slope, slope if slope_after is None else slope_after)
    calendar = slopes * truth + shock_sd * rng.normal(size=MONTHS) - 0.5 * shock_sd**2
    origin = START - 1 + rng.integers(-36, MONTHS - 6, loans)
    x, floating = rng.normal(size=loans), rng.random(loans) < 0.4
    term = rng.integers(24, 96, loans)
    entry = np.maximum(START - 1 - origin, 0)
    exit_, cause = np.zeros(loans, dtype=np.int64), np.zeros(loans, dtype=np.int64)
    alive = entry < term
    for t in range(MONTHS):
        at = np.flatnonzero(alive & (origin < START + t))
        age = START + t - origin[at]
        eta = level + 0.5 * np.log(age) + x_effect * x[at] + 0.4 * floating[at] + calendar[t]
        odds, other = np.expm1(np.exp(eta)), np.expm1(np.exp(-4.6 - 0.2 * x[at]))
        u = rng.random(at.size) * (1 + odds + other)
        kind = np.where(u < odds, 1, np.where(u < odds + other, 2, 0))
        exit_[at], cause[at] = age, kind
        alive[at[(kind > 0) | (age >= term[at])]] = False
    seen = np.flatnonzero(exit_ > entry)
    risk_set = RiskSet(
        Frequency.MONTH, ("default", "payoff"), np.array([f"L{i:06d}" for i in range(seen.size)], dtype=object),
        {"x": x[seen], "product": np.where(floating[seen], "floating", "fixed").astype(object),
         "region": rng.choice(["north", "south", "west"], seen.size).astype(object)},
        np.arange(seen.size), origin[seen], entry[seen], exit_[seen], cause[seen], np.ones(seen.size),
    )  # fmt: skip
    macro = macro_section(study_lag)
    features = build_features(macro, history, model=Frequency.MONTH, start=START, end=END)
    return World(risk_set, macro, history, features)


def rows_of(
    risk_set: RiskSet, features: FeatureTable | None = None, *, cause: str = "default"
) -> pd.DataFrame:
    """A row per loan and period at risk of ``cause``, spelled out one by one."""
    out = []
    number = risk_set.causes.index(cause) + 1
    row = 0
    for s in range(risk_set.stay_loan.size):
        loan = int(risk_set.stay_loan[s])
        for age in range(int(risk_set.stay_entry[s]) + 1, int(risk_set.stay_exit[s]) + 1):
            last = age == risk_set.stay_exit[s]
            kind = int(risk_set.stay_cause[s]) if last else 0
            period = int(risk_set.stay_origin[s]) + age
            if kind in (0, number):
                one = {name: column[loan] for name, column in risk_set.static.items()}
                one |= {name: column[row] for name, column in risk_set.moving.items()}
                one |= {"loan": loan, "stay": s, "age": age, "period": period, "y": int(kind == number)}
                one["weight"] = float(risk_set.weight[s])
                one["origin"] = int(risk_set.stay_origin[s])
                if features is not None:
                    for name in features.names:
                        one[name] = features.column(name)[period - features.start]
                out.append(one)
            row += 1
    return pd.DataFrame(out)
