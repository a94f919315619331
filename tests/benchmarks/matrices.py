"""The same design as rows, for libraries that fit rows. Built column by column, no column twice."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import FeatureTable, RiskSet
from stresskit.kernels.splines import natural_basis
from tests.benchmarks.panel import LEVELS, Shape

Floats = NDArray[np.float64]


class Rows:
    """Where the values of a row lie; made once per build, its time counts as building."""

    def __init__(self, shape: Shape, risk_set: RiskSet, features: FeatureTable) -> None:
        self.shape, self.risk_set, self.features = shape, risk_set, features
        self.length = risk_set.stay_exit - risk_set.stay_entry
        n = int(self.length.sum())
        before = np.cumsum(self.length) - self.length
        self.n = n
        self.age = np.arange(n) + np.repeat(risk_set.stay_entry + 1 - before, self.length)
        self.period = self.age + np.repeat(risk_set.stay_origin - features.start, self.length)

    def event(self) -> Floats:
        out = np.zeros(self.n)
        out[np.cumsum(self.length)[self.risk_set.stay_cause == 1] - 1] = 1.0
        return out

    def grade(self) -> NDArray[np.int8]:
        codes = np.searchsorted(np.array(LEVELS), self.risk_set.static["grade"].astype("U1")).astype(np.int8)
        return np.repeat(codes[self.risk_set.stay_loan], self.length)

    def spline(self) -> Floats:
        """(ages, 6) by age; one row per age, because rows of an age are alike."""
        first, last = int(self.risk_set.stay_entry.min()) + 1, int(self.risk_set.stay_exit.max())
        knots = np.array([first, *self.shape.knots, self.shape.until], dtype=np.float64)
        basis = natural_basis(knots, np.clip(np.arange(last + 1), first, self.shape.until).astype(np.float64))
        return np.delete(basis, len(knots) // 2, axis=1)

    def fill_numeric(self, out: Floats, at: int) -> int:
        """Writes spline, numbers, macros and the moving column into out[:, at:]; returns the next column."""
        table = self.spline()
        for j in range(table.shape[1]):
            np.take(table[:, j], self.age, out=out[:, at + j])
        at += table.shape[1]
        for j in range(self.shape.numbers):
            out[:, at + j] = np.repeat(self.risk_set.static[f"x{j}"][self.risk_set.stay_loan], self.length)
        at += self.shape.numbers
        for j in range(self.shape.macros):
            np.take(np.ascontiguousarray(self.features.values[:, j]), self.period, out=out[:, at + j])
        at += self.shape.macros
        if self.shape.moving:
            out[:, at] = self.risk_set.moving["use"]
            at += 1
        return at

    @property
    def numeric(self) -> int:
        return len(self.shape.knots) + 1 + self.shape.numbers + self.shape.macros + self.shape.moving

    def labels(self) -> list[str]:
        """Of the numeric columns."""
        inner = [f"age{j}" for j in range(len(self.shape.knots) + 1)]
        numbers = [f"x{j}" for j in range(self.shape.numbers)]
        macros = [f"m{j}" for j in range(self.shape.macros)]
        return inner + numbers + macros + ["use"] * self.shape.moving


def dense(
    shape: Shape, risk_set: RiskSet, features: FeatureTable, *, constant: bool
) -> tuple[Floats, Floats, list[str]]:
    """(X (rows, k) column-major, y, labels); the constant column first when asked for."""
    rows = Rows(shape, risk_set, features)
    levels = len(LEVELS) - 1
    k = constant + rows.numeric + levels * (2 if shape.crossed else 1)
    x = np.empty((rows.n, k), order="F")
    if constant:
        x[:, 0] = 1.0
    at = rows.fill_numeric(x, int(constant))
    grade = rows.grade()
    names = ["intercept"] * constant + rows.labels()
    for level in range(1, len(LEVELS)):
        np.equal(grade, level, out=x[:, at], casting="unsafe")
        names.append(f"grade{LEVELS[level]}")
        at += 1
    if shape.crossed:
        macro = names.index("m0")
        for level in range(1, len(LEVELS)):
            np.multiply(x[:, names.index(f"grade{LEVELS[level]}")], x[:, macro], out=x[:, at])
            names.append(f"grade{LEVELS[level]}:m0")
            at += 1
    return x, rows.event(), names


def split(
    shape: Shape, risk_set: RiskSet, features: FeatureTable, tabmat: Any, pandas: Any
) -> tuple[Any, Floats, list[str]]:
    """The category as codes beside a dense block; category x macro as a sparse block (seven columns, 1 in 8 filled)."""
    rows = Rows(shape, risk_set, features)
    x = np.empty((rows.n, rows.numeric), order="F")
    rows.fill_numeric(x, 0)
    grade = rows.grade()
    names = rows.labels() + [f"grade{level}" for level in LEVELS[1:]]
    category = tabmat.CategoricalMatrix(
        pandas.Categorical.from_codes(grade, categories=list(LEVELS)), drop_first=True
    )
    blocks = [tabmat.DenseMatrix(x), category]
    if shape.crossed:
        blocks.append(_sparse_cross(grade, x[:, names.index("m0")], tabmat))
        names += [f"grade{level}:m0" for level in LEVELS[1:]]
    return tabmat.SplitMatrix(blocks), rows.event(), names


def _sparse_cross(grade: NDArray[np.int8], macro: Floats, tabmat: Any) -> Any:
    at = [np.flatnonzero(grade == level).astype(np.int32) for level in range(1, len(LEVELS))]
    pointer = np.concatenate(([0], np.cumsum([a.size for a in at]))).astype(np.int32)
    row = np.concatenate(at)
    return tabmat.SparseMatrix((macro[row], row, pointer), shape=(grade.size, len(LEVELS) - 1))
