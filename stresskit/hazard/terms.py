"""Learned terms: what a term of the spec became on the data it was fitted on, replayable on new data.

Conventions: a term turns its source (age on book, a loan column, a macro feature) into *atoms*, the
(n, k) float64 matrix of ``values``. ``main`` says which atoms are columns of the term itself, ``crossed``
which ones enter interactions. Terms whose atoms sum to 1 (steps, categories, splines by their values at
the knots) leave the atom ``reference`` out, unless ``full``: then the term stands in for the intercept.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar, Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import Coder
from stresskit.core.errors import DataError
from stresskit.core.values import KeyedFeature
from stresskit.hazard.levels import Coded, Codes, as_text, places, places_of, texts_of
from stresskit.kernels.splines import natural_basis

Floats = NDArray[np.float64]
Side = Literal["loan", "age", "feature", "moving"]
SIDES: tuple[Side, ...] = ("loan", "age", "feature", "moving")


class LearnedTerm(Protocol):
    """What the design needs from a term; see the module's conventions."""

    @property
    def name(self) -> str: ...
    @property
    def side(self) -> Side: ...
    @property
    def source(self) -> str: ...
    @property
    def labels(self) -> tuple[str, ...]: ...
    @property
    def main(self) -> tuple[int, ...]: ...
    @property
    def crossed(self) -> tuple[int, ...]: ...
    @property
    def levels_only(self) -> bool:
        """Atoms are 0/1 indicators of levels."""

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        """(n, atoms) of the source values x (n,); ids name cases in messages."""


class _Levels:
    """Main and crossed atoms of a term whose atoms sum to 1."""

    __slots__ = ()
    reference: int
    full: bool
    labels: tuple[str, ...]

    @property
    def main(self) -> tuple[int, ...]:
        return tuple(range(len(self.labels))) if self.full else self.crossed

    @property
    def crossed(self) -> tuple[int, ...]:
        return tuple(j for j in range(len(self.labels)) if j != self.reference)


class _Plain:
    """Main and crossed atoms of a term without a reference."""

    __slots__ = ()
    labels: tuple[str, ...]

    @property
    def main(self) -> tuple[int, ...]:
        return tuple(range(len(self.labels)))

    @property
    def crossed(self) -> tuple[int, ...]:
        return self.main


class _OfAge:
    """A term of age on book."""

    __slots__ = ()
    name: ClassVar[str] = "age"
    source: ClassVar[str] = "age"
    side: ClassVar[Side] = "age"


class _OfLoan:
    """A term that is called by its loan column."""

    __slots__ = ()
    source: str
    moving: bool

    @property
    def name(self) -> str:
        return self.source

    @property
    def side(self) -> Side:
        return "moving" if self.moving else "loan"


class _OfMacro(_Plain):
    """A term of one macro feature, by whose name it and its column are called: (x - centre) / scale.

    NaN stays NaN: the caller decides what a hole means.
    """

    __slots__ = ()
    source: str
    centre: float
    scale: float

    side: ClassVar[Side] = "feature"
    levels_only: ClassVar[bool] = False

    @property
    def name(self) -> str:
        return self.source

    @property
    def labels(self) -> tuple[str, ...]:  # type: ignore[override]
        return (self.source,)

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        return _scaled(np.asarray(x, dtype=np.float64), self.centre, self.scale)


@dataclass(frozen=True, slots=True)
class AgeSpline(_OfAge, _Levels):
    """Natural cubic spline of age; coefficients are heights at the knots against the reference knot.

    knots      (K,) rising; the first is the smallest age at risk, the last where data thin out (learn._last_knot)
    reference  knot left out
    Ages outside the boundary knots take the value at the nearer one, in the fit as in predictions.
    """

    kind: ClassVar[str] = "spline"
    knots: tuple[float, ...]
    reference: int
    full: bool

    levels_only: ClassVar[bool] = False

    @property
    def labels(self) -> tuple[str, ...]:  # type: ignore[override]
        return tuple(f"age[{k:g}]" for k in self.knots)

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        knots = np.array(self.knots)
        return natural_basis(knots, np.clip(np.asarray(x, dtype=np.float64), knots[0], knots[-1]))


@dataclass(frozen=True, slots=True)
class AgeSteps(_OfAge, _Levels):
    """One level per band of ages.

    last       last age of each band; the last band's is the largest observed age and it holds beyond
    lowest     smallest observed age; younger ages take the first band
    labels     of the bands
    reference  band left out
    """

    kind: ClassVar[str] = "steps"
    last: tuple[int, ...]
    lowest: int
    labels: tuple[str, ...]
    reference: int
    full: bool

    levels_only: ClassVar[bool] = True

    def level(self, x: NDArray[Any]) -> NDArray[np.intp]:
        edges = np.array(self.last)
        return np.asarray(np.searchsorted(edges, np.clip(x, self.lowest, self.last[-1]), side="left"))

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        return _indicators(self.level(np.asarray(x)), len(self.last))


