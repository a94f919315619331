"""The loan columns of stays: numbers as numbers, a category as the code of its level.

A level is a column of zeros and ones, one of which is 1 at most, so products with it are sums by level: a category
costs one addition where its columns would cost one multiplication each.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import frozen
from stresskit.hazard.design import SideColumns
from stresskit.hazard.sums import HazardData
from stresskit.hazard.terms import LoanCategory
from stresskit.kernels import lines, walks
from stresskit.kernels.blocks import in_order
from stresskit.kernels.vectors import whole

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Codes = NDArray[np.int32]

#: Stays written at a time.
AT_A_TIME = 1 << 13
_UNREAD = frozen(np.empty(0))


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
    design, loans = data.design, data.loan_side
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
    for c, members in enumerate(groups.values()):
        products = [design.products["loan"][int(design.index["loan"][j])] for j in members]
        atoms = [product[0][1] for product in products]
        level = loans.levels[products[0][0][0]]
        column = np.full(max(int(level.max()), *atoms) + 1, size - 1, dtype=np.int32)
        column[atoms] = first + np.arange(len(members))
        np.take(column[level], loan, out=codes[:, c], mode="clip")
        first += len(members)
    order = np.array([*dense, *(j for members in groups.values() for j in members)], dtype=np.int64)
    place = np.concatenate([np.arange(1, used), np.arange(wide, wide + levels)])
    numbers = [int(design.index["loan"][j]) for j in dense]
    return LoanColumns(order, place, used, _gathered(loans, numbers, loan, wide, threads), codes, size)


def _gathered(loans: SideColumns, products: list[int], loan: Ints, wide: int, threads: int) -> Floats:
    """(m, wide) ones, the products of every stay's loan, and zeros."""
    out = np.empty((loan.size, wide))
    for stop in range(lines.AT_ONCE, wide + 1, lines.AT_ONCE):
        first = max(stop - lines.AT_ONCE, 1)
        columns = [loans.column(p) for p in products[first - 1 : stop - 1]]
        _put(columns, loan, out, (first, stop), threads)
    return out


def _put(columns: list[Floats], loan: Ints, out: Floats, places: tuple[int, int], threads: int) -> None:
    """Columns of loans to the stays' places first .. stop - 1 of ``out``, as :func:`stresskit.kernels.lines.put` does."""
    # The kernel is compiled for this many, of which it reads the first ones.
    padded = tuple((columns + [_UNREAD] * lines.AT_ONCE)[: lines.AT_ONCE])

    def work(piece: int) -> None:
        part = slice(piece * AT_A_TIME, (piece + 1) * AT_A_TIME)
        lines.put(padded, len(columns), loan[part], out[part], *places)

    for _ in in_order(work, -(-loan.size // AT_A_TIME), threads):
        pass
