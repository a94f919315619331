"""The rows of one cause: all rows of the risk set but those that ended in another cause (METHOD 3).

Stays stay stays: nothing is expanded here. Rows whose macro features are not known are cut off.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, UsageError
from stresskit.core.values import Columns, FeatureTable, RiskSet, frozen, frozen_columns
from stresskit.kernels.blocks import counts_along, totals

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class CauseRows:
    """Stays at risk of one cause, in canonical order (loan identifier, age).

    Shapes: n loans with at least one row, m stays, ages entry + 1 .. exit at risk.

    loan_ids   (n,) identifiers, ascending
    static     loan columns, each (n,)
    loan       (m,) index into loan_ids, ascending
    origin     (m,) period ordinal; period = origin + age
    entry      (m,)
    exit       (m,)
    event      (m,) bool, the event falls in age ``exit``
    weight     (m,) > 0
    moving     columns of the whole risk set, row after row
    first_row  (m,) position in ``moving`` of the row of age entry + 1
    rows_without_feature, events_without_feature   weights left out because a macro feature is not known
    """

    loan_ids: NDArray[np.object_]
    static: Columns
    loan: Ints
    origin: Ints
    entry: Ints
    exit: Ints
    event: NDArray[np.bool_]
    weight: Floats
    moving: Columns
    first_row: Ints
    rows_without_feature: float
    events_without_feature: float
    _by_age: tuple[Floats, Floats] = field(init=False, repr=False)
    _by_period: tuple[Floats, Floats] = field(init=False, repr=False)

    def __post_init__(self) -> None:
        for name in ("loan", "origin", "entry", "exit", "event", "weight", "first_row"):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        object.__setattr__(self, "static", frozen_columns(self.static))
        none = np.zeros_like(self.origin)
        object.__setattr__(self, "_by_age", self._along(none, self.largest_age + 1))
        shift = self.origin - self.first_period
        object.__setattr__(self, "_by_period", self._along(shift, int((shift + self.exit).max()) + 1))

    def _along(self, shift: Ints, size: int) -> tuple[Floats, Floats]:
        """(at risk, events), each (size,), index = shift + age."""
        events = totals((shift + self.exit)[self.event], self.weight[self.event], size)
        return counts_along(shift + self.entry, shift + self.exit, self.weight, size), events

    @property
    def n_loans(self) -> int:
        return int(self.loan_ids.shape[0])

    @property
    def n_rows(self) -> int:
        return int((self.exit - self.entry).sum())

    @property
    def total_weight(self) -> float:
        return float(((self.exit - self.entry) * self.weight).sum())

    @property
    def event_weight(self) -> float:
        return float(self.weight[self.event].sum())

    @property
    def largest_age(self) -> int:
        return int(self.exit.max())

    def by_age(self) -> tuple[Floats, Floats]:
        """(at risk, events), each (largest_age + 1,), index = age."""
        return self._by_age

    @property
    def first_period(self) -> int:
        return int((self.origin + self.entry).min()) + 1

    def by_period(self) -> tuple[Floats, Floats]:
        """(at risk, events), each (periods,), index = period - first_period."""
        return self._by_period


def cause_rows(
    risk_set: RiskSet, cause: str, features: FeatureTable | None = None, needed: tuple[str, ...] = ()
) -> CauseRows:
    """Rows of ``cause`` for which every feature in ``needed`` is known.

    Raises UsageError for a cause or feature that is not there, DataError when no row is left.
    """
    if features is not None and features.frequency is not risk_set.frequency:
        raise UsageError(
            f"the features are on {features.frequency.value}s and the risk set on {risk_set.frequency.value}s; "
            "build the features for the model's frequency"
        )
    if cause not in risk_set.causes:
        raise UsageError(f"no cause {cause!r} in the risk set; it knows {', '.join(risk_set.causes)}")
    rank = _rank(risk_set)
    order = _canonical(risk_set, rank)
    loan, origin = risk_set.stay_loan[order], risk_set.stay_origin[order]
    entry, exit_ = risk_set.stay_entry[order], risk_set.stay_exit[order]
    kind, weight = risk_set.stay_cause[order], risk_set.weight[order]
    length = risk_set.stay_exit - risk_set.stay_entry
    first = (np.cumsum(length) - length)[order]
    mine = kind == risk_set.causes.index(cause) + 1
    exit_ = exit_ - ((kind > 0) & ~mine)

    runs = _known_runs(features, needed)
    pieces = []
    for low, high in runs:
        a = entry if low is None else np.maximum(entry, low - 1 - origin)
        b = exit_ if high is None else np.minimum(exit_, high - origin)
        at = np.flatnonzero(b > a)
        pieces.append((at, a[at], b[at]))
    stay = np.concatenate([p[0] for p in pieces]) if pieces else np.empty(0, dtype=np.int64)
    low_age = np.concatenate([p[1] for p in pieces]) if pieces else stay
    high_age = np.concatenate([p[2] for p in pieces]) if pieces else stay
    again = np.lexsort((low_age, stay))
    stay, low_age, high_age = stay[again], low_age[again], high_age[again]
    event = mine[stay] & (high_age == exit_[stay])
    all_rows = float(((exit_ - entry) * weight).sum())
    kept_rows = float(((high_age - low_age) * weight[stay]).sum())
    if stay.size == 0:
        raise DataError(
            f"no rows at risk of {cause!r}: {all_rows:,.0f} rows in the risk set, none with all of the features "
            f"{', '.join(needed) or '(none)'}. Give the macro history an earlier start or use shorter lags."
        )
    used, position = np.unique(rank[loan[stay]], return_inverse=True)
    at_loan = np.argsort(rank, kind="stable")[used]
    return CauseRows(
        loan_ids=risk_set.loan_ids[at_loan],
        static={name: column[at_loan] for name, column in risk_set.static.items()},
        loan=position.astype(np.int64),
        origin=origin[stay],
        entry=low_age,
        exit=high_age,
        event=event,
        weight=weight[stay],
        moving=risk_set.moving,
        first_row=first[stay] + (low_age - entry[stay]),
        rows_without_feature=all_rows - kept_rows,
        events_without_feature=float(weight[mine].sum() - weight[stay][event].sum()),
    )


def _rank(risk_set: RiskSet) -> Ints:
    """Place of every loan in the order of identifiers."""
    ids = risk_set.loan_ids
    if ids.size < 2 or bool((ids[1:] > ids[:-1]).all()):
        return np.arange(ids.size)
    rank = np.empty(ids.size, dtype=np.int64)
    rank[np.argsort(ids, kind="stable")] = np.arange(ids.size)
    return rank


def _canonical(risk_set: RiskSet, rank: Ints) -> Ints:
    """Order of stays by (identifier, entry, exit): the same for any order of loans."""
    loan, entry = rank[risk_set.stay_loan], risk_set.stay_entry
    rises = (loan[1:] > loan[:-1]) | ((loan[1:] == loan[:-1]) & (entry[1:] > entry[:-1]))
    if rises.all():
        return np.arange(loan.size)
    return np.lexsort((risk_set.weight, risk_set.stay_cause, risk_set.stay_exit, entry, loan))


def _known_runs(
    features: FeatureTable | None, needed: tuple[str, ...]
) -> list[tuple[int | None, int | None]]:
    """(first, last) period of every unbroken run in which all needed features are known."""
    if not needed:
        return [(None, None)]
    have = () if features is None else features.names
    absent = [name for name in needed if name not in have]
    if features is None or absent:
        raise UsageError(f"no macro feature {', '.join(map(repr, absent))}; features: {', '.join(have) or 'none'}")
    known = np.isfinite(np.column_stack([features.column(name) for name in needed])).all(axis=1)
    edge = np.diff(np.concatenate(([0], known.astype(np.int8), [0])))
    starts, ends = np.flatnonzero(edge == 1), np.flatnonzero(edge == -1)
    return [(features.start + int(a), features.start + int(b) - 1) for a, b in zip(starts, ends, strict=True)]
