"""The book that projections are timed on: loans, hazards with two causes, macro paths, and a moving column."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from stresskit.contract.balances import Balances, ScheduleTerms
from stresskit.contract.index import IndexLevels
from stresskit.contract.paths import ContractPaths
from stresskit.contract.rates import RatePaths
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio, RiskSet
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit, MovingTerm
from stresskit.runs.tables import Cells, make_cells
from stresskit.spec.exposure import Schedule
from stresskit.spec.moving import BalanceOverValue
from stresskit.spec.study import Loss
from stresskit.spec.terms import HazardSpec

GRADES, REGIONS = "ABCDE", 4
LGD = dict(zip(GRADES, (0.1, 0.2, 0.3, 0.4, 0.5), strict=True))
LOSS = Loss.model_validate({"lgd": {"by": "grade", "values": LGD}})
AS_OF = {Frequency.MONTH: 24_311, Frequency.QUARTER: 8_103}
TERMS: list[dict[str, Any]] = [
    {"age": "log"}, {"loan": "ltv"}, {"loan": "income"}, {"loan": "grade", "as": "category", "reference": "A"},
    {"macro": "u"}, {"macro": "g"},
]  # fmt: skip


def columns(n: int, seed: int) -> dict[str, np.ndarray]:
    rng = np.random.default_rng(seed)
    return {
        "ltv": rng.normal(0.7, 0.15, n), "income": rng.normal(size=n),
        "grade": rng.choice(np.array(list(GRADES), dtype=object), n), "region": rng.integers(0, REGIONS, n).astype(float),
    }  # fmt: skip


def make_fits(link: str, frequency: Frequency) -> dict[str, HazardFit]:
    """Hazards of default and payoff, fitted on an invented history of 20,000 loans."""
    rng, n = np.random.default_rng(1), 20_000
    entry = rng.integers(0, 60, n)
    leave = entry + rng.integers(1, 36, n)
    cause = np.where(rng.random(n) < 0.1, 1, np.where(rng.random(n) < 0.3, 2, 0))
    ids, end = np.array([f"H{i:05d}" for i in range(n)], dtype=object), AS_OF[frequency]
    risk_set = RiskSet(
        frequency, ("default", "payoff"), ids, columns(n, 3), np.arange(n), end - leave - rng.integers(0, 30, n), entry,
        leave, cause, np.ones(n),
    )  # fmt: skip
    features = path(131, end - 130, 9, frequency)
    spec = HazardSpec.model_validate({"link": link, "terms": TERMS}, strict=False)
    return {c: fit_hazard(spec, risk_set, features, cause=c) for c in ("default", "payoff")}


def make_book(n: int, frequency: Frequency, term: int) -> Portfolio:
    """n loans with at least ``term`` periods to go, ages 0 to 179."""
    rng = np.random.default_rng(2)
    ids = np.char.add("L", np.arange(n).astype("U8")).astype(object)
    return Portfolio(
        frequency, AS_OF[frequency], ids, rng.integers(0, 180, n), term + rng.integers(0, 60, n), rng.uniform(1e4, 1e6, n),
        rng.uniform(0.02, 0.08, n), columns(n, 4),
    )  # fmt: skip


def cells_of(book: Portfolio) -> Cells:
    """Segments grade x region, 20 cells."""
    return make_cells(book, ("grade", "region"))


def path(steps: int, start: int, seed: int, frequency: Frequency) -> FeatureTable:
    rng = np.random.default_rng(seed)
    values = np.cumsum(rng.normal(0, 0.05, (steps, 2)), axis=0)
    return FeatureTable(frequency, start, ("u", "g"), values, np.zeros((steps, 2), dtype=np.int64))


class MovingLtv:
    """A hazard that reads current LTV on top of its other terms."""

    moving_columns = ("current_ltv",)

    def __init__(self, fit: HazardFit) -> None:
        self._fit = fit

    def __getattr__(self, name: str) -> Any:
        return getattr(self._fit, name)

    def moving_term(self) -> MovingTerm:
        return MovingTerm("current_ltv", 0.8, 0.0, False)

    def moving_part(self, values: Mapping[str, np.ndarray]) -> np.ndarray:
        return 0.8 * values["current_ltv"]


def mortgages(book: Portfolio, index: np.ndarray) -> ContractPaths:
    """The study's annuities with current LTV: balance at the start of the step over value at as_of times an index."""
    everyone, nothing = np.ones(book.n_loans, dtype=bool), np.zeros(book.n_loans)
    schedule = ScheduleTerms(
        Schedule(), everyone, nothing.astype(np.int64), nothing, nothing, nothing, None, None
    )
    with_value = replace(book, static=book.static | {"value": book.balance / book.static["ltv"]})
    column = BalanceOverValue.model_validate(
        {"balance_over_value": {"value": "value", "index": "hpi", "valued": "as_of"}}
    )
    levels = IndexLevels(
        book.as_of, np.concatenate([[1.0], index])[None, :], np.zeros(book.n_loans, dtype=np.int64)
    )
    return ContractPaths(
        with_value, RatePaths(book, ()), Balances(book, (schedule,)), {"current_ltv": column}, {"current_ltv": levels},
        np.zeros(index.size, dtype=bool), plain=True,
    )  # fmt: skip
