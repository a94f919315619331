"""The loans of a past book in cells of segment, cohort, age and predicted risk, and how cells add up to groups."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.runs.records import PORTFOLIO
from stresskit.runs.tables import make_cells

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Years on book from which loans are taken together.
OLDEST = 10
TENTHS = 10


@dataclass(frozen=True, slots=True, eq=False)
class Groups:
    """One breakdown: its name, labels of groups, and (cells,) the group of each cell."""

    by: str
    labels: tuple[str, ...]
    index: Ints

    def total(self, cells: Floats) -> Floats:
        """(cells, ...) added up to (groups, ...)."""
        out = np.zeros((len(self.labels), *cells.shape[1:]))
        np.add.at(out, self.index, cells)
        return out


@dataclass(frozen=True, slots=True, eq=False)
class PastCells:
    """code (n,) cell of each loan; segment (cells,) its segment, of all segment columns crossed; groups by breakdown."""

    code: Ints
    count: int
    segment: Ints
    segment_labels: tuple[str, ...]
    groups: tuple[Groups, ...]


def past_cells(book: Portfolio, segments: tuple[str, ...], predicted: Floats) -> PastCells:
    """Cells of a book; ``predicted`` (n,) is the model's PD, whose tenths are the groups of risk."""
    crossed = make_cells(book, segments)
    year = book.frequency.per_year
    cohort = (book.as_of - book.age + 1) // year
    on_book = np.minimum(np.maximum(book.age - 1, 0) // year, OLDEST - 1)
    edges = np.unique(quantiles(predicted, np.arange(1, TENTHS) / TENTHS, book.count))
    risk = np.searchsorted(edges, predicted, side="right")
    parts = np.stack([crossed.codes, cohort, on_book, risk], axis=1)
    kept, code = np.unique(parts, axis=0, return_inverse=True)
    groups = [Groups(by, labels, index[kept[:, 0]]) for by, labels, index in crossed.breakdowns]
    groups[0] = Groups("", (PORTFOLIO,), np.zeros(len(kept), dtype=np.int64))
    columns = (
        ("cohort", kept[:, 1], str),
        ("year on book", kept[:, 2], _age),
        ("predicted risk", kept[:, 3], _tenth(edges.size + 1)),
    )
    for by, values, words in columns:
        found, index = np.unique(values, return_inverse=True)
        groups.append(Groups(by, tuple(words(int(v)) for v in found), index.astype(np.int64)))
    labels = crossed.breakdowns[-1][1] if segments else (PORTFOLIO,)
    return PastCells(code.ravel().astype(np.int64), len(kept), kept[:, 0], labels, tuple(groups))


def quantiles(values: Floats, shares: Floats, count: Floats | None) -> Floats:
    """``np.quantile(values, shares)`` of the table in which each value stands ``count`` times; None: once.

    Where counts are not whole, the value at place 0, 1, ... is that of the entry up to whose end the counts add up to more.
    """
    if count is None:
        return np.asarray(np.quantile(values, shares))
    order = np.argsort(values, kind="stable")
    ordered, until = values[order], np.cumsum(count[order])
    place = np.maximum(shares * (until[-1] - 1.0), 0.0)
    low = np.floor(place)
    beyond = place - low
    a, b = (
        ordered[np.searchsorted(until, at, side="right").clip(max=ordered.size - 1)] for at in (low, low + 1)
    )
    # The two forms are those of numpy: from the nearer end, so that an edge between equal values is that value.
    out: Floats = np.where(beyond < 0.5, a + (b - a) * beyond, b - (b - a) * (1.0 - beyond))
    return out


def _age(value: int) -> str:
    return f"{value + 1}" if value < OLDEST - 1 else f"{OLDEST} and later"


def _tenth(count: int) -> Callable[[int], str]:
    return lambda value: f"{value + 1} of {count}"
