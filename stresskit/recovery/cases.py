"""Workouts as a value object: who owed what, when it came back, and what is still open.

Conventions: workout period u = 1, 2, .. counts model periods after the period of default; what came in the
period of default itself counts in u = 1. All amounts are discounted to the period of default (to the
entry, where a case came under observation later), so that what was owed and what was recovered are in the same money.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, year_of
from stresskit.core.values import Columns, frozen, frozen_columns

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

KINDS = ("open", "full", "write_off", "sale", "cure")
OPEN, FULL, WRITE_OFF, SALE, CURE = range(5)


@dataclass(frozen=True, slots=True)
class Workouts:
    """Cases with at least one workout period under observation.

    frequency   of the model
    until       last period (ordinal) in which cash flows were recorded
    end         U, the declared end of workout
    case_ids    (n,) object of str, unique, sorted
    default     (n,) int64, period of default
    entered     (n,) int64 >= 0, workout periods before the case came under observation (late entry); 0 from default
    amount      (n,) float64 > 0, owed at default, or after ``entered`` periods
    closed      (n,) int64, workout period of closing, 0 while open
    kind        (n,) int64, index into KINDS
    recovered   (n, U) discounted recoveries by workout period, >= 0, summing to at most ``amount``
    costs       (n, U) discounted costs
    static      case columns, each (n,)
    """

    frequency: Frequency
    until: int
    end: int
    case_ids: NDArray[Any]
    default: Ints
    entered: Ints
    amount: Floats
    closed: Ints
    kind: Ints
    recovered: Floats
    costs: Floats
    static: Columns

    def __post_init__(self) -> None:
        n = self.case_ids.shape[0]
        for name in ("case_ids", "default", "entered", "amount", "closed", "kind"):
            if getattr(self, name).shape != (n,):
                raise ValueError(f"Workouts.{name} has shape {getattr(self, name).shape}, expected ({n},)")
            object.__setattr__(self, name, frozen(getattr(self, name)))
        for name in ("recovered", "costs"):
            if getattr(self, name).shape != (n, self.end):
                raise ValueError(
                    f"Workouts.{name} has shape {getattr(self, name).shape}, expected ({n}, {self.end})"
                )
            object.__setattr__(self, name, frozen(getattr(self, name)))
        object.__setattr__(self, "static", frozen_columns(self.static))

    @property
    def n_cases(self) -> int:
        return int(self.case_ids.shape[0])

    @property
    def observed(self) -> Ints:
        """(n,) workout periods under observation, 1 .. U: the same for open and for closed cases.

        What a closed case owed is known to bring nothing more, even after ``until``; counting it at risk there
        while open cases of the same age are not would make the risk set depend on the outcome and the LGD too high.
        """
        return np.minimum(self.until - self.default, self.end)

    @property
    def at_risk_until(self) -> Ints:
        """(n,) last workout period in which the case's unrecovered amount is at risk: to its cure if it cured."""
        cured = (self.kind == CURE) & (self.closed > 0)
        return np.where(cured, np.minimum(self.closed, self.observed), self.observed)

    @property
    def default_year(self) -> Ints:
        return np.array([year_of(int(p), self.frequency) for p in self.default], dtype=np.int64)

    def unrecovered(self) -> Floats:
        """(n, U + 1) amount not recovered after 0, 1, .. U workout periods; column u - 1 is the START of u."""
        left = self.amount[:, None] - np.cumsum(self.recovered, axis=1)
        return np.concatenate([self.amount[:, None], np.maximum(left, 0.0)], axis=1)

    def present(self) -> NDArray[np.bool_]:
        """(n, U) whether the case is under observation in workout period u."""
        period = np.arange(1, self.end + 1)[None, :]
        return (period > self.entered[:, None]) & (period <= self.observed[:, None])

    def labels(self, columns: tuple[str, ...]) -> NDArray[Any]:
        """(n,) object of str: values of these case columns joined by " / "; "" for no columns."""
        return crossed_labels(self.static, columns, self.n_cases)

    def select(self, rows: NDArray[Any]) -> Workouts:
        """The cases at these positions (ascending) or where the mask holds."""
        at = np.flatnonzero(rows) if rows.dtype == np.bool_ else rows
        return replace(
            self,
            case_ids=self.case_ids[at],
            default=self.default[at],
            entered=self.entered[at],
            amount=self.amount[at],
            closed=self.closed[at],
            kind=self.kind[at],
            recovered=self.recovered[at],
            costs=self.costs[at],
            static={k: v[at] for k, v in self.static.items()},
        )

    def known_at(self, until: int) -> Workouts:
        """What was known at the end of period ``until``: later defaults, flows and closings are gone."""
        out = self.select(self.default + self.entered < until)
        seen = np.arange(1, self.end + 1)[None, :] <= (until - out.default)[:, None]
        still = out.closed > until - out.default
        return replace(
            out,
            until=until,
            recovered=np.where(seen, out.recovered, 0.0),
            costs=np.where(seen, out.costs, 0.0),
            closed=np.where(still, 0, out.closed),
            kind=np.where(still, OPEN, out.kind),
        )


def crossed_labels(static: Columns, columns: tuple[str, ...], n: int) -> NDArray[Any]:
    """(n,) object of str: values of these columns joined by " / "; "" for no columns. Cases and loans of the book alike."""
    if not columns:
        return np.full(n, "", dtype=object)
    parts = [static[c].astype(str) for c in columns]
    return np.array([" / ".join(v) for v in zip(*parts, strict=True)], dtype=object)


def grouped(labels: NDArray[Any]) -> Mapping[str, Ints]:
    """Label -> positions of its cases, labels sorted."""
    names, code = np.unique(labels.astype(str), return_inverse=True)
    return MappingProxyType({str(name): np.flatnonzero(code == k) for k, name in enumerate(names)})
