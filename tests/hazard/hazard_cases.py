"""Inputs shared by the tests of the hazard room."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.spec.terms import HazardSpec

PERSON_PERIOD = Path(__file__).parent.parent / "data" / "person_period"


def make_spec(*terms: dict[str, Any], **more: Any) -> HazardSpec:
    return HazardSpec.model_validate({"terms": tuple(terms), **more})


def expand(people: pd.DataFrame) -> pd.DataFrame:
    """One row per person and period from first_age .. last_age; ``event`` only in the last."""
    length = (people["last_age"] - people["first_age"] + 1).to_numpy()
    rows = people.loc[people.index.repeat(length)].reset_index(drop=True)
    rows["period"] = rows["first_age"] + rows.groupby("id").cumcount()
    rows["event"] = rows["event"].where(rows["period"] == rows["last_age"], 0)
    return rows.drop(columns=["first_age", "last_age"])


def feature_table(start: int, **columns: Any) -> FeatureTable:
    values = np.column_stack([np.asarray(v, dtype=np.float64) for v in columns.values()])
    return FeatureTable(
        Frequency.MONTH, start, tuple(columns), values, np.zeros(values.shape, dtype=np.int64)
    )


def simulated_panel(
    *, loans: int = 600, months: int = 48, seed: int = 1, causes: int = 2, link: str = "cloglog"
) -> tuple[RiskSet, FeatureTable]:
    """Staggered cohorts with late entry, censoring, a competing exit, a number, a category and two macros."""
    rng = np.random.default_rng(seed)
    start = 24_000
    macro = np.cumsum(rng.normal(0.0, 0.4, months + 1))
    second = rng.normal(0.0, 1.0, months + 1)
    features = feature_table(start, rate=macro, gap=second)
    origin = start + rng.integers(-24, months - 6, loans)
    term = rng.integers(12, 60, loans)
    ltv = rng.normal(0.8, 0.15, loans)
    product = rng.choice(["fixed", "floating", "other"], loans, p=[0.6, 0.3, 0.1])
    entry = np.maximum(0, start - origin)
    stay: dict[str, list[int]] = {"loan": [], "entry": [], "exit": [], "cause": []}
    for i in range(loans):
        age, cause = int(entry[i]), 0
        while age < term[i] and origin[i] + age + 1 <= start + months and cause == 0:
            age += 1
            t = origin[i] + age - start
            eta = -4.2 + 0.02 * age - 0.0006 * age**2 + 1.5 * (ltv[i] - 0.8) + 0.35 * macro[t]
            eta += {"fixed": 0.0, "floating": 0.5, "other": -0.4}[product[i]] * (1 + 0.3 * second[t])
            odds = np.exp(eta) if link == "logit" else np.expm1(np.exp(eta))
            other = np.expm1(np.exp(-4.0 - 0.2 * macro[t])) if causes > 1 else 0.0
            u = rng.random() * (1 + odds + other)
            cause = 1 if u < odds else 2 if u < odds + other else 0
        if age > entry[i]:
            for key, value in (("loan", i), ("entry", int(entry[i])), ("exit", age), ("cause", cause)):
                stay[key].append(value)
    at = np.array(stay["loan"])
    used = np.unique(at)
    ids = np.array([f"L{i:06d}" for i in used], dtype=object)
    risk_set = RiskSet(
        frequency=Frequency.MONTH,
        causes=("default", "payoff")[:causes],
        loan_ids=ids,
        static={"ltv": ltv[used], "product": product[used].astype(object)},
        stay_loan=np.searchsorted(used, at),
        stay_origin=origin[at],
        stay_entry=np.array(stay["entry"]),
        stay_exit=np.array(stay["exit"]),
        stay_cause=np.array(stay["cause"]),
        weight=np.ones(at.size),
    )
    return risk_set, features
