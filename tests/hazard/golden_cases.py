"""How the golden files of version 2 were made: ``python -m tests.hazard.golden_cases``. Never to be made again.

A fit per link with weights, a level that pooling joined, a coefficient at its bound and one within, a fitted tail, a
feature by region, a feature that is the same for all, interactions, an offset, a logarithm, recorded gates and
definitions of features; and predictions for cases of every region, level and age, the tail's ages included.
"""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.core.values import FeatureDefinition, FeatureTable, RiskSet
from stresskit.hazard.fit import fit_hazard
from tests.hazard.hazard_cases import make_spec
from tests.hazard.keyed_cases import REGIONS, regional_panel

GOLDEN = Path(__file__).parent.parent / "data" / "golden"
LINKS = {"cloglog": ("weibull", "two_way"), "logit": ("loglogistic", "period_hac")}


def _inputs(link: str) -> tuple[RiskSet, FeatureTable]:
    risk_set, features = regional_panel(link, 1500)
    rng = np.random.default_rng(23)
    n = risk_set.n_loans
    defaulted = np.zeros(n, dtype=bool)
    defaulted[risk_set.stay_loan[risk_set.stay_cause == 1]] = True
    grade = rng.choice(["a", "b", "c"], n).astype(object)
    grade[np.flatnonzero(~defaulted)[:25]] = "rare"  # a level without events
    static = dict(risk_set.static) | {
        "income": np.exp(rng.normal(size=n)), "shift": rng.normal(0.0, 0.2, n), "grade": grade,
    }  # fmt: skip
    weight = rng.integers(1, 4, risk_set.weight.size).astype(np.float64)
    made = {
        name: FeatureDefinition(f"{name.rstrip(']').replace('[', '_')}_index", "log_growth", 4, 1, "index", "linear", "quarter")
        for name in features.names
    }  # fmt: skip
    return dataclasses.replace(risk_set, static=static, weight=weight), dataclasses.replace(
        features, definitions=made
    )


def golden_fit(link: str) -> sk.HazardFit:
    beyond, covariance = LINKS[link]
    spec = make_spec(
        {"age": "spline", "knots": 3, "beyond": beyond, "tail_from": 4},
        {"loan": "ltv", "bound": "negative"},
        {"loan": "income", "transform": "log"},
        {"loan": "grade", "as": "category", "reference": "a"},
        {"loan": "product", "as": "category"},
        {"macro": "prices", "transform": "standardise", "bound": "positive"},
        {"macro": "gap"},
        {"interaction": ("product", "prices")},
        {"interaction": ("product", "gap")},
        {"offset": "shift"},
        link=link,
        when_separated="pool",
        covariance=covariance,
        accept={"levels": "kept for the golden file"},
    )
    return fit_hazard(spec, *_inputs(link))


def golden_cases(features: FeatureTable) -> pd.DataFrame:
    rng = np.random.default_rng(29)
    n = 120
    values = features.values[rng.integers(0, features.n_periods, n)]
    return pd.DataFrame(
        {
            "ltv": rng.normal(0.8, 0.15, n),
            "income": np.exp(rng.normal(size=n)),
            "grade": rng.choice(["a", "b", "c", "rare"], n),
            "product": rng.choice(["fixed", "floating", "other"], n),
            "region": rng.choice(REGIONS, n),
            "shift": rng.normal(0.0, 0.2, n),
            "age": rng.integers(1, 160, n),
        }
        | {name: values[:, j] for j, name in enumerate(features.names)}
    )


def main() -> None:
    cases = golden_cases(_inputs("cloglog")[1])
    for link in LINKS:
        fit = golden_fit(link)
        with (GOLDEN / f"hazard_v2_{link}.json").open("x", encoding="utf-8") as file:
            file.write(fit.to_json())
        cases[link] = fit.predict(cases)
    with (GOLDEN / "hazard_v2_predictions.csv").open("x", encoding="utf-8") as file:
        file.write(cases.to_csv(index=False, lineterminator="\n"))


if __name__ == "__main__":
    main()
