"""The synthetic loan book that is fitted, and the specification that is fitted to it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.spec.terms import HazardSpec

START, FIRST_COHORT = 24_000, -60
LEVELS = tuple("ABCDEFGH")
#: Loans drawn at a time.
CHUNK = 1 << 17
#: Mean linear predictor per month: about 2 % of the loans default in a year.
BASE = -6.6
#: Share of loans that come under observation later than the book or their own first month.
LATE = 0.15
#: Knots of the age spline as shares of the mean contract length; the last ends it, the curve is constant from there.
INNER_KNOTS, LAST_KNOT = (0.1, 0.2, 0.35, 0.55, 0.8), 1.1


@dataclass(frozen=True)
class Shape:
    """What the book looks like.

    rows      loan-months wanted; the book ends with the loan that reaches them
    loans     this many loans instead, when not 0
    window    calendar months observed
    term      contract lengths are uniform on term/2 .. 3 term/2 months
    numbers   numeric loan columns; macros: macro features
    moving    one more loan column, with a value of its own in every month
    crossed   interaction of the 8-level category with the first macro feature
    """

    rows: int
    window: int = 180
    term: int = 60
    numbers: int = 6
    macros: int = 4
    moving: bool = False
    crossed: bool = False
    loans: int = 0
    seed: int = 20251231

    @property
    def knots(self) -> tuple[float, ...]:
        """Interior knots of the age spline, whole months; the first knot is the first age at risk."""
        return tuple(float(round(q * self.term)) for q in INNER_KNOTS)

    @property
    def until(self) -> int:
        """Last knot."""
        return round(LAST_KNOT * self.term)


def make_spec(shape: Shape, link: str) -> HazardSpec:
    """Intercept, natural spline of age (6 columns), numbers, 8-level category, macros."""
    terms: list[dict[str, Any]] = [{"age": "spline", "knots": shape.knots, "until": shape.until}]
    terms += [{"loan": f"x{j}"} for j in range(shape.numbers)]
    terms.append({"loan": "grade", "as": "category", "reference": LEVELS[0]})
    terms += [{"macro": f"m{j}"} for j in range(shape.macros)]
    if shape.moving:
        terms.append({"loan": "use"})
    if shape.crossed:
        terms.append({"interaction": ("grade", "m0")})
    return HazardSpec.model_validate({"link": link, "terms": tuple(terms)})


def make_panel(shape: Shape) -> tuple[RiskSet, FeatureTable]:
    """Loans with late entry, contract ends, censoring and defaults drawn from a cloglog hazard, exactly."""
    rng = np.random.default_rng(shape.seed)
    macro = rng.normal(0.0, 1.0, (shape.window, shape.macros))
    for t in range(1, shape.window):
        macro[t] = 0.9 * macro[t - 1] + 0.45 * macro[t]
    features = FeatureTable(
        Frequency.MONTH,
        START,
        tuple(f"m{j}" for j in range(shape.macros)),
        macro,
        np.zeros(macro.shape, np.int64),
    )
    hazard = _running_hazard(shape, macro)
    parts: list[dict[str, NDArray[Any]]] = []
    have, wanted = 0, shape.loans or shape.rows
    while have < wanted:
        part = _draw(shape, rng, hazard)
        size = np.ones_like(part["exit"]) if shape.loans else part["exit"] - part["entry"]
        reached = have + np.cumsum(size)
        keep = int(np.searchsorted(reached, wanted)) + 1
        parts.append({name: column[:keep] for name, column in part.items()})
        have = int(reached[min(keep, reached.size) - 1])
    book = {name: np.concatenate([p[name] for p in parts]) for name in parts[0]}
    del parts
    n = book["entry"].size
    static: dict[str, NDArray[Any]] = {
        f"x{j}": np.ascontiguousarray(book["x"][:, j]) for j in range(shape.numbers)
    }
    static["grade"] = np.array(LEVELS, dtype=object)[book["grade"]]
    moving = {}
    if shape.moving:
        length = book["exit"] - book["entry"]
        moving["use"] = np.repeat(rng.normal(0.0, 0.7, n), length) + rng.normal(0.0, 0.7, int(length.sum()))
    width = len(str(n))
    return RiskSet(
        frequency=Frequency.MONTH,
        causes=("default",),
        loan_ids=np.array([f"L{i:0{width}d}" for i in range(n)], dtype=object),
        static=static,
        stay_loan=np.arange(n),
        stay_origin=START - 1 + book["origin"],
        stay_entry=book["entry"],
        stay_exit=book["exit"],
        stay_cause=book["cause"],
        weight=np.ones(n),
        moving=moving,
    ), features


def _running_hazard(shape: Shape, macro: NDArray[np.float64]) -> NDArray[np.float64]:
    """(cohorts, ages + 1) running sum over age of e^z; outside the window e^z is 0."""
    origin = np.arange(FIRST_COHORT, shape.window)
    age = np.arange(1, 2 * shape.term + shape.window + 1)
    month = origin[:, None] + age
    inside = (month >= 1) & (month <= shape.window)
    effect = macro @ np.array([0.35, -0.25, 0.15, 0.1] + [0.0] * 99)[: shape.macros]
    z = (
        BASE
        + 0.8 * np.exp(-(((age / shape.term - 0.4) / 0.3) ** 2))
        + effect[np.clip(month, 1, shape.window) - 1]
    )
    out = np.zeros((origin.size, age.size + 1))
    np.cumsum(np.where(inside, np.exp(z), 0.0), axis=1, out=out[:, 1:])
    return out


def _draw(shape: Shape, rng: np.random.Generator, hazard: NDArray[np.float64]) -> dict[str, NDArray[Any]]:
    """CHUNK candidates, less those that were never observed."""
    origin = rng.integers(FIRST_COHORT, shape.window - 3, CHUNK)
    x = rng.normal(0.0, 1.0, (CHUNK, shape.numbers))
    grade = rng.choice(8, CHUNK, p=[0.3, 0.2, 0.15, 0.1, 0.1, 0.05, 0.05, 0.05])
    late = np.where(rng.random(CHUNK) < LATE, rng.integers(1, 13, CHUNK), 0)
    entry = np.maximum(-origin, 0) + late
    term = rng.integers(shape.term // 2, 3 * shape.term // 2 + 1, CHUNK)
    censored = rng.geometric(1.0 / (3.0 * shape.term), CHUNK)
    exit_ = np.minimum(np.minimum(term, shape.window - origin), entry + censored)
    loan = 0.08 * (grade - 2) + x @ np.array([0.4, -0.3, 0.2, -0.15, 0.1, 0.05] + [0.0] * 99)[: shape.numbers]
    wait = rng.exponential(1.0, CHUNK) * np.exp(-loan)
    cause = np.zeros(CHUNK, dtype=np.int64)
    seen = exit_ > entry
    order = np.argsort(origin, kind="stable")
    for stays in np.split(order, np.flatnonzero(np.diff(origin[order])) + 1):
        running = hazard[origin[stays[0]] - FIRST_COHORT]
        last = np.searchsorted(running, running[entry[stays]] + wait[stays], side="left")
        event = seen[stays] & (last <= exit_[stays])
        cause[stays] = event
        exit_[stays] = np.where(event, last, exit_[stays])
    book = {"origin": origin, "x": x, "grade": grade, "entry": entry, "exit": exit_, "cause": cause}
    return {name: column[seen] for name, column in book.items()}
