"""PDs of every loan away from the scenarios: what the fitted hazards say under stated, standing conditions.

The hazard of a loan of age a at a later age u is evaluated at u and at the stated macro conditions, with the
loan's own columns; a column that moves along a path keeps its value at as_of. Rolled forward from age a it gives, for every age the loan may reach, the PD over the rest
of its life and over the next year, given that it is still there.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import coder
from stresskit.core.errors import NumericError, TextError
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit, LoanPart
from stresskit.kernels.rollforward import period_odds, roll_forward

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

BLOCK_LOANS = 4096


@runtime_checkable
class MovingHazard(Protocol):
    """A hazard that reads moving loan columns, added to its loan and cell parts."""

    def moving_part(self, values: Mapping[str, Floats]) -> Floats:
        """(b, H) what the moving columns, each (b, H), add to the linear predictor."""


@dataclass(frozen=True, slots=True)
class Conditions:
    """Macro features by age: row u - 1 holds in the loan's u-th period, the last row in all later ones.

    names   features, f of them
    values  (m, f), m >= 1
    """

    names: tuple[str, ...]
    values: Floats

    def at(self, ages: Ints, wanted: tuple[str, ...]) -> Floats:
        rows = np.minimum(ages - 1, self.values.shape[0] - 1)
        found: Floats = self.values[rows][:, [self.names.index(n) for n in wanted]]
        return found


@dataclass(frozen=True, slots=True)
class ReferencePds:
    """PDs under the conditions, given survival to the point: column 0 is as_of, column y the y-th edge.

    lifetime  (n, N + 1) over the rest of the projected life
    year      (n, N + 1) over the next per_year periods
    """

    lifetime: Floats
    year: Floats


def reference_pds(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    conditions: Conditions,
    life: Ints,
    points: Ints,
    *,
    place: str,
) -> ReferencePds:
    """PDs of all loans at the steps ``points`` (N + 1,), the first of which is 0.

    life   (n,) projected steps of each loan
    place  of the study that asks, for messages
    Raises TextError when a hazard reads columns that change along the way, NumericError for conditions without a value.
    """
    for cause, fit in fits.items():
        lacking = [n for n in fit.moving_columns if n not in portfolio.static]
        if fit.moving_columns and (lacking or not isinstance(fit, MovingHazard)):
            raise TextError(
                f"{place}: hazards.{cause} reads loan columns that change over time ({', '.join(fit.moving_columns)}), whose values "
                "at as_of are not known; name a column that holds the PD"
            )
        bad = [
            n
            for n in fit.feature_names
            if not np.isfinite(conditions.values[:, conditions.names.index(n)]).all()
        ]
        if bad:
            raise NumericError(f"{place}: macro feature {bad[0]} has no value under the stated conditions")
    lifetime, year = np.zeros((portfolio.n_loans, points.size)), np.zeros((portfolio.n_loans, points.size))
    n, codes = portfolio.n_loans, coder(portfolio)
    parts = {c: f.loan_part(portfolio.static, n, portfolio.loan_ids, coder=codes) for c, f in fits.items()}
    for rows in _blocks(portfolio, life):
        steps = int(life[rows].max())
        ages = int(portfolio.age[rows[0]]) + 1 + np.arange(steps)
        alive = np.arange(steps)[None, :] < life[rows][:, None]
        odds = [
            period_odds(_eta(parts[c], f, ages, conditions, rows) + _held(f, portfolio, rows), f.spec.link)
            * alive
            for c, f in fits.items()
        ]
        survival, flows = roll_forward(odds)
        default = flows[list(fits).index("default")]
        lifetime[rows], year[rows] = _given_survival(
            survival, default, life[rows], points, portfolio.frequency.per_year
        )
    return ReferencePds(lifetime, year)


def _given_survival(
    survival: Floats, default: Floats, life: Ints, points: Ints, per_year: int
) -> tuple[Floats, Floats]:
    """(b, N + 1) PDs over the rest of life and over a year, from each point, given survival to it."""
    b, steps = survival.shape
    column = np.zeros((b, 1))
    total = np.concatenate([column, np.cumsum(default, axis=1)], axis=1)
    there = np.concatenate([column + 1.0, survival], axis=1)
    at = np.minimum(points, steps)
    alive = points[None, :] < life[:, None]
    base = there[:, at]
    rest = np.where(alive, total[:, -1:] - total[:, at], 0.0)
    next_ = np.where(alive, total[:, np.minimum(points + per_year, steps)] - total[:, at], 0.0)
    given = [np.divide(x, base, out=np.zeros_like(x), where=base > 0) for x in (rest, next_)]
    return np.minimum(given[0], 1.0), np.minimum(given[1], 1.0)


def _eta(part: LoanPart, fit: HazardFit, ages: Ints, conditions: Conditions, rows: Ints) -> Floats:
    cell = fit.cell_part(ages, conditions.at(ages, fit.feature_names), fit.feature_names)
    eta = part.s[rows, None] + cell.z[None, :]
    if part.U.shape[1]:
        # einsum, not a library product: its order of addition does not depend on threads.
        eta += np.einsum("ik,jk->ij", part.U[rows], cell.V)
    return eta


def _held(fit: HazardFit, portfolio: Portfolio, rows: Ints) -> Floats:
    """(b, 1) what moving columns add when they keep the value that they have at as_of."""
    if not fit.moving_columns or not isinstance(fit, MovingHazard):
        return np.zeros((1, 1))
    return fit.moving_part({n: portfolio.static[n][rows][:, None] for n in fit.moving_columns})


def _blocks(portfolio: Portfolio, life: Ints) -> Iterator[Ints]:
    """Loans of one age and similar life together, in an order that depends on the data alone."""
    order = np.lexsort((np.arange(portfolio.n_loans), life, portfolio.age))
    cuts = np.flatnonzero(np.diff(portfolio.age[order])) + 1
    for run in np.split(order, cuts):
        for start in range(0, run.size, BLOCK_LOANS):
            yield run[start : start + BLOCK_LOANS]
