"""Who is at risk at each age with exits: the counts under every observed curve.

A case is at risk in ages (entry, exit]: an exit at the age of another case's entry does not count it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from stresskit.core.errors import DataError, NumericError, Problem, UsageError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Cases:
    """Checked cases at risk after ``start``; cause (n,) in 0..n_causes."""

    entry: Floats
    exit: Floats
    cause: Ints
    weight: Floats
    n_causes: int
    start: float


@dataclass(frozen=True, slots=True)
class Counts:
    """age (T,), at_risk (T,), events (T, n_causes); the rest as in a curve table."""

    age: Floats
    at_risk: Floats
    events: Floats
    last_age: float
    emptied_at: float | None
    stopped_at: float | None


def checked_cases(
    entry: ArrayLike, exit: ArrayLike, cause: ArrayLike, n_causes: int,
    condition_on: float | None, weight: ArrayLike | None,
) -> Cases:  # fmt: skip
    left, right, kind = (np.asarray(a, dtype=np.float64) for a in (entry, exit, cause))
    w = np.ones(right.shape) if weight is None else np.asarray(weight, dtype=np.float64)
    shapes = {"entry": left.shape, "exit": right.shape, "event": kind.shape, "weight": w.shape}
    if right.ndim != 1 or len(set(shapes.values())) != 1:
        raise UsageError(f"entry, exit, event and weight must be (n,) with the same n, got {shapes}")
    checks = (
        ("age_not_finite", "entry or exit is not a number", ~np.isfinite(left) | ~np.isfinite(right)),
        ("exit_not_after_entry", "exit is not after entry: intervals are (entry, exit]", right <= left),
        ("unknown_event", f"event is not one of 0..{n_causes}", ~np.isin(kind, np.arange(n_causes + 1))),
        ("weight_not_positive", "weight is not a positive number", ~(np.isfinite(w) & (w > 0))),
    )
    problems = [
        Problem(code, message, int(bad.sum()), tuple(f"case {i}" for i in np.flatnonzero(bad)[:5]))
        for code, message, bad in checks
        if bad.any()
    ]
    if problems:
        raise DataError("these cases cannot be put on a curve", problems)
    start = -np.inf if condition_on is None else float(condition_on)
    keep = right > start
    if not keep.any():
        largest = right.max(initial=-np.inf)
        raise NumericError(f"no one is at risk after age {start:g}; the largest exit age is {largest:g}")
    left = np.maximum(left, start)
    return Cases(left[keep], right[keep], kind[keep].astype(np.int64), w[keep], n_causes, start)


def presence(cases: Cases) -> tuple[Floats, Floats]:
    """Ages (K,) at which the risk set changes, and (K,) weighted number at risk right after each of them."""
    knots = np.unique(np.concatenate([cases.entry, cases.exit]))
    by_entry, by_exit = np.argsort(cases.entry, kind="stable"), np.argsort(cases.exit, kind="stable")
    come = np.searchsorted(cases.entry[by_entry], knots, "right")
    gone = np.searchsorted(cases.exit[by_exit], knots, "right")
    came = np.concatenate([[0.0], np.cumsum(cases.weight[by_entry])])[come]
    left = np.concatenate([[0.0], np.cumsum(cases.weight[by_exit])])[gone]
    # No rounding of fractional weights decides whether anyone is there.
    return knots, np.where(come == gone, 0.0, came - left)


def supported_from(knots: Floats, y: Floats, minimum: float) -> float:
    """Smallest knot from which on at least ``minimum`` are at risk up to the peak of the risk set."""
    if y.max() < minimum:
        raise NumericError(f"at most {y.max():g} are at risk at any age, fewer than {minimum:g}")
    thin = np.flatnonzero(y[: int(np.argmax(y))] < minimum)
    return float(knots[thin[-1] + 1]) if thin.size else float(knots[0])


def count_exits(cases: Cases, minimum: float) -> Counts:
    """Exits and cases at risk per age with exits, as far as ``minimum`` are at risk."""
    knots, around = presence(cases)
    last_age = float(knots[-1])
    empty = np.flatnonzero(around[:-1] == 0.0)
    emptied_at = float(knots[empty[0]]) if empty.size else None
    if np.isfinite(cases.start) and knots[0] > cases.start:
        emptied_at = cases.start
    stopped_at = _stop(knots, around, minimum)
    exits = cases.cause > 0
    if stopped_at is not None:
        exits &= cases.exit <= stopped_at
        emptied_at = None if emptied_at is None or emptied_at >= stopped_at else emptied_at
    ages, code = np.unique(cases.exit[exits], return_inverse=True)
    events = np.zeros((ages.size, cases.n_causes))
    np.add.at(events, (code, cases.cause[exits] - 1), cases.weight[exits])
    return Counts(ages, _at_risk(cases, ages, events.sum(axis=1)), events, last_age, emptied_at, stopped_at)


def _at_risk(cases: Cases, ages: Floats, events: Floats) -> Floats:
    """(T,) weighted number with entry < age <= exit: those who leave at the age and those who stay."""
    censored = np.zeros(ages.size)
    tied = (cases.cause == 0) & np.isin(cases.exit, ages)
    np.add.at(censored, np.searchsorted(ages, cases.exit[tied]), cases.weight[tied])
    by_entry, by_exit = np.argsort(cases.entry, kind="stable"), np.argsort(cases.exit, kind="stable")
    come = np.searchsorted(cases.entry[by_entry], ages, "left")
    gone = np.searchsorted(cases.exit[by_exit], ages, "right")
    came = np.concatenate([[0.0], np.cumsum(cases.weight[by_entry])])[come]
    left = np.concatenate([[0.0], np.cumsum(cases.weight[by_exit])])[gone]
    return np.where(come == gone, 0.0, came - left) + events + censored


def _stop(knots: Floats, y: Floats, minimum: float) -> float | None:
    """Age after which fewer than the minimum are at risk; a thin start is refused, with the age to condition on."""
    if minimum <= 0:
        return None
    start = supported_from(knots, y, minimum)
    if start > knots[0]:
        first = int(np.flatnonzero(y < minimum)[0])
        raise NumericError(
            f"only {y[first]:g} are at risk after age {knots[first]:g}, fewer than {minimum:g}, but later up to "
            f"{y.max():g} (late entry). Condition on age {start:g} or later."
        )
    thin = np.flatnonzero(y[:-1] < minimum)
    return float(knots[thin[0]]) if thin.size else None