@dataclass(frozen=True, slots=True)
class AgeFunction(_OfAge, _Plain):
    """linear: age; log: ln(age); quadratic: age and its square. Held outside [lowest, largest]."""

    kind: ClassVar[str] = "function"
    function: str
    lowest: int
    largest: int

    levels_only: ClassVar[bool] = False

    @property
    def labels(self) -> tuple[str, ...]:  # type: ignore[override]
        return {
            "linear": ("age[linear]",),
            "log": ("age[log]",),
            "quadratic": ("age[linear]", "age[square]"),
        }[self.function]

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        age = np.clip(np.asarray(x, dtype=np.float64), self.lowest, self.largest)
        if self.function == "quadratic":
            return np.column_stack([age, age * age])
        return (np.log(age) if self.function == "log" else age)[:, None]


@dataclass(frozen=True, slots=True)
class LoanNumber(_OfLoan, _Plain):
    """A numeric loan column, (x - centre) / scale, with x logged first where ``log``."""

    kind: ClassVar[str] = "number"
    source: str
    log: bool
    centre: float
    scale: float
    moving: bool

    levels_only: ClassVar[bool] = False

    @property
    def labels(self) -> tuple[str, ...]:  # type: ignore[override]
        return (self.source,)

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        number = numbers(self.source, x, ids)
        if self.log:
            positive(self.source, number, ids)
            number = np.log(number)
        return _scaled(number, self.centre, self.scale)


@dataclass(frozen=True, slots=True)
class LoanCategory(_OfLoan, _Levels):
    """A loan column of known levels; a level that was not there at estimation is an error.

    pooled  further known levels, which count as the reference (hazard.pooling)
    """

    kind: ClassVar[str] = "category"
    source: str
    levels: tuple[str, ...]
    reference: int
    full: bool
    moving: bool
    pooled: tuple[str, ...] = ()

    levels_only: ClassVar[bool] = True

    @property
    def labels(self) -> tuple[str, ...]:  # type: ignore[override]
        return tuple(f"{self.source}[{level}]" for level in self.levels)

    def level(self, x: NDArray[Any] | Coded, ids: NDArray[Any] | None = None) -> Codes:
        """(n,) position of each case's level; DataError for levels not seen at estimation."""
        known = self.levels + self.pooled
        # of every case, or of every level of a coded column
        place = places(known, x.text if isinstance(x, Coded) else as_text(np.asarray(x))).astype(np.int32)
        if place.size and int(place.min()) < 0:
            self._refuse(places_of(known, x) < 0, x, ids)
        if self.pooled:
            place[place >= len(self.levels)] = self.reference
        return place.take(x.code) if isinstance(x, Coded) else place

    def _refuse(self, unknown: NDArray[np.bool_], x: NDArray[Any] | Coded, ids: NDArray[Any] | None) -> None:
        """DataError for cases of unknown level, if any: nobody may have a level of a coded column."""
        if unknown.any():
            found = sorted(set(texts_of(x, unknown)))
            raise DataError(
                f"category {self.source!r}: {int(unknown.sum()):,} cases have levels not seen at estimation: "
                f"{', '.join(map(repr, found[:5]))}{_cases(unknown, ids)}. Known levels: "
                f"{', '.join(map(repr, self.levels + self.pooled))}. Map them to a known level or fit again."
            )

    def values(self, x: NDArray[Any], ids: NDArray[Any] | None = None) -> Floats:
        return _indicators(self.level(x, ids), len(self.levels))


@dataclass(frozen=True, slots=True)
class MacroNumber(_OfMacro):
    """A macro feature that is the same for all loans."""

    kind: ClassVar[str] = "macro"
    source: str
    centre: float
    scale: float


@dataclass(frozen=True, slots=True)
class KeyedMacro(_OfMacro):
    """A macro feature that reads another variable for each level of a loan column; one coefficient for all of them.

    by      the loan column
    levels  the levels that have a variable, sorted
    """

    kind: ClassVar[str] = "keyed"
    source: str
    by: str
    levels: tuple[str, ...]
    centre: float
    scale: float

    @property
    def key(self) -> KeyedFeature:
        return KeyedFeature(self.by, self.levels)

    @property
    def columns(self) -> tuple[str, ...]:
        """Columns of a feature table that it reads, in the order of the levels."""
        return self.key.columns(self.source)


