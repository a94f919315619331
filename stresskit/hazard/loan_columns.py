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
from stresskit.kernels import walks
from stresskit.kernels.blocks import in_order
from stresskit.kernels.vectors import whole

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Codes = NDArray[np.int32]

#: Loans looked up at a time.
AT_A_TIME = 1 << 13


@dataclass(frozen=True, slots=True, eq=False)
class LoanColumns:
    """Columns of m stays as :mod:`stresskit.kernels.walks` wants them: ones, numbers, then levels.

    design  (kl,) the design's columns
    place   (kl,) where they stand
    used    number of columns of ``dense`` that are not 0 throughout
    dense   (m, w)
    codes   (m, categories) column of the stay's level; size - 1, a column that nobody reads, for the reference level
    size    a multiple of eight
    """

    design: Ints
    place: Ints
    used: int
    dense: Floats
    codes: Codes
    size: int

    @property
    def shape(self) -> tuple[int, int]:
        """What the kernels call by that name."""
        return self.used, self.size

    def weights(self, one: float, params: Floats) -> Floats:
        """(size,) a weight for the ones, and one for each of the design's columns from ``params`` (kl,)."""
        out = np.zeros(self.size)
        out[0], out[self.place] = one, params
        return out

    def combined(self, at: slice, weights: Floats, add: Floats, out: Floats) -> None:
        """Writes to out (n,) the columns times ``weights`` (size,), plus ``add`` (n,)."""
        walks.combined(self.dense[at], self.codes[at], weights, add, out)

    def laid_out(self, at: slice | Ints) -> Floats:
        """(n, size) all columns in their places."""
        dense, codes = self.dense[at], self.codes[at]
        out = np.zeros((dense.shape[0], self.size))
        out[:, : dense.shape[1]] = dense
        if codes.shape[1]:
            np.put_along_axis(out, codes.astype(np.int64), 1.0, axis=1)
            out[:, -1] = 0.0
        return out

    def wide(self, at: slice | Ints) -> Floats:
        """(n, 1 + kl) the ones, and the columns in the order of ``design``."""
        return np.take(self.laid_out(at), np.append(0, self.place), axis=1)

    def totals(self, at: slice | Ints, weights: Floats) -> Floats:
        """(kl,) sums of the columns times ``weights`` (n,)."""
        dense, codes = self.dense[at], self.codes[at]
        out: Floats = walks.totals(weights, dense, codes, self.size)[self.place]
        return out


def loan_columns(data: HazardData, columns: Ints, loan: Ints, threads: int) -> LoanColumns:
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
    used = 1 + len(dense)
    wide = whole(used)
    levels = sum(map(len, groups.values()))
    size = whole(wide + levels + 1) if levels else wide
    codes, first = np.empty((loan.size, len(groups)), dtype=np.int32), wide
    for c, (source, members) in enumerate(groups.items()):
        atoms = [design.products["loan"][int(design.index["loan"][j])][0][1] for j in members]
        level = data.levels[source]
        column = np.full(max(int(level.max()), *atoms) + 1, size - 1, dtype=np.int32)
        column[atoms] = first + np.arange(len(members))
        np.take(column[level], loan, out=codes[:, c], mode="clip")
        first += len(members)
    order = np.array([*dense, *(j for members in groups.values() for j in members)], dtype=np.int64)
    place = np.concatenate([np.arange(1, used), np.arange(wide, wide + levels)])
    numbers = [np.ascontiguousarray(loans[:, int(design.index["loan"][j])]) for j in dense]
    return LoanColumns(order, place, used, _gathered(numbers, loan, wide, threads), codes, size)


def _gathered(columns: list[Floats], loan: Ints, wide: int, threads: int) -> Floats:
    """(m, wide) ones, the columns of every stay, and zeros."""
    out = np.empty((loan.size, wide))

    def work(piece: int) -> None:
        a = piece * AT_A_TIME
        part = loan[a : a + AT_A_TIME]
        across = np.zeros((wide, part.size))
        across[0] = 1.0
        for c, column in enumerate(columns, start=1):
            np.take(column, part, out=across[c], mode="clip")
        out[a : a + part.size] = across.T

    for _ in in_order(work, -(-loan.size // AT_A_TIME), threads):
        pass
    return out
