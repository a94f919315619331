"""The design: every column is a product u(loan) * a(age) * f(feature) [* m(moving row)], any of them 1.

A feature that goes by a loan column has one f for each level: f(feature, key), see :mod:`stresskit.hazard.keys`.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import reduce
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, UsageError
from stresskit.core.values import Columns
from stresskit.hazard.keys import Keys
from stresskit.hazard.levels import Coded, Codes
from stresskit.hazard.terms import (
    SIDES,
    Crossing,
    KeyedMacro,
    LearnedTerm,
    LoanCategory,
    Offset,
    Side,
    numbers,
)

Floats = NDArray[np.float64]
Atom = tuple[int, int]
Product = tuple[Atom, ...]

INTERCEPT = "intercept"


@dataclass(frozen=True, slots=True)
class Design:
    """A frozen spec with what it learned: terms in the order of the spec.

    labels    (k,) coefficient names
    owner     (k,) name of the term each column belongs to
    products  side -> the distinct products of atoms that occur on it
    index     side -> (k,) int64, which product a column uses; -1 for none (factor 1)

    Column j of a row is the product over sides of ``side matrix[:, index[side][j]]``.
    """

    intercept: bool
    terms: tuple[LearnedTerm | Crossing | Offset, ...]
    labels: tuple[str, ...] = field(init=False, repr=False, compare=False)
    owner: tuple[str, ...] = field(init=False, repr=False, compare=False)
    products: Mapping[Side, tuple[Product, ...]] = field(init=False, repr=False, compare=False)
    index: Mapping[Side, NDArray[np.int64]] = field(init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        labels: list[str] = [INTERCEPT] if self.intercept else []
        owner: list[str] = [INTERCEPT] if self.intercept else []
        atoms: list[tuple[Atom, ...]] = [()] if self.intercept else []
        for term in self.terms:
            if isinstance(term, Offset):
                continue
            for label, product in self._columns(term.name, crossed=False):
                labels.append(label)
                owner.append(term.name)
                atoms.append(product)
        products: dict[Side, tuple[Product, ...]] = {}
        index: dict[Side, NDArray[np.int64]] = {}
        for side in SIDES:
            parts = [tuple(sorted(a for a in product if self._term(a[0]).side == side)) for product in atoms]
            distinct = tuple(dict.fromkeys(p for p in parts if p))
            products[side] = distinct
            index[side] = np.array([distinct.index(p) if p else -1 for p in parts], dtype=np.int64)
            index[side].setflags(write=False)
        object.__setattr__(self, "labels", tuple(labels))
        object.__setattr__(self, "owner", tuple(owner))
        object.__setattr__(self, "products", MappingProxyType(products))
        object.__setattr__(self, "index", MappingProxyType(index))

    def _term(self, position: int) -> LearnedTerm:
        term = self.terms[position]
        if isinstance(term, Crossing | Offset):
            raise UsageError(f"{term.name} has no values of its own")
        return term

    def _columns(self, name: str, *, crossed: bool) -> list[tuple[str, tuple[Atom, ...]]]:
        """(label, atoms) of the columns of the term called ``name``."""
        names = [t.name for t in self.terms]
        position = names.index(name)
        term = self.terms[position]
        if isinstance(term, Offset):
            raise UsageError(f"an interaction with {term.name} is not possible: an offset has no coefficient")
        if isinstance(term, Crossing):
            return [
                (f"{left}:{right}", a + b)
                for left, a in self._columns(term.left, crossed=True)
                for right, b in self._columns(term.right, crossed=True)
            ]
        chosen = term.crossed if crossed else term.main
        return [(term.labels[j], ((position, j),)) for j in chosen]

    @property
    def k(self) -> int:
        return len(self.labels)

    @property
    def keys(self) -> Keys:
        return Keys(tuple(t for t in self.terms if isinstance(t, KeyedMacro)))

    def keyed_columns(self) -> NDArray[np.bool_]:
        """(k,) columns with a feature that goes by a loan column."""
        found = np.zeros(self.k, dtype=bool)
        for j, p in enumerate(self.index["feature"]):
            atoms = self.products["feature"][p] if p >= 0 else ()
            found[j] = any(isinstance(self.terms[t], KeyedMacro) for t, _ in atoms)
        return found

    @property
    def features(self) -> tuple[str, ...]:
        """Macro features by the names that the hazard calls them."""
        return tuple(
            t.source for t in self.terms if not isinstance(t, Crossing | Offset) and t.side == "feature"
        )

    def sources(self, side: Side) -> tuple[str, ...]:
        """Names of the columns read on a side, offsets included, in order of first use.

        Of a feature that goes by a loan column: its columns on the feature side, the loan column on the loan side.
        """
        found: list[str] = []
        for term in self.terms:
            if isinstance(term, Offset):
                if side == ("moving" if term.moving else "loan"):
                    found.append(term.source)
            elif isinstance(term, KeyedMacro):
                found += {"feature": term.columns, "loan": (term.by,)}.get(side, ())
            elif not isinstance(term, Crossing) and term.side == side:
                found.append(term.source)
        return tuple(dict.fromkeys(found))

    def constant(self) -> Floats | None:
        """Coefficients for which the linear predictor is 1 in every row; None when there are none."""
        out = np.zeros(self.k)
        if self.intercept:
            out[0] = 1.0
            return out
        for term in self.terms:
            if not isinstance(term, Crossing | Offset) and getattr(term, "full", False):
                out[[i for i, name in enumerate(self.owner) if name == term.name]] = 1.0
                return out
        return None

    def indicators(self) -> NDArray[np.bool_]:
        """(k,) columns that are 0/1 in every row: products of levels only."""
        found = []
        for j in range(self.k):
            atoms = [
                a
                for side in SIDES
                if self.index[side][j] >= 0
                for a in self.products[side][self.index[side][j]]
            ]
            found.append(bool(atoms) and all(self._term(t).levels_only for t, _ in atoms))
        return np.array(found, dtype=bool)

    def matrix(
        self,
        side: Side,
        columns: Mapping[str, NDArray[Any] | Coded],
        n: int,
        ids: NDArray[Any] | None = None,
    ) -> Floats:
        """(n, products of the side) values of the distinct products on ``columns`` (each (n,))."""
        return self.side_columns(side, columns, n, ids).matrix()

    def side_columns(
        self,
        side: Side,
        columns: Mapping[str, NDArray[Any] | Coded],
        n: int,
        ids: NDArray[Any] | None = None,
    ) -> SideColumns:
        """The same, one product at a time; what can be wrong with ``columns`` is told here."""
        needed = sorted({t for product in self.products[side] for t, _ in product})
        values, levels = dict[int, Floats](), dict[int, Codes]()
        for t in needed:
            term = self._term(t)
            if isinstance(term, LoanCategory):
                levels[t] = term.level(_column(columns, term.source, side), ids)
            else:
                values[t] = term.values(column_of(columns, term.source, side), ids)
        return SideColumns(n, self.products[side], values, levels)

    def age_matrix(self, ages: NDArray[np.int64]) -> Floats:
        return self.matrix("age", {"age": ages}, ages.size)

    def feature_matrix(self, values: Floats, names: tuple[str, ...], key: int = 0) -> Floats:
        """values (m, f) with one column per name, as loans of a key read them."""
        columns = {name: values[:, j] for j, name in enumerate(names)}
        for feature, name in self.keys.reads(key).items():
            columns[feature] = column_of(columns, name, "feature")
        return self.matrix("feature", columns, values.shape[0])

    def offset(
        self,
        side: Side,
        columns: Mapping[str, NDArray[Any] | Coded],
        n: int,
        ids: NDArray[Any] | None = None,
    ) -> Floats:
        """(n,) sum of the offsets on a side; zeros when there are none."""
        out = np.zeros(n)
        for term in self.terms:
            if isinstance(term, Offset) and side == ("moving" if term.moving else "loan"):
                out += numbers(term.source, column_of(columns, term.source, side), ids)
        return out

    def has_offset(self, side: Side) -> bool:
        return any(isinstance(t, Offset) and side == ("moving" if t.moving else "loan") for t in self.terms)


@dataclass(frozen=True, slots=True, eq=False)
class SideColumns:
    """The distinct products of atoms on a side for n cases, without writing out all columns of a category.

    values  term -> (n, atoms);  levels  category -> (n,) its atom that is 1
    """

    n: int
    products: tuple[Product, ...]
    values: Mapping[int, Floats]
    levels: Mapping[int, Codes]

    def _product(self, p: int) -> NDArray[Any]:
        """(n,) numbers, or flags where all factors are levels."""
        factors = [
            self.levels[t] == a if t in self.levels else self.values[t][:, a] for t, a in self.products[p]
        ]
        return np.asarray(reduce(np.multiply, factors))

    def column(self, p: int) -> Floats:
        """(n,) values of a product, read-only and contiguous."""
        out: Floats = np.ascontiguousarray(self._product(p), dtype=np.float64).view()
        out.setflags(write=False)
        return out

    def ends(self, p: int) -> tuple[float, float]:
        """Smallest and largest value of a product."""
        values = self._product(p)
        return float(values.min()), float(values.max())

    def matrix(self) -> Floats:
        """(n, products)"""
        out = np.empty((self.n, len(self.products)), order="F")
        for p in range(len(self.products)):
            out[:, p] = self._product(p)
        return out


def _column(
    columns: Mapping[str, NDArray[Any] | Coded] | Columns, name: str, side: Side
) -> NDArray[Any] | Coded:
    if name not in columns:
        what = {"loan": "loan column", "moving": "loan column", "feature": "macro feature", "age": "column"}[
            side
        ]
        raise DataError(
            f"the model needs the {what} {name!r}; there are: {', '.join(map(str, columns)) or 'none'}"
        )
    found = columns[name]
    return found if isinstance(found, Coded) else np.asarray(found)


def column_of(columns: Mapping[str, NDArray[Any] | Coded] | Columns, name: str, side: Side) -> NDArray[Any]:
    """The column called ``name``, one that came by its levels written out again; DataError when there is none."""
    found = _column(columns, name, side)
    return found.text[found.code] if isinstance(found, Coded) else found