@dataclass(frozen=True, slots=True)
class Crossing:
    """Products of the crossed atoms of two terms that stand in the design by themselves."""

    kind: ClassVar[str] = "crossing"
    left: str
    right: str

    @property
    def name(self) -> str:
        return f"{self.left}:{self.right}"


@dataclass(frozen=True, slots=True)
class Offset:
    """A loan column added to the linear predictor with coefficient 1."""

    kind: ClassVar[str] = "offset"
    source: str
    moving: bool

    @property
    def name(self) -> str:
        return f"offset({self.source})"


def _scaled(number: Floats, centre: float, scale: float) -> Floats:
    """(n, 1) of (x - centre) / scale; x itself where that would change nothing."""
    return (number if (centre, scale) == (0.0, 1.0) else (number - centre) / scale)[:, None]


def _indicators(code: NDArray[np.integer[Any]], levels: int) -> Floats:
    out = np.zeros((code.size, levels))
    out[np.arange(code.size), code] = 1.0
    return out


def level_codes(
    feature: str,
    key: KeyedFeature,
    columns: Mapping[str, NDArray[Any] | Coded],
    ids: NDArray[Any] | None,
    coder: Coder | None = None,
) -> NDArray[np.intp]:
    """(n,) position among ``key.levels`` of the level of each loan. DataError for a level without a variable."""
    if key.by not in columns:
        raise DataError(
            f"macro feature {feature!r} goes by the loan column {key.by!r}, which is not among the columns that stay the same "
            f"over a loan's life: {', '.join(map(str, columns)) or 'none'}"
        )
    if coder is not None:
        found = coder(key.by)
        table = places(key.levels, as_text(found.values))
        if (table >= 0).all():
            return np.asarray(table[found.codes])
    code = places_of(key.levels, columns[key.by])
    lost = code < 0
    if lost.any():
        levels, counts = np.unique(texts_of(columns[key.by], lost).astype(str), return_counts=True)
        told = ", ".join(f"{str(v)!r} ({n:,})" for v, n in zip(levels[:5], counts[:5], strict=True))
        more = f" and {levels.size - 5} more levels" if levels.size > 5 else ""
        raise DataError(
            f"macro feature {feature!r} goes by {key.by!r} and has no variable for {int(lost.sum()):,} loans of level "
            f"{told}{more}{_cases(lost, ids)}. Levels with a variable: {', '.join(map(repr, key.levels))}. Name a variable for "
            f"each level under macro.features.{feature}.of, or leave these loans out."
        )
    return code


def _cases(bad: NDArray[np.bool_], ids: NDArray[Any] | None) -> str:
    if ids is None:
        return ""
    return f" (first: {', '.join(str(v) for v in ids[bad][:5])})"


def numbers(source: str, x: NDArray[Any], ids: NDArray[Any] | None, *, what: str = "loan column") -> Floats:
    """x as finite float64; DataError otherwise. ``what`` the column is, in messages."""
    of_loans = what == "loan column"
    if x.dtype == object or x.dtype.kind in "US":
        raise DataError(
            f"{what} {source!r} holds text, expected numbers.{' Write `as: category` for levels.' if of_loans else ''}"
        )
    number = np.asarray(x, dtype=np.float64)
    finite = np.isfinite(number)
    if not finite.all():
        bad = ~finite
        remedy = (
            "Fill them or leave the loans out under loans.rules." if of_loans else "Leave these cases out."
        )
        raise DataError(
            f"{what} {source!r} has {int(bad.sum()):,} values that are not finite numbers{_cases(bad, ids)}. {remedy}"
        )
    return number


def whole_ages(x: NDArray[Any], ids: NDArray[Any] | None) -> NDArray[np.int64]:
    """Ages as int64; DataError for what is no number of periods on book: a loan's first period has age 1."""
    age = numbers("age", x, ids, what="column")
    bad = (age < 1.0) | (age != np.floor(age))
    if bad.any():
        raise DataError(
            f"column 'age' has {int(bad.sum()):,} values that are not whole numbers from 1 on{_cases(bad, ids)}: ages count "
            "periods on book at the end of a period, and the first one is 1."
        )
    return np.minimum(age, 2.0**53).astype(np.int64)


def positive(source: str, number: Floats, ids: NDArray[Any] | None) -> None:
    """DataError unless all numbers are above 0."""
    bad = number <= 0.0
    if bad.any():
        raise DataError(
            f"loan column {source!r} has {int(bad.sum()):,} values <= 0, which have no logarithm{_cases(bad, ids)}. "
            "Use transform: none or standardise, or leave the loans out."
        )
