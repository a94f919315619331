"""Stays in the order of their tracks, and the cells of the tracks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.sums import HazardData
from stresskit.kernels import cohorts

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Tracks:
    """A track is a cohort (origin) of a group (loans that interactions treat alike).

    Cells lie as :mod:`stresskit.kernels.cohorts` says. Stays are sorted by (track, last, entry,
    loan), which is the same for any order of loans.

    starts    (tracks + 1,) first cell of each track, the boundary cell
    group     (tracks,), group_values (groups, k): what loans of a group share
    age, period, track, boundary   (cells,)
    order     (m,) stays of the CauseRows in the order used here
    stay_track   (m,) track of each stay
    enter     (m,) cell of the age at entry
    last      (m,) cell of the last age of which sums count on a pattern: without event for a log hazard, else ``leave``
    leave     (m,) cell of the last age at risk
    """

    starts: Ints
    group: Ints
    group_values: Floats
    age: Ints
    period: Ints
    track: Ints
    boundary: NDArray[np.bool_]
    order: Ints
    stay_track: Ints
    enter: Ints
    last: Ints
    leave: Ints

    @property
    def cells(self) -> int:
        return int(self.starts[-1])


def mixed_products(design: Design) -> list[int]:
    """Loan products that occur in a column together with age or a feature."""
    cell = (design.index["age"] >= 0) | (design.index["feature"] >= 0)
    return [int(p) for p in np.unique(design.index["loan"][cell & (design.index["loan"] >= 0)])]


def tracks_of(data: HazardData, *, mixed: bool = True) -> Tracks:
    """Tracks whose groups are the loans that read the same features and, with ``mixed``, that the mixed columns treat alike.

    group_values: the mixed products, then the key where features go by a loan column.
    """
    columns = [data.loan_side.column(p) for p in mixed_products(data.design)] if mixed else []
    if data.design.keys.terms:
        columns.append(data.key.astype(np.float64))
    values = np.column_stack(columns) if columns else np.empty((data.rows.n_loans, 0))
    return build_tracks(data.rows, values, survived=data.link.log_hazard)


def feature_rows_of(data: HazardData, t: Tracks) -> Ints:
    """(cells,) row of ``data.periods`` that each cell reads; some row in boundary cells, which no sum uses."""
    period = np.where(t.boundary, 0, t.period)
    if data.design.keys.terms:
        period += t.group_values[:, -1].astype(np.int64)[t.group[t.track]] * data.n_periods
    return period


def loan_groups(matrix: Floats) -> tuple[Ints, Floats]:
    """(n,) group of each loan and (groups, k) its row: loans with equal rows of ``matrix`` (n, k)."""
    code = np.zeros(matrix.shape[0], dtype=np.int64)
    if matrix.shape[1] == 0:
        return code, matrix[:1]
    for j in range(matrix.shape[1]):
        column, values = pd.factorize(matrix[:, j], sort=True)
        code, _ = pd.factorize(code * values.size + column, sort=True)
    first = np.full(int(code.max()) + 1, -1)
    first[code[::-1]] = np.arange(code.size)[::-1]
    return code.astype(np.int64), matrix[first]


def build_tracks(rows: CauseRows, values: Floats, *, survived: bool) -> Tracks:
    """Tracks of the stays; loans with equal rows of ``values`` (n_loans, k) are one group.

    survived  ``last`` is the last age without event
    """
    group, group_values = loan_groups(values)
    lowest = int(rows.origin.min())
    span = int(rows.origin.max()) - lowest + 1
    cohort = rows.origin - lowest
    key, code = _distinct(cohort if group_values.shape[0] == 1 else group[rows.loan] * span + cohort)
    order, stay_track, enter, last, leave, low, starts = cohorts.laid_out(
        code, key.size, rows.entry, rows.exit, rows.event, survived
    )
    track = np.repeat(np.arange(key.size), np.diff(starts))
    age = low[track] + np.arange(int(starts[-1])) - starts[track]
    return Tracks(
        starts=starts,
        group=key // span,
        group_values=group_values,
        age=age,
        period=key[track] % span + lowest + age - rows.first_period,
        track=track,
        boundary=age == low[track],
        order=order,
        stay_track=stay_track,
        enter=enter,
        last=last,
        leave=leave,
    )


def _distinct(key: Ints) -> tuple[Ints, Ints]:
    """Distinct keys >= 0, ascending, and the place of each one among them."""
    size = int(key.max()) + 1
    if size > 4 * key.size + 1024:
        distinct, code = np.unique(key, return_inverse=True)
        return distinct, code
    present = np.bincount(key, minlength=size) > 0
    return np.flatnonzero(present), (np.cumsum(present) - 1)[key]
