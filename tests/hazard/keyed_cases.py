"""A panel with regions and a macro feature that goes by them, and the same rows in full."""

from __future__ import annotations

import dataclasses
from functools import lru_cache

import numpy as np
import pandas as pd

from stresskit.core.values import FeatureTable, KeyedFeature, RiskSet
from tests.hazard.hazard_cases import feature_table, simulated_panel

Panel = tuple[RiskSet, FeatureTable]
REGIONS = ("north", "south", "west")


def keyed_table(table: FeatureTable, name: str, by: str, levels: tuple[str, ...]) -> FeatureTable:
    """The table with columns ``name[level]`` told to be one feature."""
    return dataclasses.replace(table, keyed={**table.keyed, name: KeyedFeature(by, tuple(sorted(levels)))})


@lru_cache(maxsize=4)
def regional_panel(link: str = "cloglog", loans: int = 900) -> Panel:
    """Three regions; house prices of each follow a common path and one of their own."""
    risk_set, features = simulated_panel(loans=loans, seed=5, link=link)
    rng = np.random.default_rng(17)
    region = rng.choice(REGIONS, risk_set.n_loans, p=[0.5, 0.3, 0.2]).astype(object)
    own = {
        f"prices[{r}]": features.column("rate") + np.cumsum(rng.normal(0.0, 0.3, features.n_periods))
        for r in REGIONS
    }
    table = feature_table(features.start, rate=features.column("rate"), gap=features.column("gap"), **own)
    static = {**risk_set.static, "region": region}
    return dataclasses.replace(risk_set, static=static), keyed_table(table, "prices", "region", REGIONS)


def in_full(risk_set: RiskSet, features: FeatureTable) -> pd.DataFrame:
    """One row per stay and age, competing exits included, with ``prices`` filled row by row."""
    rows = []
    at = list(features.names)
    for s, loan in enumerate(risk_set.stay_loan):
        region = risk_set.static["region"][loan]
        for age in range(int(risk_set.stay_entry[s]) + 1, int(risk_set.stay_exit[s]) + 1):
            period = int(risk_set.stay_origin[s]) + age
            values = features.values[period - features.start]
            cause = int(risk_set.stay_cause[s]) if age == risk_set.stay_exit[s] else 0
            rows.append(
                (
                    int(loan),
                    age,
                    period,
                    cause,
                    float(risk_set.weight[s]),
                    float(values[at.index("rate")]),
                    float(values[at.index("gap")]),
                    float(values[at.index(f"prices[{region}]")]),
                    float(risk_set.static["ltv"][loan]),
                    str(risk_set.static["product"][loan]),
                    str(region),
                )
            )
    names = [
        "loan", "age", "period", "cause", "weight", "rate", "gap", "prices", "ltv", "product", "region",
    ]  # fmt: skip
    return pd.DataFrame(rows, columns=names)
