"""Stays in the order of their tracks, and the cells of the tracks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Tracks:
    """A track is a cohort (origin) of a group (loans that interactions treat alike).

    Cells lie as :mod:`stresskit.kernels.cohorts` says. Stays are sorted by (track, last age survived,
    entry, loan), which is the same for any order of loans.

    starts    (tracks + 1,) first cell of each track, the boundary cell
    group     (tracks,), group_values (groups, k): what loans of a group share
    age, period, track, boundary   (cells,)
    order     (m,) stays of the CauseRows in the order used here
    stay_track   (m,) track of each stay
    enter     (m,) cell of the age at entry
    survived  (m,) cell of the last age without event
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
    survived: Ints
    leave: Ints

    @property
    def cells(self) -> int:
        return int(self.starts[-1])


def mixed_products(design: Design) -> list[int]:
    """Loan products that occur in a column together with age or a feature."""
    cell = (design.index["age"] >= 0) | (design.index["feature"] >= 0)
    return [int(p) for p in np.unique(design.index["loan"][cell & (design.index["loan"] >= 0)])]


def loan_groups(matrix: Floats) -> tuple[Ints, Floats]:
    """(n,) group of each loan and (groups, k) its row: loans with equal rows of ``matrix`` (n, k)."""
    code = np.zeros(matrix.shape[0], dtype=np.int64)
    for j in range(matrix.shape[1]):
        column, values = pd.factorize(matrix[:, j], sort=True)
        code, _ = pd.factorize(code * values.size + column, sort=True)
    first = np.full(int(code.max()) + 1, -1)
    first[code[::-1]] = np.arange(code.size)[::-1]
    return code.astype(np.int64), matrix[first]


def build_tracks(rows: CauseRows, values: Floats) -> Tracks:
    """Tracks of the stays; loans with equal rows of ``values`` (n_loans, k) are one group."""
    group, group_values = loan_groups(values)
    lowest = int(rows.origin.min())
    span = int(rows.origin.max()) - lowest + 1
    key, code = _distinct(group[rows.loan] * span + (rows.origin - lowest))
    low, high = np.full(key.size, np.iinfo(np.int64).max), np.zeros(key.size, dtype=np.int64)
    np.minimum.at(low, code, rows.entry)
    np.maximum.at(high, code, rows.exit)
    width = high - low + 1
    starts = np.concatenate(([0], np.cumsum(width))).astype(np.int64)
    track = np.repeat(np.arange(key.size), width)
    age = low[track] + np.arange(int(starts[-1])) - starts[track]
    survived = rows.exit - rows.event
    ages = int(high.max()) + 1
    order = np.argsort((code * ages + survived) * ages + rows.entry, kind="stable")
    first = (starts[:-1] - low)[code[order]]
    return Tracks(
        starts=starts,
        group=key // span,
        group_values=group_values,
        age=age,
        period=key[track] % span + lowest + age - rows.first_period,
        track=track,
        boundary=age == low[track],
        order=order,
        stay_track=code[order],
        enter=first + rows.entry[order],
        survived=first + survived[order],
        leave=first + rows.exit[order],
    )


def _distinct(key: Ints) -> tuple[Ints, Ints]:
    """Distinct keys >= 0, ascending, and the place of each one among them."""
    size = int(key.max()) + 1
    if size > 4 * key.size + 1024:
        distinct, code = np.unique(key, return_inverse=True)
        return distinct, code
    present = np.bincount(key, minlength=size) > 0
    return np.flatnonzero(present), (np.cumsum(present) - 1)[key]
