"""Value objects that pass between rooms: frozen, with read-only arrays.

Conventions used by every class here:

- periods are ordinals of :mod:`stresskit.core.period`; ages count periods on book at the END of a
  period, the first period on book has age 1; ``period = origin + age``, so ``origin`` is the period
  before the first one on book and names a loan's cohort;
- amounts are in one currency unit, rates are nominal annual fractions (0.05 is 5 %);
- a stay is an unbroken run of periods in which a loan was at risk: ages ``entry + 1 .. exit``;
- loan columns are float64 (numbers) or object arrays of str (categories).
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from types import MappingProxyType
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency

Columns = Mapping[str, NDArray[Any]]
Scalar = TypeVar("Scalar", bound=np.generic)


def frozen(array: NDArray[Any]) -> NDArray[Any]:
    """The array, made read-only (copied if it is a view of writable memory someone else holds)."""
    out = np.ascontiguousarray(array)
    if out is array or out.base is not None:
        out = out.copy()
    out.setflags(write=False)
    return out


def sealed(array: NDArray[Scalar]) -> NDArray[Scalar]:
    """The array itself, made read-only: for one that nobody else holds."""
    array.setflags(write=False)
    return array


def frozen_columns(columns: Mapping[str, NDArray[Any]]) -> Columns:
    return MappingProxyType({str(k): frozen(np.asarray(v)) for k, v in columns.items()})


@dataclass(frozen=True, slots=True)
class RiskSet:
    """Who was at risk of what, and when (METHOD: risk set, cause-specific hazards).

    Shapes: ``n`` loans, ``m`` stays, ``R`` rows = sum of (exit - entry).

    frequency    length of a period
    causes       names of the exits, e.g. ("default", "payoff"); cause k of a stay is causes[k - 1]
    loan_ids     (n,) object of str, unique, sorted
    static       loan columns, each (n,)
    stay_loan    (m,) int64, index into loan_ids, ascending
    stay_origin  (m,) int64, period ordinal of the loan's origin
    stay_entry   (m,) int64, >= 0
    stay_exit    (m,) int64, > entry
    stay_cause   (m,) int64, 0 = no exit seen (censored), k >= 1 = exit of cause k in age ``exit``
    weight       (m,) float64 > 0, 1 for ordinary rows, counts for aggregated ones
    count        name of the column of counts that ``weight`` holds, "" where there is none
    moving       columns that change along a stay, each (R,), stay after stay, age ascending;
                 the value in a row is what was known at the START of its period
    """

    frequency: Frequency
    causes: tuple[str, ...]
    loan_ids: NDArray[Any]
    static: Columns
    stay_loan: NDArray[np.int64]
    stay_origin: NDArray[np.int64]
    stay_entry: NDArray[np.int64]
    stay_exit: NDArray[np.int64]
    stay_cause: NDArray[np.int64]
    weight: NDArray[np.float64]
    moving: Columns = field(default_factory=lambda: MappingProxyType({}))
    count: str = ""

    def __post_init__(self) -> None:
        m = self.stay_loan.shape[0]
        for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight"):
            if getattr(self, name).shape != (m,):
                raise ValueError(f"RiskSet.{name} has shape {getattr(self, name).shape}, expected ({m},)")
        if m and ((self.stay_exit <= self.stay_entry).any() or (self.stay_entry < 0).any()):
            raise ValueError("RiskSet: every stay needs 0 <= entry < exit")
        if m and (self.stay_cause.min() < 0 or self.stay_cause.max() > len(self.causes)):
            raise ValueError("RiskSet: stay_cause outside 0..len(causes)")
        for name in (
            "loan_ids",
            "stay_loan",
            "stay_origin",
            "stay_entry",
            "stay_exit",
            "stay_cause",
            "weight",
        ):
            object.__setattr__(self, name, frozen(getattr(self, name)))
        object.__setattr__(self, "static", frozen_columns(self.static))
        object.__setattr__(self, "moving", frozen_columns(self.moving))
        for name, column in self.static.items():
            if column.shape != self.loan_ids.shape:
                raise ValueError(
                    f"RiskSet.static[{name!r}] has shape {column.shape}, expected {self.loan_ids.shape}"
                )
        for name, column in self.moving.items():
            if column.shape != (self.n_rows,):
                raise ValueError(
                    f"RiskSet.moving[{name!r}] has shape {column.shape}, expected ({self.n_rows},)"
                )

    @property
    def n_loans(self) -> int:
        return int(self.loan_ids.shape[0])

    @property
    def n_rows(self) -> int:
        return int((self.stay_exit - self.stay_entry).sum())

    @property
    def loans_alike(self) -> float:
        """For how many loans all of them stand: the sum of the weights of their first stays."""
        first = np.flatnonzero(np.diff(self.stay_loan, prepend=-1))
        return float(self.weight[first].sum())

    def events(self, cause: str) -> int:
        return int((self.stay_cause == self.causes.index(cause) + 1).sum())

    def weight_of(self, cause: str) -> float:
        """Weight of the stays that ended in ``cause``: its events where weights are counts."""
        return float(self.weight[self.stay_cause == self.causes.index(cause) + 1].sum())


@dataclass(frozen=True, slots=True, eq=False)
class Coded:
    """A loan column as codes.

    codes   (n,) int32, place of each loan's value among ``values``
    values  (k,) the distinct values, of the column's type, in an order that means nothing
    """

    codes: NDArray[np.int32]
    values: NDArray[Any]


@dataclass(frozen=True, slots=True)
class Portfolio:
    """Loans performing at the end of ``as_of``, to be rolled forward from period ``as_of + 1``.

    loan_ids   (n,) object of str, unique, sorted
    age        (n,) int64, periods on book at the end of as_of (0 for a loan that starts next period)
    remaining  (n,) int64 >= 1, periods to contract maturity
    balance    (n,) float64 >= 0, outstanding at the end of as_of
    rate       (n,) float64, nominal annual fraction
    static     loan columns, each (n,)
    count      (n,) float64 > 0, for how many loans alike each entry stands, balance being what all of them owe; None:
               each for itself
    coded      loan columns as codes, as far as somebody asked for them: see :mod:`stresskit.core.coded`
    """

    frequency: Frequency
    as_of: int
    loan_ids: NDArray[Any]
    age: NDArray[np.int64]
    remaining: NDArray[np.int64]
    balance: NDArray[np.float64]
    rate: NDArray[np.float64]
    static: Columns
    count: NDArray[np.float64] | None = None
    coded: dict[str, Coded] = field(default_factory=dict, init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        for name in ("loan_ids", "age", "remaining", "balance", "rate"):
            value = getattr(self, name)
            if value.shape != self.loan_ids.shape:
                raise ValueError(f"Portfolio.{name} has shape {value.shape}, expected {self.loan_ids.shape}")
            object.__setattr__(self, name, frozen(value))
        object.__setattr__(self, "static", frozen_columns(self.static))
        if self.count is not None:
            if self.count.shape != self.loan_ids.shape:
                raise ValueError(
                    f"Portfolio.count has shape {self.count.shape}, expected {self.loan_ids.shape}"
                )
            object.__setattr__(self, "count", frozen(self.count))

    @property
    def n_loans(self) -> int:
        return int(self.loan_ids.shape[0])

    @property
    def counts(self) -> NDArray[np.float64]:
        """(n,) for how many loans each entry stands."""
        return np.ones(self.n_loans) if self.count is None else self.count


@dataclass(frozen=True, slots=True)
class MacroHistory:
    """Observed macro variables, one value per macro period without holes.

    frequency  of the macro calendar (may differ from the model's)
    start      ordinal of row 0
    values     variable -> (n,) float64; NaN only before a variable's first value
    units      variable -> percent | fraction | index | level
    place      variable -> linear | step: how a macro value becomes model-period values
    """

    frequency: Frequency
    start: int
    values: Columns
    units: Mapping[str, str]
    place: Mapping[str, str]

    def __post_init__(self) -> None:
        object.__setattr__(self, "values", frozen_columns(self.values))
        object.__setattr__(self, "units", MappingProxyType(dict(self.units)))
        object.__setattr__(self, "place", MappingProxyType(dict(self.place)))

    @property
    def n_periods(self) -> int:
        return 0 if not self.values else int(next(iter(self.values.values())).shape[0])

    @property
    def end(self) -> int:
        """Ordinal of the last row."""
        return self.start + self.n_periods - 1


#: How a value on a path came about.
GIVEN, FILLED, AFTERWARDS = 0, 1, 2
FLAG_NAMES = ("given", "filled", "afterwards")


@dataclass(frozen=True, slots=True)
class ScenarioPath:
    """A complete path of every macro variable from the first period after history.

    name, weight  weight is None when the scenario takes no part in probability weighting
    frequency     of the macro calendar
    start         ordinal (macro calendar) of the first path period
    values        variable -> (H,) float64, all finite
    flags         variable -> (H,) int64: GIVEN, FILLED or AFTERWARDS
    notes         free text fields of the scenario file
    stated        variable -> rows from the first on that the text says something of, by a value or by a change to
                  another path; 0 for a filled one. A change can reach further than the path it changes is given:
                  such rows are stated, and flagged AFTERWARDS. Variables not named here: as their flags say
    """

    name: str
    weight: float | None
    frequency: Frequency
    start: int
    values: Columns
    flags: Columns
    notes: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    stated: Mapping[str, int] = field(default_factory=lambda: MappingProxyType({}))

    def __post_init__(self) -> None:
        object.__setattr__(self, "stated", MappingProxyType(dict(self.stated)))
        object.__setattr__(self, "values", frozen_columns(self.values))
        object.__setattr__(self, "flags", frozen_columns(self.flags))
        object.__setattr__(self, "notes", MappingProxyType(dict(self.notes)))

    @property
    def horizon(self) -> int:
        return 0 if not self.values else int(next(iter(self.values.values())).shape[0])


@dataclass(frozen=True, slots=True)
class FeatureDefinition:
    """What makes a macro feature the number it is, apart from the data.

    of, transform, over, lag   as under macro.features of a study; over and lag in macro periods
    unit              of the variable's values
    place             linear or step; step where the two calendars are the same
    macro_frequency   of the macro calendar
    """

    of: str
    transform: str
    over: int
    lag: int
    unit: str
    place: str
    macro_frequency: str

    def differences(self, other: FeatureDefinition) -> tuple[str, ...]:
        """Names of the fields in which two definitions differ."""
        return tuple(f.name for f in fields(self) if getattr(self, f.name) != getattr(other, f.name))


@dataclass(frozen=True, slots=True)
class KeyedFeature:
    """A macro feature that reads another variable for each level of a loan column.

    by      the loan column
    levels  the levels that have a variable, sorted
    """

    by: str
    levels: tuple[str, ...]

    def columns(self, name: str) -> tuple[str, ...]:
        """Columns of a FeatureTable that hold the feature called ``name``, a level each."""
        return tuple(level_column(name, level) for level in self.levels)


def level_column(name: str, level: str) -> str:
    """``house_price_growth[north]``: the column of a keyed feature's level."""
    return f"{name}[{level}]"


@dataclass(frozen=True, slots=True)
class FeatureTable:
    """Macro features on MODEL periods: what a hazard reads.

    frequency  of the model
    start      ordinal (model calendar) of row 0
    names      names of the columns, k of them: a feature's, or for a keyed feature one for each level
    values     (P, k) float64, NaN where the feature cannot be computed
    flags      (P, k) int64, worst flag among the path values that a feature value used (0 on history)
    definitions  name -> how the column was made, of all columns or, in a table made by hand, of none
    keyed      feature -> the loan column and levels it goes by; features that are the same for all loans are not here
    """

    frequency: Frequency
    start: int
    names: tuple[str, ...]
    values: NDArray[np.float64]
    flags: NDArray[np.int64]
    definitions: Mapping[str, FeatureDefinition] = field(default_factory=lambda: MappingProxyType({}))
    keyed: Mapping[str, KeyedFeature] = field(default_factory=lambda: MappingProxyType({}))

    def __post_init__(self) -> None:
        if (
            self.values.ndim != 2
            or self.values.shape[1] != len(self.names)
            or self.flags.shape != self.values.shape
        ):
            raise ValueError("FeatureTable: values and flags must both be (periods, features)")
        if self.definitions and set(self.definitions) != set(self.names):
            raise ValueError("FeatureTable: definitions must be of all features or of none")
        absent = [c for n, k in self.keyed.items() for c in k.columns(n) if c not in self.names]
        if absent:
            raise ValueError(f"FeatureTable: no column {absent[0]!r} of a keyed feature")
        object.__setattr__(self, "values", frozen(self.values))
        object.__setattr__(self, "flags", frozen(self.flags))
        object.__setattr__(self, "definitions", MappingProxyType(dict(self.definitions)))
        object.__setattr__(self, "keyed", MappingProxyType(dict(self.keyed)))

    @property
    def n_periods(self) -> int:
        return int(self.values.shape[0])

    @property
    def features(self) -> tuple[str, ...]:
        """Names of the features, each once, as a hazard calls them."""
        owner = {c: n for n, k in self.keyed.items() for c in k.columns(n)}
        return tuple(dict.fromkeys(owner.get(name, name) for name in self.names))

    def columns_of(self, feature: str) -> tuple[str, ...]:
        """Columns that hold a feature: its own, or one for each level. Raises KeyError for one that is not there."""
        if feature in self.keyed:
            return self.keyed[feature].columns(feature)
        if feature not in self.names:
            raise KeyError(feature)
        return (feature,)

    def column(self, name: str) -> NDArray[np.float64]:
        column: NDArray[np.float64] = self.values[:, self.names.index(name)]
        return column


def no_features(frequency: Frequency, start: int, n_periods: int) -> FeatureTable:
    """The feature table of a study without macro variables."""
    empty = np.empty((n_periods, 0))
    return FeatureTable(frequency, start, (), empty, empty.astype(np.int64))
