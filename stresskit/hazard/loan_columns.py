"""The loan columns of stays: numbers as numbers, a category as the code of its level.

A level is a column of zeros and ones, one of which is 1 at most, so products with it are sums by level: a category
costs one addition where its columns would cost one multiplication each.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.sums import HazardData
from stresskit.hazard.terms import LoanCategory
from stresskit.kernels import cohorts

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Codes = NDArray[np.int32]

#: Loans looked up at a time.
AT_A_TIME = 1 << 13


@dataclass(frozen=True, slots=True, eq=False)
class LoanColumns:
    """Columns 0 .. kl of m stays: ones, numbers, then the levels of one category after the other.

    design  (kl,) the design's columns 1 .. kl
    dense   (m, 1 + numbers)
    codes   (m, categories) column of the stay's level; kl + 1, a column that nobody reads, for the reference level
    """

    design: Ints
    dense: Floats
    codes: Codes

    @property
    def size(self) -> int:
        """1 + kl."""
        return self.design.size + 1

    def combined(self, at: slice, weights: Floats, add: Floats, out: Floats) -> None:
        """Writes to out (n,) the columns times ``weights`` (1 + kl,), plus ``add`` (n,)."""
        cohorts.combined(self.dense[at], self.codes[at], np.append(weights, 0.0), add, out)

    def wide(self, at: slice | Ints) -> Floats:
        """(n, 1 + kl) all columns."""
        dense, codes = self.dense[at], self.codes[at]
        if codes.shape[1] == 0:
            return dense
        out = np.zeros((dense.shape[0], self.size + 1))
        out[:, : dense.shape[1]] = dense
        np.put_along_axis(out, codes.astype(np.int64), 1.0, axis=1)
        return np.ascontiguousarray(out[:, :-1])

    def totals(self, at: slice | Ints, weights: Floats) -> Floats:
        """(1 + kl,) sums of the columns times ``weights`` (n,)."""
        out = np.zeros(self.size)
        for c in range(self.codes.shape[1]):
            out += np.bincount(self.codes[at, c], weights=weights, minlength=self.size + 1)[: self.size]
        out[: self.dense.shape[1]] = weights @ self.dense[at]
        return out


def loan_columns(data: HazardData, columns: Ints, loan: Ints) -> LoanColumns:
    """columns: those of the design that read loans alone; loan (m,) of each stay."""
    design, loans = data.design, data.loans
    groups: dict[str, list[int]] = {}
    dense: list[int] = []
    for j in columns.tolist():
        product = design.products["loan"][int(design.index["loan"][j])]
        term = design.terms[product[0][0]]
        if len(product) == 1 and isinstance(term, LoanCategory):
            groups.setdefault(term.source, []).append(j)
        else:
            dense.append(j)
    codes, first = np.empty((loan.size, len(groups)), dtype=np.int32), 1 + len(dense)
    for c, (source, members) in enumerate(groups.items()):
        atoms = [design.products["loan"][int(design.index["loan"][j])][0][1] for j in members]
        level = data.levels[source]
        column = np.full(max(int(level.max()), *atoms) + 1, columns.size + 1, dtype=np.int32)
        column[atoms] = first + np.arange(len(members))
        np.take(column[level], loan, out=codes[:, c], mode="clip")
        first += len(members)
    order = np.array([*dense, *(j for members in groups.values() for j in members)], dtype=np.int64)
    numbers = [np.ascontiguousarray(loans[:, int(design.index["loan"][j])]) for j in dense]
    return LoanColumns(order, _gathered(numbers, loan), codes)


def _gathered(columns: list[Floats], loan: Ints) -> Floats:
    """(m, 1 + columns) ones and the columns of every stay."""
    out = np.empty((loan.size, 1 + len(columns)))
    across = np.ones((1 + len(columns), AT_A_TIME))
    for a in range(0, loan.size, AT_A_TIME):
        part = loan[a : a + AT_A_TIME]
        for c, column in enumerate(columns, start=1):
            np.take(column, part, out=across[c, : part.size], mode="clip")
        out[a : a + part.size] = across[:, : part.size].T
    return out
