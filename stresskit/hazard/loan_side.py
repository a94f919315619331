"""The loan side of a hazard, block by block: what a loan's own columns add to the linear predictor.

The level of a category is looked up in a table of coefficients. Its other columns would add a coefficient times 0, which
changes no bit of a sum that began at 0: the figures are those of adding up all columns in the order of the design.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import reduce
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import Coder
from stresskit.core.errors import DataError
from stresskit.core.values import Columns
from stresskit.hazard.design import Atom, Design, Product, column_of
from stresskit.hazard.terms import Crossing, LoanCategory, Offset
from stresskit.kernels.blocks import in_order

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Loans whose columns stay in the processor's cache on the way.
AT_A_TIME = 1 << 14


class _Levels(NamedTuple):
    """Level of each loan: table[codes]."""

    codes: NDArray[Any]
    table: NDArray[np.integer[Any]]


class _Product(NamedTuple):
    """Adds coefficient times product."""

    coefficient: float
    product: Product


class _Lookup(NamedTuple):
    """Adds the coefficient of the loan's level of a term."""

    term: int
    by_level: Floats


@dataclass(frozen=True, slots=True, eq=False)
class LoanSide:
    """Columns of a design that read loans.

    alone  (k,) columns that read nothing else
    mixed  columns of U as (loan product, key); product -1: 1 for all loans; key -1: loans of every key
    """

    design: Design
    coefficients: Floats
    alone: NDArray[np.bool_]
    mixed: tuple[tuple[int, int], ...]

    def part(
        self, static: Columns, n: int, ids: NDArray[Any] | None, coder: Coder | None, threads: int
    ) -> tuple[Floats, Floats]:
        """s (n,) and U (n, mixed). DataError for loan columns that are missing, or values that are no numbers or levels."""
        s, u = np.empty(n), np.empty((n, len(self.mixed)))
        key = self.design.keys.of_loans(static, n, ids, coder)
        levels = self._levels(static, ids, coder)
        columns = {name: column_of(static, name, "loan") for name in self.design.sources("loan")}
        steps = self._steps()

        def block(b: int) -> None:
            at = slice(b * AT_A_TIME, min(n, (b + 1) * AT_A_TIME))
            value = _Values(self.design, {name: c[at] for name, c in columns.items()}, levels, at)
            s[at] = self.design.offset("loan", value.columns, at.stop - at.start)
            for step in steps:
                if isinstance(step, _Lookup):
                    codes, table = levels[step.term]
                    s[at] += step.by_level[table][codes[at]]
                else:
                    s[at] += step.coefficient * value.of(step.product)
            for g, (product, mine) in enumerate(self.mixed):
                u[at, g] = 1.0 if product < 0 else value.of(self.design.products["loan"][product])
                if mine >= 0:
                    u[at, g][key[at] != mine] = 0.0

        try:
            for _ in in_order(block, -(-n // AT_A_TIME), threads):
                pass
        except DataError:
            # the message counts the loans of the whole book, not of the block that met the first one
            self.design.matrix("loan", static, n, ids)
            self.design.offset("loan", static, n, ids)
            raise
        return s, u

    def _levels(self, static: Columns, ids: NDArray[Any] | None, coder: Coder | None) -> dict[int, _Levels]:
        """Term -> levels of the categories that products read."""
        out = {}
        for t in sorted({t for product in self.design.products["loan"] for t, _ in product}):
            term = self.design.terms[t]
            if isinstance(term, LoanCategory):
                out[t] = _levels_of(term, column_of(static, term.source, "loan"), ids, coder)
        return out

    def _steps(self) -> list[_Product | _Lookup]:
        """What is added, in the order of the design: a category's columns stand side by side."""
        out: list[_Product | _Lookup] = []
        for j in np.flatnonzero(self.alone):
            product = self.design.products["loan"][self.design.index["loan"][j]]
            t, level = product[0]
            term = self.design.terms[t]
            if len(product) > 1 or not isinstance(term, LoanCategory):
                out.append(_Product(float(self.coefficients[j]), product))
                continue
            last = out[-1] if out else None
            if not isinstance(last, _Lookup) or last.term != t:
                last = _Lookup(t, np.zeros(len(term.levels)))
                out.append(last)
            last.by_level[level] = self.coefficients[j]
        return out


@dataclass(frozen=True, slots=True)
class _Values:
    """Products of the loans of one block."""

    design: Design
    columns: dict[str, NDArray[Any]]
    levels: dict[int, _Levels]
    at: slice

    def of(self, product: Product) -> Floats:
        out: Floats = reduce(np.multiply, [self._atom(atom) for atom in product])
        return out

    def _atom(self, atom: Atom) -> Floats:
        t, a = atom
        if t in self.levels:
            codes, table = self.levels[t]
            return np.asarray((table == a).astype(np.float64)[codes[self.at]])
        term = self.design.terms[t]
        assert not isinstance(term, Crossing | Offset)
        out: Floats = term.values(self.columns[term.source])[:, a]
        return out


def _levels_of(
    term: LoanCategory, column: NDArray[Any], ids: NDArray[Any] | None, coder: Coder | None
) -> _Levels:
    if coder is not None:
        found = coder(term.source)
        try:
            return _Levels(found.codes, term.level(found.values))
        except DataError:
            pass  # an unknown level: told below, with the loans that have it
    return _Levels(term.level(column, ids), np.arange(len(term.levels)))
