"""Loss given default: one interface, and the two kinds that do not change along the path."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from stresskit.core.coded import coded
from stresskit.core.errors import DataError, NumericError, Problem
from stresskit.core.values import Portfolio, frozen
from stresskit.spec.study import ConstantLgd, Lgd, SegmentLgd

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class LgdSource(Protocol):
    """Where LGD comes from: constant, by segment, collateral along the path, a recovery curve."""

    def tile(self, loans: Ints, steps: int, exposure: Floats) -> Floats:
        """(b,) or (b, steps) loss as a fraction of EAD for a default in step h; ``exposure`` (b, steps) is EAD."""


@dataclass(frozen=True, slots=True, eq=False)
class StaticLgd:
    """LGD (n,) of each loan of the book, whenever it defaults."""

    values: Floats

    def __post_init__(self) -> None:
        object.__setattr__(self, "values", frozen(self.values))

    def tile(self, loans: Ints, steps: int, exposure: Floats) -> Floats:
        return np.asarray(self.values[loans])


@dataclass(frozen=True, slots=True)
class PathLgd:
    """Stands where every path brings its own source."""

    def tile(self, loans: Ints, steps: int, exposure: Floats) -> Floats:
        raise NumericError(
            "loss.lgd depends on the path here (collateral or recovery), and the path brought no source of it"
        )


def lgd_per_loan(lgd: ConstantLgd | SegmentLgd, portfolio: Portfolio) -> Floats:
    """(n,) loss given default of each loan, a fraction of EAD. Raises DataError for a value without an LGD."""
    if isinstance(lgd, ConstantLgd):
        return np.full(portfolio.n_loans, lgd.constant)
    column = coded(portfolio, lgd.by)
    code, names = column.codes, [str(v) for v in column.values]
    strange = np.array([v not in lgd.values for v in names], dtype=np.bool_)
    unknown = strange[code] if strange.any() else strange[:0]
    if unknown.any():
        values = sorted({name for name, lost in zip(names, strange, strict=True) if lost})
        raise DataError(
            f"loss.lgd gives no value for some loans: {lgd.by} has {', '.join(map(repr, values[:5]))}",
            [
                Problem(
                    "lgd_missing",
                    f"loans whose {lgd.by} has no LGD",
                    int(unknown.sum()),
                    tuple(map(str, portfolio.loan_ids[unknown][:5])),
                    f"Add the values under loss.lgd.values; it has {sorted(lgd.values)}.",
                )
            ],
        )
    by_name: Floats = np.array([lgd.values[v] for v in names], dtype=np.float64)
    return by_name[code]


def lgd_source(lgd: Lgd, portfolio: Portfolio) -> LgdSource:
    """The source that a study's ``loss.lgd`` declares; for a kind that depends on the path, one that refuses to answer.

    Raises DataError for a value without an LGD.
    """
    if isinstance(lgd, ConstantLgd | SegmentLgd):
        return StaticLgd(lgd_per_loan(lgd, portfolio))
    return PathLgd()
