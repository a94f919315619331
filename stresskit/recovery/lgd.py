"""LGD of a default in every projected step, from recovery curves or from recovery hazards along the path.

Hazard: a default in step h under a path is recovered along what the path brings AFTER h (METHOD: loss),
LGD(h) = prod_{u=1..U} (1 - lambda_u(macro(h + u))) for one exit, and the roll-forward of competing odds with cures.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, NumericError, Problem
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import CellPart, HazardFit, LoanPart
from stresskit.kernels.rollforward import period_odds
from stresskit.recovery.cases import crossed_labels
from stresskit.recovery.curves import RecoveryCurve
from stresskit.recovery.regression import CURED, RECOVERED

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def curve_lgd(curves: Mapping[str, RecoveryCurve], portfolio: Portfolio, columns: tuple[str, ...]) -> Floats:
    """(n,) LGD of each loan's segment. Raises DataError for loans of a segment without a curve."""
    if not columns:
        return np.full(portfolio.n_loans, curves[""].lgd)
    absent = [c for c in columns if c not in portfolio.static]
    if absent:
        raise DataError(
            f"recovery.by: the book has no column {', '.join(map(repr, absent))}; carry it under loans.segments or loans.static"
        )
    labels = crossed_labels(portfolio.static, columns, portfolio.n_loans)
    unknown = ~np.isin(labels.astype(str), [c for c in curves if c])
    if unknown.any():
        values = sorted({str(v) for v in labels[unknown]})
        raise DataError(
            f"no workout tells the LGD of some loans: {' x '.join(columns)} has {', '.join(map(repr, values[:5]))}",
            [
                Problem(
                    "lgd_missing", "loans of a segment without workouts", int(unknown.sum()),
                    tuple(map(str, portfolio.loan_ids[unknown][:5])),
                    f"Use fewer recovery.by; there are curves for {', '.join(c for c in curves if c)}.",
                )
            ],
        )  # fmt: skip
    return np.array([curves[str(v)].lgd for v in labels], dtype=np.float64)


@dataclass(frozen=True, slots=True)
class _Cause:
    link: str
    loan: LoanPart
    cell: CellPart


class HazardLgd:
    """LGD of defaults along one path, from fitted recovery (and cure) hazards.

    ``tile(loans, steps, exposure)`` gives (b, steps): the LGD of a default in each step.
    """

    def __init__(
        self,
        fits: Mapping[str, HazardFit],
        portfolio: Portfolio,
        features: FeatureTable,
        *,
        end: int,
        horizon: int,
        cure_loss: float = 0.0,
    ) -> None:
        """features cover as_of + 1 .. as_of + horizon + end; fits: "recovered" and, where cases cure, "cured".

        Raises NumericError when the path is too short or has holes, DataError for loans without the fits' columns.
        """
        first = portfolio.as_of + 1 - features.start
        needed = sorted({name for f in fits.values() for name in f.feature_names})
        _check_path(features, needed, first, horizon + end)
        steps, ages = np.arange(1, horizon + 1), np.arange(1, end + 1)
        # Cell (h, u): workout period u of a default in step h lies in step h + u.
        at = (steps[:, None] + ages[None, :]).ravel() + first - 1
        age = np.broadcast_to(ages, (horizon, end)).ravel()
        self._causes = []
        for cause in (RECOVERED, CURED):
            if cause not in fits:
                continue
            fit = fits[cause]
            _check_columns(fit, portfolio)
            values = (
                np.stack([features.column(n)[at] for n in fit.feature_names], axis=1)
                if fit.feature_names
                else np.empty((at.size, 0))
            )
            cell = fit.cell_part(age, values, fit.feature_names)
            self._causes.append(
                _Cause(fit.spec.link, fit.loan_part(portfolio.static, portfolio.n_loans), cell)
            )
        self._horizon, self._end, self._cure_loss = horizon, end, cure_loss
        keys = np.column_stack([np.column_stack([c.loan.s, c.loan.U]) for c in self._causes])
        _, self._one, inverse = np.unique(keys, axis=0, return_index=True, return_inverse=True)
        self._of = np.ravel(inverse)
        self._known: dict[int, Floats] = {}

    def tile(self, loans: Ints, steps: int, exposure: Floats | None = None) -> Floats:
        """(b, steps) LGD of a default in each step; loans alike in all recovery terms are worked out once."""
        kinds, place = np.unique(self._of[loans], return_inverse=True)
        new = np.array([k for k in kinds if int(k) not in self._known], dtype=np.int64)
        if new.size:
            for k, row in zip(new, self._table(self._one[new]), strict=True):
                self._known[int(k)] = row
        table = np.stack([self._known[int(k)][:steps] for k in kinds])
        if len(self._known) > 65_536:
            self._known.clear()
        out: Floats = table[np.ravel(place)]
        return out

    def _table(self, rows: Ints) -> Floats:
        """(r, horizon) for these loans: the odds of u = 1 .. U rolled forward."""
        survival, cured = np.ones((rows.size, self._horizon)), np.zeros((rows.size, self._horizon))
        for u in range(self._end):
            cells = np.arange(self._horizon) * self._end + u
            odds = [period_odds(_eta(c, rows, cells), c.link) for c in self._causes]
            total = 1.0 + sum(odds[1:], odds[0])
            survival /= total
            if len(odds) > 1:
                cured += survival * odds[1]
        return survival + self._cure_loss * cured


def _eta(c: _Cause, rows: Ints, cells: Ints) -> Floats:
    eta: Floats = c.loan.s[rows, None] + c.cell.z[None, cells]
    if c.loan.U.shape[1]:
        # einsum, not a library product: its order of addition does not depend on threads.
        eta = eta + np.einsum("ik,jk->ij", c.loan.U[rows], c.cell.V[cells])
    return eta


def _check_path(features: FeatureTable, needed: list[str], first: int, steps: int) -> None:
    lacking = [n for n in needed if n not in features.names]
    if lacking:
        raise NumericError(
            f"the recovery hazards need macro features that the path lacks: {', '.join(lacking)}"
        )
    if needed and (first < 0 or first + steps > features.n_periods):
        raise NumericError(
            f"macro features cover {features.n_periods} periods; recovery after the last step needs {steps} from as_of on"
        )
    for name in needed:
        if not np.isfinite(features.column(name)[first : first + steps]).all():
            raise NumericError(f"macro feature {name} has holes on the path that recovery needs")


def _check_columns(fit: HazardFit, portfolio: Portfolio) -> None:
    absent = [c for c in fit.loan_columns if c not in portfolio.static]
    if absent:
        raise DataError(
            f"the {fit.cause} hazard uses case columns that the book lacks: {', '.join(absent)}; carry them under loans.segments or loans.static"
        )
