"""The rows of one cause: all rows of the risk set but those that ended in another cause (METHOD 3).

Stays stay stays: nothing is expanded here. Rows whose macro features are not known are cut off.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, UsageError
from stresskit.core.values import Columns, FeatureTable, RiskSet, frozen, sealed
from stresskit.hazard.levels import Coded, coded
from stresskit.hazard.terms import level_codes
from stresskit.kernels.blocks import counts_along
from stresskit.kernels.counts import at_risk_and_events, ends

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
    _by_loan: tuple[Floats, Floats] = field(init=False, repr=False)
    _weights: tuple[float, float] = field(init=False, repr=False)
    _ends: tuple[int, int, int] = field(init=False, repr=False)
    _coded: dict[str, Coded] = field(init=False, repr=False, default_factory=dict)

    def __post_init__(self) -> None:
        for name in ("loan", "origin", "entry", "exit", "event", "weight", "first_row"):
            object.__setattr__(self, name, _kept(getattr(self, name)))
        static = {name: _kept(np.asarray(column)) for name, column in self.static.items()}
        object.__setattr__(self, "static", MappingProxyType(static))
        first, last, oldest, _, rows = ends(self.origin, self.entry, self.exit)
        sizes = first, last - first + 1, oldest + 1, self.n_loans
        found = at_risk_and_events(
            self.loan, self.origin, self.entry, self.exit, self.event, self.weight, sizes
        )
        object.__setattr__(self, "_ends", (first, oldest, rows))
        by_age = _without_residue(found[0], self.entry, self.exit)
        by_period = _without_residue(found[2], self.entry, self.exit, self.origin, first)
        object.__setattr__(self, "_by_age", (by_age, found[1]))
        object.__setattr__(self, "_by_period", (by_period, found[3]))
        object.__setattr__(self, "_by_loan", (sealed(found[4]), sealed(found[5])))
        of_events = self.weight[np.flatnonzero(self.event)]
        object.__setattr__(self, "_weights", (float(found[4].sum()), float(of_events.sum())))

    @property
    def n_loans(self) -> int:
        return int(self.loan_ids.shape[0])

    @property
    def n_rows(self) -> int:
        return self._ends[2]

    @property
    def total_weight(self) -> float:
        return self._weights[0]

    @property
    def event_weight(self) -> float:
        return self._weights[1]

    def by_loan(self) -> Floats:
        """(n,) weight of each loan's rows."""
        return self._by_loan[0]

    @property
    def largest_age(self) -> int:
        return self._ends[1]

    def events_by_loan(self) -> Floats:
        """(n,) weight of each loan's events."""
        return self._by_loan[1]

    def coded(self, name: str) -> Coded:
        """The static column of that name by its levels, found when first asked for."""
        if name not in self._coded:
            self._coded[name] = coded(self.static[name])
        return self._coded[name]

    def with_levels(self, names: Iterable[str]) -> dict[str, NDArray[Any] | Coded]:
        """The static columns, those in ``names`` by their levels."""
        return {**self.static, **{name: self.coded(name) for name in names if name in self.static}}

    def by_age(self) -> tuple[Floats, Floats]:
        """(at risk, events), each (largest_age + 1,), index = age."""
        return self._by_age

    @property
    def first_period(self) -> int:
        return self._ends[0]

    def by_period(self) -> tuple[Floats, Floats]:
        """(at risk, events), each (periods,), index = period - first_period."""
        return self._by_period

    def at_risk_of(self, loans: NDArray[np.bool_]) -> Floats:
        """(periods,) weight at risk of the chosen loans, exactly 0 where none of them is at risk."""
        at = np.flatnonzero(loans[self.loan])
        shift, size = self.origin[at] - self.first_period, self._by_period[0].size
        low, high = shift + self.entry[at], shift + self.exit[at]
        seen = counts_along(low, high, np.ones(at.size), size) > 0.5
        return np.where(seen, counts_along(low, high, self.weight[at], size), 0.0)

    def periods_seen(self, loans: NDArray[np.bool_] | None = None) -> NDArray[np.bool_]:
        """(periods,) whether any loan, or any of the chosen ones, is at risk."""
        return np.asarray((self._by_period[0] if loans is None else self.at_risk_of(loans)) > 0)


