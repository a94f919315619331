"""The hazards of a book as products of tables: e^eta = e^s of the loan times e^z of its table row and step.

A table row stands for an age at as_of and, where loan columns interact with age or macro features, for a group
of loans whose interacting columns are alike. A cause does not factor when such groups are too many, when it reads moving columns,
or when e^s or e^z alone would leave the range of numbers; its eta is then added up loan by loan and step by step.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.coded import coder
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit, LoanPart
from stresskit.kernels import packs
from stresskit.kernels.odds import LIMIT
from stresskit.projection.interfaces import MovingHazard

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Loans per table row below which rows are no longer shared unless there are few, and the largest |s|, |z| that is split into e^s e^z.
_LOANS_PER_ROW, _FEW_ROWS = 4, 4096
LARGEST_SPLIT = 300.0


@dataclass(frozen=True, slots=True, eq=False)
class Factors:
    """Loan sides of the hazards and the table rows of a book.

    causes     default, payoff (where fitted), then the others; fits in this order
    parts      s (n,) and U (n, k) of each cause
    row        (n,) table row of each loan
    row_age    (R,) age at as_of of a row
    row_key    (R,) which columns of macro features the default hazard reads in a row, see :mod:`stresskit.hazard.keys`
    row_loan   (R,) a loan of the row: its U stands for all
    grouped    whether rows tell U apart; if not, causes with U do not factor
    largest    (C,) largest |s|
    kept       where tables already made are kept, with the features they are of; None: nowhere
    """

    causes: tuple[str, ...]
    fits: tuple[HazardFit, ...]
    parts: tuple[LoanPart, ...]
    row: Ints
    row_age: Ints
    row_key: Ints
    row_loan: Ints
    grouped: bool
    largest: Floats
    kept: dict[int, tuple[FeatureTable, Floats, list[Floats]]] | None = None

    def factoring(self, tables: Floats, moving: Bools) -> Bools:
        """(C,) whether a cause factors, given its z (C, R, H); ``moving`` (C,): what moves in it is worked out on the way."""
        out = np.ones(len(self.causes), dtype=np.bool_)
        for c, (fit, part) in enumerate(zip(self.fits, self.parts, strict=True)):
            largest = max(self.largest[c], np.abs(tables[c]).max(initial=0.0))
            out[c] = (
                (moving[c] or not fit.moving_columns)
                and (self.grouped or not part.U.shape[1])
                and largest <= LARGEST_SPLIT
            )
        return out

    def tables(
        self,
        features: FeatureTable,
        first: int,
        steps: int,
        *,
        own: Mapping[str, FeatureTable] | None = None,
    ) -> tuple[Floats, list[Floats]]:
        """z (C, R, H) of every table row and step, U @ V included where rows tell U apart, and V (R, H, k) of each cause.

        own  cause -> features that its hazard reads instead, starting where ``features`` do
        """
        if self.kept is None or own:
            return self._tables(features, first, steps, own or {})
        if id(features) not in self.kept:
            self.kept[id(features)] = (features, *self._tables(features, first, steps, {}))
        _, z, v = self.kept[id(features)]
        return z.copy(), v

    def _tables(
        self, features: FeatureTable, first: int, steps: int, own: Mapping[str, FeatureTable]
    ) -> tuple[Floats, list[Floats]]:
        ages, of_row = np.unique(self.row_age, return_inverse=True)
        age, step = (
            np.repeat(ages, steps) + np.tile(np.arange(1, steps + 1), ages.size),
            np.tile(np.arange(steps), ages.size),
        )
        z, v = np.zeros((len(self.causes), self.row_age.size, steps)), []
        for c, (fit, part) in enumerate(zip(self.fits, self.parts, strict=True)):
            read = own.get(self.causes[c], features)
            path = [read.column(n)[first : first + steps] for n in fit.feature_names]
            values = np.stack(path, axis=1)[step] if path else np.empty((age.size, 0))
            cell = fit.cell_part(age, values, fit.feature_names)
            z[c] = cell.z.reshape(ages.size, steps)[of_row]
            v.append(cell.V.reshape(ages.size, steps, -1)[of_row])
            if self.grouped and part.U.shape[1]:
                z[c] += np.einsum("rk,rhk->rh", part.U[self.row_loan], v[c])
        return z, v

    def eta(
        self, cause: int, loans: Ints, z: Floats, v: Floats, moving: Mapping[str, Floats] | None
    ) -> Floats:
        """(b, H) linear predictor of some loans; z (R, H) and v (R, H, k) of the cause, moving columns (b, H)."""
        row, part, fit = self.row[loans], self.parts[cause], self.fits[cause]
        out: Floats = z[row]
        out += part.s[loans, None]
        if part.U.shape[1] and not self.grouped:
            out += np.einsum("bk,bhk->bh", part.U[loans], v[row])
        if fit.moving_columns:
            assert moving is not None
            assert isinstance(fit, MovingHazard)
            out += fit.moving_part({name: moving[name] for name in fit.moving_columns})
        return out


def exp_eta(eta: Floats) -> Floats:
    """e^eta in place, held where no number tells it from certainty."""
    np.minimum(eta, LIMIT, out=eta)
    return np.exp(eta, out=eta)


def ranks(values: Any) -> tuple[Ints, int]:
    """(place (n,) of each value among the distinct ones, how many); whole numbers that are close are counted, not sorted."""
    if values.dtype.kind == "i":
        low = int(values.min())
        size = int(values.max()) - low + 1
        if size < 4 * values.size + 1000:
            codes, count = packs.ranked(values, low, size)
            return codes, count
    code, found = pd.factorize(values)
    place = np.empty(found.size, dtype=np.int64)
    place[np.argsort(found)] = np.arange(found.size)
    return place[code], found.size


def _crossed(row: Ints, other: Any) -> tuple[Ints, Ints]:
    """(row (n,), the first loan of each row) of rows told apart by another value as well."""
    code, count = ranks(other)
    if row.size:
        code, count = ranks(row * count + code)
    return code, packs.firsts(code, count)


def _groups(parts: tuple[LoanPart, ...], row: Ints, first: Ints) -> tuple[Ints, Ints, bool]:
    """Rows told apart by U as well, and whether they are few enough; the rows as they were if not."""
    out, loans = row, first
    for part in parts:
        for k in range(part.U.shape[1]):
            out, loans = _crossed(out, part.U[:, k])
            if loans.size * _LOANS_PER_ROW > row.size and loans.size > _FEW_ROWS:
                return row, first, False
    return out, loans, True


def factors_of(portfolio: Portfolio, fits: Mapping[str, HazardFit], threads: int = 1) -> Factors:
    """Loan sides of all hazards. Raises DataError when a loan lacks a column that a hazard reads."""
    causes = [c for c in ("default", "payoff") if c in fits] + [
        c for c in fits if c not in ("default", "payoff")
    ]
    chosen = tuple(fits[c] for c in causes)
    static, n, ids, codes = portfolio.static, portfolio.n_loans, portfolio.loan_ids, coder(portfolio)
    parts = tuple(f.loan_part(static, n, ids, coder=codes, threads=threads) for f in chosen)
    key = fits["default"].design.keys.of_loans(static, n, ids, codes)
    row, first = _crossed(np.empty(0, dtype=np.int64), portfolio.age)
    if key.any():
        row, first = _crossed(row, key)
    row, first, grouped = _groups(parts, row, first)
    largest = np.array([max(part.s.max(initial=0.0), -part.s.min(initial=0.0)) for part in parts])
    return Factors(
        tuple(causes), chosen, parts, row, portfolio.age[first], key[first], first, grouped, largest
    )
