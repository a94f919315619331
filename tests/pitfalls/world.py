"""An invented book with a known truth: what every mistake in this folder is measured on.

Months. History runs over MONTHS calendar months from START; loans start before and during it (late
entry), leave by default or early repayment, or are still there at AS_OF. Both exits read the same macro
series: stress raises defaults and slows repayment. True hazards, cloglog:

    default  -8.2 + 0.6 log(age) + 0.7 x + 0.5 [floating] + 0.9 m
    payoff   -4.6 + 0.3 log(age) - 0.2 x                  - 0.6 m

Estimates come from BATCHES independent books: their spread is the Monte Carlo error of their mean.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio, RiskSet
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.spec.terms import HazardSpec
from tests.oracle import plain

START, MONTHS, STEPS = 2014 * 12, 144, 60
AS_OF = START + MONTHS - 1
BATCHES = 8

TRUE = {
    "default": {"intercept": -8.2, "log_age": 0.6, "x": 0.7, "floating": 0.5, "m": 0.9},
    "payoff": {"intercept": -4.6, "log_age": 0.3, "x": -0.2, "floating": 0.0, "m": -0.6},
}
TERMS = [
    {"age": "log"},
    {"loan": "x"},
    {"loan": "product", "as": "category", "reference": "fixed"},
    {"macro": "m"},
]
#: History: a cycle. Stress: up within a year, back within four.
HISTORY = 1.4 * np.sin(np.arange(MONTHS) * 2 * math.pi / 50) + 0.6 * np.sin(
    np.arange(MONTHS) * 2 * math.pi / 17
)
STRESS = np.interp(np.arange(1, STEPS + 1), [1, 10, 16, 46, STEPS], [0.3, 2.4, 2.4, 0.0, -0.5])
BASELINE = np.zeros(STEPS)


def spec(terms: Sequence[Mapping[str, object]] = TERMS, **more: object) -> HazardSpec:
    return HazardSpec.model_validate({"terms": list(terms), **more}, strict=False)


def features(values: np.ndarray, start: int, name: str = "m") -> FeatureTable:
    column = np.asarray(values, dtype=float).reshape(-1, 1)
    return FeatureTable(Frequency.MONTH, start, (name,), column, np.zeros(column.shape, dtype=np.int64))


def history_features() -> FeatureTable:
    return features(HISTORY, START)


def path_features(path: np.ndarray) -> FeatureTable:
    return features(path, AS_OF + 1)


def true_eta(cause: str, age: object, x: object, floating: object, m: object) -> np.ndarray:
    b = TRUE[cause]
    return np.asarray(
        b["intercept"]
        + b["log_age"] * np.log(age)
        + b["x"] * np.asarray(x)
        + b["floating"] * np.asarray(floating)
        + b["m"] * np.asarray(m)
    )


@dataclass(frozen=True)
class Book:
    """Loans and their one stay each; cause 0 none, 1 default, 2 payoff."""

    x: np.ndarray
    floating: np.ndarray
    origin: np.ndarray
    entry: np.ndarray
    exit: np.ndarray
    cause: np.ndarray

    def take(self, keep: np.ndarray) -> Book:
        return Book(*(getattr(self, n)[keep] for n in ("x", "floating", "origin", "entry", "exit", "cause")))

    def risk_set(
        self, *, entry: np.ndarray | None = None, causes: Mapping[int, int] | None = None
    ) -> RiskSet:
        """As the engine takes it; ``entry`` and ``causes`` let a witness get it wrong."""
        n = self.x.size
        ids = np.array([f"L{i:06d}" for i in range(n)], dtype=object)
        cause = self.cause if causes is None else np.array([causes[int(c)] for c in self.cause])
        product = np.where(self.floating, "floating", "fixed").astype(object)
        return RiskSet(
            Frequency.MONTH, ("default", "payoff"), ids, {"x": self.x, "product": product}, np.arange(n),
            self.origin, self.entry if entry is None else entry, self.exit, cause, np.ones(n),
        )  # fmt: skip


def simulate(
    rng: np.random.Generator,
    loans: int,
    *,
    first: int = -60,
    last: int = MONTHS - 24,
    m: np.ndarray = HISTORY,
) -> Book:
    """Loans that start in months first..last of history (m by month); those gone before START are never seen."""
    origin = START - 1 + rng.integers(first, last, loans)
    x = rng.normal(size=loans)
    floating = rng.random(loans) < 0.4
    # Before history begins the macro series stands at its first value.
    exit_age, cause = np.zeros(loans, dtype=np.int64), np.zeros(loans, dtype=np.int64)
    alive = np.ones(loans, dtype=bool)
    for period in range(int(origin.min()) + 1, AS_OF + 1):
        at = np.flatnonzero(alive & (origin < period))
        age = period - origin[at]
        now = m[max(period - START, 0)]
        odds = {c: np.expm1(np.exp(true_eta(c, age, x[at], floating[at], now))) for c in TRUE}
        whole = 1.0 + odds["default"] + odds["payoff"]
        u = rng.random(at.size) * whole
        kind = np.where(u < odds["default"], 1, np.where(u < odds["default"] + odds["payoff"], 2, 0))
        exit_age[at], cause[at] = age, kind
        alive[at[kind > 0]] = False
    entry = np.maximum(START - 1 - origin, 0)
    seen = exit_age > entry
    return Book(x, floating, origin, entry, exit_age, cause).take(seen)


def portfolio(n: int = 240, seed: int = 5) -> Portfolio:
    """The book to project, the same in every test."""
    rng = np.random.default_rng(seed)
    product = np.where(rng.random(n) < 0.4, "floating", "fixed").astype(object)
    return Portfolio(
        Frequency.MONTH, AS_OF, np.array([f"P{i:04d}" for i in range(n)], dtype=object),
        rng.integers(1, 40, n), np.full(n, 120), np.full(n, 1000.0), np.full(n, 0.04),
        {"x": rng.normal(size=n), "product": product},
    )  # fmt: skip


Values = Callable[[int], float]


def true_steps(
    book: Portfolio,
    paths: Mapping[str, np.ndarray],
    *,
    causes: Sequence[str] = ("default", "payoff"),
    extra: Callable[[int], float] | None = None,
) -> list[list[dict]]:
    """Every loan by the plain loop with the true coefficients; paths: cause -> macro values by step."""
    out = []
    for i in range(book.n_loans):
        x, floating = float(book.static["x"][i]), book.static["product"][i] == "floating"
        etas = {}
        for c in causes:
            b = TRUE[c]
            fixed = b["intercept"] + b["x"] * x + b["floating"] * floating
            add = extra if extra is not None and c == "default" else (lambda age: 0.0)
            etas[c] = lambda age, h, b=b, fixed=fixed, m=paths[c], add=add: (
                fixed + b["log_age"] * math.log(age) + b["m"] * float(m[h - 1]) + add(age)
            )
        loan = {"age": int(book.age[i]), "remaining": int(book.remaining[i]), "balance": 1.0, "rate": 0.0}
        out.append(plain.project_loan(loan, etas, dict.fromkeys(causes, "cloglog"), cap=STEPS))
    return out


def mean_incidence(projected: Sequence[Sequence[Mapping]], steps: int = STEPS) -> float:
    """Mean cumulative incidence of default over the first ``steps`` steps."""
    return math.fsum(s["flows"]["default"] for loan in projected for s in loan[:steps]) / len(projected)


def fit_both(risk_set: RiskSet, table: FeatureTable | None = None) -> dict[str, HazardFit]:
    table = history_features() if table is None else table
    return {c: fit_hazard(spec(), risk_set, table, cause=c) for c in TRUE}


@dataclass(frozen=True)
class Estimate:
    """Mean over batches and its Monte Carlo error."""

    values: np.ndarray

    @property
    def mean(self) -> float:
        return float(self.values.mean())

    @property
    def error(self) -> float:
        return float(self.values.std(ddof=1) / math.sqrt(self.values.size))


def assert_right(values: Sequence[float], truth: float, *, precise: float = 0.02) -> None:
    """Within four Monte Carlo errors of the truth, and those errors small enough to mean something."""
    estimate = Estimate(np.asarray(values, dtype=float))
    assert estimate.error < precise * abs(truth), (
        f"Monte Carlo error {estimate.error:.4g} is too large to judge {truth:.4g}"
    )
    assert abs(estimate.mean - truth) < 4 * estimate.error, (
        f"{estimate.mean:.5g} +- {estimate.error:.2g}, truth {truth:.5g}"
    )


def assert_wrong(value: float | Sequence[float], truth: float, *, by: float) -> None:
    """Off by more than ``by`` (a signed share of the truth), in that direction."""
    off = float(np.mean(value)) / truth - 1
    assert off > by if by > 0 else off < by, (
        f"the wrong way gives {np.mean(value):.4g}, off by {off:+.1%} of {truth:.4g}"
    )


def rows_of(book: Book) -> pd.DataFrame:
    """Person-period rows of a book, a row per loan and month at risk."""
    length = book.exit - book.entry
    loan = np.repeat(np.arange(length.size), length)
    age = np.arange(length.sum()) - np.repeat(np.cumsum(length) - length, length) + book.entry[loan] + 1
    last = age == book.exit[loan]
    return pd.DataFrame(
        {
            "loan": loan, "age": age, "period": book.origin[loan] + age, "event": np.where(last, book.cause[loan], 0),
            "x": book.x[loan], "product": np.where(book.floating[loan], "floating", "fixed"),
        }
    )  # fmt: skip