def _without_residue(
    at_risk: Floats, entry: Ints, exit_: Ints, origin: Ints | None = None, first: int = 0
) -> Floats:
    """Weights at risk by age, or by origin + age - ``first``, exactly 0 where there is no stay.

    Running sums of weights that are not whole leave a rounding error where they should come back to 0.
    """
    tiny = (at_risk != 0.0) & (np.abs(at_risk) < 1e-9 * at_risk.max(initial=0.0))
    if not tiny.any():
        return at_risk
    shift = 0 if origin is None else origin - first
    seen = counts_along(entry + shift, exit_ + shift, np.ones(entry.size), at_risk.size) > 0.5
    return np.where(seen, at_risk, 0.0)


def _kept(array: NDArray[Any]) -> NDArray[Any]:
    """Read-only: a risk set's own arrays as they are, others copied."""
    return array if not array.flags.writeable and array.flags.c_contiguous else frozen(array)


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
    loan, origin = _taken(risk_set.stay_loan, order), _taken(risk_set.stay_origin, order)
    entry, exit_ = _taken(risk_set.stay_entry, order), _taken(risk_set.stay_exit, order)
    kind, weight = _taken(risk_set.stay_cause, order), _taken(risk_set.weight, order)
    length = risk_set.stay_exit - risk_set.stay_entry
    first = np.cumsum(length)
    first -= length
    first = _taken(first, order)
    mine = kind == risk_set.causes.index(cause) + 1
    if len(risk_set.causes) > 1:
        exit_ = exit_ - ((kind > 0) & ~mine)
    stay, low_age, high_age = _known_stays(risk_set, loan, (origin, entry, exit_), features, needed)
    event, stay_weight = mine, weight
    all_rows = kept_rows = events_left = 0.0
    if stay is not None:
        event, stay_weight = mine[stay] & (high_age == exit_[stay]), _taken(weight, stay)
        events_left = float(weight[mine].sum() - stay_weight[event].sum())
    if low_age is not entry:
        all_rows = float((exit_ - entry) @ weight)
        kept_rows = float((high_age - low_age) @ stay_weight)
        first = _taken(first, stay) + (low_age - _taken(entry, stay))
    if low_age.size == 0:
        raise DataError(
            f"no rows at risk of {cause!r}: {all_rows:,.0f} rows in the risk set, none with all of the features "
            f"{', '.join(needed) or '(none)'}. Give the macro history an earlier start or use shorter lags."
        )
    position, at_loan = _used_loans(rank, loan, stay)
    return CauseRows(
        loan_ids=_taken(risk_set.loan_ids, at_loan),
        static={name: _taken(column, at_loan) for name, column in risk_set.static.items()},
        loan=position,
        origin=_taken(origin, stay),
        entry=low_age,
        exit=high_age,
        event=sealed(event),
        weight=stay_weight,
        moving=risk_set.moving,
        first_row=sealed(first),
        rows_without_feature=all_rows - kept_rows,
        events_without_feature=events_left,
    )


def _taken(array: NDArray[Any], at: Ints | None) -> NDArray[Any]:
    """array[at], read-only; the array itself where there is nothing to choose."""
    return array if at is None else sealed(array[at])


