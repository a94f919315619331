"""Workouts drawn from a known truth, and workouts made by hand."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.recovery.cases import CURE, FULL, OPEN, SALE, WRITE_OFF, Workouts

UNTIL = 2025 * 12 + 11
KIND = {"open": OPEN, "full": FULL, "write_off": WRITE_OFF, "sale": SALE, "cure": CURE}


def workouts(rows: list[dict], end: int, *, frequency: Frequency = Frequency.MONTH) -> Workouts:
    """Cases by hand: observed (periods), amount, flows {u: recovered}, kind, closed, costs, entered, columns."""
    n = len(rows)
    recovered, costs = np.zeros((n, end)), np.zeros((n, end))
    for i, row in enumerate(rows):
        for u, value in row.get("flows", {}).items():
            recovered[i, u - 1] = value
        for u, value in row.get("costs", {}).items():
            costs[i, u - 1] = value
    names = sorted({k for row in rows for k in row.get("static", {})})
    return Workouts(
        frequency=frequency,
        until=UNTIL,
        end=end,
        case_ids=np.array([f"c{i:05d}" for i in range(n)], dtype=object),
        default=np.array([UNTIL - row["observed"] for row in rows], dtype=np.int64),
        entered=np.array([row.get("entered", 0) for row in rows], dtype=np.int64),
        amount=np.array([row["amount"] for row in rows], dtype=np.float64),
        closed=np.array([row.get("closed", 0) for row in rows], dtype=np.int64),
        kind=np.array([KIND[row.get("kind", "open")] for row in rows], dtype=np.int64),
        recovered=recovered,
        costs=costs,
        static={name: np.array([row["static"][name] for row in rows], dtype=object) for name in names},
    )


@dataclass(frozen=True)
class Drawn:
    """Workouts as known at UNTIL, and the loss rate that a long wait would show."""

    known: Workouts
    truth: float


def draw(
    rng: np.random.Generator,
    n: int,
    *,
    end: int = 36,
    window: int = 40,
    hazard: NDArray[np.float64] | None = None,
    dead: float = 0.3,
) -> Drawn:
    """Cases of ``window`` default months. A ``dead`` share stops recovering at a random month, when it is written off; of the
    others a payment comes with probability 0.2 of a uniform share. hazard (window + end,) by calendar month scales the chance.
    """
    default = UNTIL - rng.integers(1, window + 1, n)
    amount = rng.lognormal(8.0, 1.0, n)
    stops = np.where(rng.random(n) < dead, rng.integers(2, end, n), end + 1)
    scale = np.ones(window + end + 1) if hazard is None else hazard
    recovered, left = np.zeros((n, end)), amount.copy()
    for u in range(1, end + 1):
        at = default + u - (UNTIL - window)
        pays = (rng.random(n) < 0.2 * scale[at]) & (u <= stops)
        paid = np.where(pays, left * rng.random(n), 0.0)
        recovered[:, u - 1], left = paid, left - paid
    observed = np.minimum(UNTIL - default, end)
    seen = np.arange(1, end + 1)[None, :] <= observed[:, None]
    shut = stops <= observed
    known = Workouts(
        frequency=Frequency.MONTH, until=UNTIL, end=end,
        case_ids=np.array([f"c{i:06d}" for i in range(n)], dtype=object), default=default,
        entered=np.zeros(n, dtype=np.int64), amount=amount, closed=np.where(shut, stops, 0),
        kind=np.where(shut, WRITE_OFF, OPEN), recovered=np.where(seen, recovered, 0.0), costs=np.zeros((n, end)), static={},
    )  # fmt: skip
    return Drawn(known, float(left.sum() / amount.sum()))
