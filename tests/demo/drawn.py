"""The simulated bank as a RiskSet, straight from the simulation, and how far a fit of it is from the truth."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.demo.economy import Economy, invent_economy, place_linear
from stresskit.demo.simulate import (
    PRODUCTS,
    STATUS,
    WINDOW_END,
    WINDOW_START,
    Book,
    History,
    draw_book,
    simulate,
)
from stresskit.demo.truth import TRUE_FEATURES, DefaultTruth, PayoffTruth, Truth, monthly_features
from stresskit.hazard.result import HazardFit


@dataclass(frozen=True)
class Drawn:
    risk_set: RiskSet
    features: FeatureTable


def draw(seed: int, loans: int) -> Drawn:
    rng = [np.random.default_rng(s) for s in np.random.SeedSequence(seed).spawn(3)]
    economy = invent_economy(rng[0])
    book = draw_book(rng[1], loans, economy)
    history = simulate(rng[2], book, economy, Truth())
    first = np.flatnonzero(np.r_[True, history.loan[1:] != history.loan[:-1]])
    last = np.r_[first[1:], history.loan.size] - 1
    seen, opened = history.month[first], book.opened
    entry = np.where(seen > opened, seen - opened + 1, 0)
    exit_age = history.month[last] - opened + 1
    code = np.array([{"D": 1, "P": 2}.get(s, 0) for s in STATUS])[history.status[last]]
    kept = exit_age > entry
    risk_set = RiskSet(
        frequency=Frequency.MONTH,
        causes=("default", "payoff"),
        loan_ids=np.array([f"{i:06d}" for i in range(loans)], dtype=object),
        static={
            "ltv_at_start": book.ltv_at_start,
            "income_cover": book.income_cover,
            "product": np.array(PRODUCTS, dtype=object)[book.floating.astype(int)],
        },
        stay_loan=np.flatnonzero(kept),
        stay_origin=opened[kept] - 1,
        stay_entry=entry[kept],
        stay_exit=exit_age[kept],
        stay_cause=code[kept],
        weight=np.ones(int(kept.sum())),
        moving={"current_ltv": _current_ltv(book, history, economy, entry)},
    )
    values = monthly_features(economy, start=WINDOW_START, end=WINDOW_END).values
    table = np.stack([values[name] for name in TRUE_FEATURES], axis=1)
    features = FeatureTable(
        Frequency.MONTH, WINDOW_START, tuple(TRUE_FEATURES), table, np.zeros(table.shape, dtype=np.int64)
    )
    return Drawn(risk_set, features)


def _current_ltv(
    book: Book, history: History, economy: Economy, entry: NDArray[np.int64]
) -> NDArray[np.float64]:
    """What is owed over what the home is worth, at the start of every month at risk."""
    first = min(int(book.opened.min()), WINDOW_START) - 1
    index = place_linear(economy.values["house_price_index"], economy.start, first, WINDOW_END)
    opened = book.opened[history.loan]
    at_risk = history.month - opened + 1 > entry[history.loan]
    before = np.where(history.month == opened, book.amount[history.loan], np.r_[0.0, history.balance[:-1]])
    moved = index[np.maximum(history.month - 1, opened) - first] / index[opened - first]
    value = book.amount[history.loan] / book.ltv_at_start[history.loan]
    found: NDArray[np.float64] = (before / (value * moved))[at_risk]
    return found


D, P = DefaultTruth(), PayoffTruth()
#: cause -> coefficient name -> (truth per unit of the column, column whose scale the fit standardised by)
TRUE: Mapping[str, Mapping[str, tuple[float, str | None]]] = {
    "default": {
        "product[floating]": (D.floating, None),
        "ltv_at_start": (D.ltv_at_start, "ltv_at_start"),
        "income_cover": (D.income_cover, "income_cover"),
        "unemployment_change": (D.unemployment_change, None),
        "house_price_growth": (D.house_price_growth, None),
        "product[floating]:unemployment_change": (D.floating_unemployment_change, None),
    },
    "payoff": {
        "product[floating]": (P.floating, None),
        "policy_rate_change": (P.policy_rate_change, None),
        "current_ltv": (P.current_ltv, None),
    },
}


def true_values(fit: HazardFit) -> dict[str, float]:
    """Truth in the units of the fit: a standardised column's coefficient is per standard deviation."""
    return {n: v * (_scale(fit, column) if column else 1.0) for n, (v, column) in TRUE[fit.cause].items()}


def _scale(fit: HazardFit, column: str) -> float:
    """Standard deviation that the fit divided a column by, from its predictions at two values of it."""
    static = {"product": np.array(["fixed", "fixed"], dtype=object)}
    static |= {name: np.ones(2) for name in ("ltv_at_start", "income_cover")}
    static[column] = np.array([0.0, 1.0])
    part = fit.loan_part(static, 2)
    return float(fit.params[column] / (part.s[1] - part.s[0]))


def errors(fit: HazardFit) -> dict[str, float]:
    """(estimate - truth) / standard error clustered by period."""
    se = fit.standard_errors("period")
    return {name: float((fit.params[name] - value) / se[name]) for name, value in true_values(fit).items()}