def _known_stays(
    risk_set: RiskSet,
    loan: Ints,
    when: tuple[Ints, Ints, Ints],
    features: FeatureTable | None,
    needed: tuple[str, ...],
) -> tuple[Ints | None, Ints, Ints]:
    """(stay, first age - 1, last age) of what is known of stays ``when`` = (origin, entry, exit) of loans (m,).

    Of a feature that goes by a loan column, the column of the loan's level counts.
    """
    columns = _needed_columns(features, needed)
    if features is None or all(len(names) == 1 for names in columns.values()):
        return _known_parts(*when, _known_runs(features, tuple(n for (n,) in columns.values())))
    code = np.zeros(risk_set.n_loans, dtype=np.int64)
    read = [{n: names[0] for n, names in columns.items()}]
    for name in needed:
        if (key := features.keyed.get(name)) is None:
            continue
        level = level_codes(name, key, risk_set.static, risk_set.loan_ids)
        combined, code = np.unique(code * len(key.levels) + level, return_inverse=True)
        read = [
            read[c // len(key.levels)] | {name: columns[name][c % len(key.levels)]} for c in combined.tolist()
        ]
    pieces = []
    for k, mine in enumerate(read):
        at = np.flatnonzero(code[loan] == k)
        origin, entry, exit_ = (x[at] for x in when)
        part, low, high = _known_parts(origin, entry, exit_, _known_runs(features, tuple(mine.values())))
        pieces.append((at if part is None else at[part], low, high))
    stay, low_age, high_age = (np.concatenate(part) for part in zip(*pieces, strict=True))
    again = np.lexsort((low_age, stay))
    return stay[again], sealed(low_age[again]), sealed(high_age[again])


def _known_parts(
    origin: Ints, entry: Ints, exit_: Ints, runs: list[tuple[int | None, int | None]]
) -> tuple[Ints | None, Ints, Ints]:
    """(stay, first age - 1, last age) of the parts of stays within the runs; stay None when no stay is lost or parted.

    The ages are the arrays that came where nothing is cut off.
    """
    pieces = []
    first, last, _, fewest, _ = ends(origin, entry, exit_)
    if len(runs) == 1 and fewest > 0:
        low, high = runs[0]
        if (low is None or first >= low) and (high is None or last <= high):
            return None, entry, exit_
    for low, high in runs:
        a = entry if low is None else np.maximum(entry, low - 1 - origin)
        b = exit_ if high is None else np.minimum(exit_, high - origin)
        inside = b > a
        if len(runs) == 1 and inside.all() and (high is None or (b == exit_).all()):
            return None, sealed(a), sealed(b)
        at = np.flatnonzero(inside)
        pieces.append((at, a[at], b[at]))
    if not pieces:
        none = np.empty(0, dtype=np.int64)
        return none, none, none
    stay, low_age, high_age = (np.concatenate(part) for part in zip(*pieces, strict=True))
    if len(pieces) > 1:
        again = np.lexsort((low_age, stay))
        stay, low_age, high_age = stay[again], low_age[again], high_age[again]
    return stay, sealed(low_age), sealed(high_age)


def _used_loans(rank: Ints | None, loan: Ints, stay: Ints | None) -> tuple[Ints, Ints | None]:
    """(place of each stay's loan among the loans with rows, those loans in the risk set); None for all as they lie.

    ``loan`` is in canonical order, so ranks ascend.
    """
    label = _taken(loan, stay)
    if rank is not None:
        label = rank[label]
    if (
        rank is None
        and label[0] == 0
        and label[-1] == loan[-1]
        and (label[1:] - label[:-1]).max(initial=0) <= 1
    ):
        return label, None
    first = np.concatenate(([True], label[1:] != label[:-1]))
    used = label[np.flatnonzero(first)]
    if rank is not None:
        used = np.argsort(rank, kind="stable")[used]
    return sealed(np.cumsum(first) - 1), used


def _rank(risk_set: RiskSet) -> Ints | None:
    """Place of every loan in the order of identifiers; None when they lie in order."""
    ids = risk_set.loan_ids
    if ids.size < 2 or bool((ids[1:] > ids[:-1]).all()):
        return None
    rank = np.empty(ids.size, dtype=np.int64)
    rank[np.argsort(ids, kind="stable")] = np.arange(ids.size)
    return rank


def _canonical(risk_set: RiskSet, rank: Ints | None) -> Ints | None:
    """Order of stays by (identifier, entry, exit): the same for any order of loans; None when they lie so."""
    loan, entry = risk_set.stay_loan, risk_set.stay_entry
    if rank is not None:
        loan = rank[loan]
    rises = loan[1:] > loan[:-1]
    if not rises.all():
        rises |= (loan[1:] == loan[:-1]) & (entry[1:] > entry[:-1])
    if rises.all():
        return None
    return np.lexsort((risk_set.weight, risk_set.stay_cause, risk_set.stay_exit, entry, loan))


def _needed_columns(features: FeatureTable | None, needed: tuple[str, ...]) -> dict[str, tuple[str, ...]]:
    """Needed feature -> its columns. UsageError for a feature that is not there."""
    have = () if features is None else features.features
    absent = [name for name in needed if name not in have]
    if features is None or absent:
        if not needed:
            return {}
        raise UsageError(
            f"no macro feature {', '.join(map(repr, absent))}; features: {', '.join(have) or 'none'}"
        )
    return {name: features.columns_of(name) for name in needed}


def _known_runs(
    features: FeatureTable | None, columns: tuple[str, ...]
) -> list[tuple[int | None, int | None]]:
    """(first, last) period of every unbroken run in which all the columns are known."""
    if features is None or not columns:
        return [(None, None)]
    known = np.isfinite(np.column_stack([features.column(name) for name in columns])).all(axis=1)
    edge = np.diff(np.concatenate(([0], known.astype(np.int8), [0])))
    starts, ends = np.flatnonzero(edge == 1), np.flatnonzero(edge == -1)
    return [(features.start + int(a), features.start + int(b) - 1) for a, b in zip(starts, ends, strict=True)]
