"""Terms of the contracts of a book, as one number per loan."""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def per_loan(term: str | float | None, static: Mapping[str, NDArray[Any]], n: int, missing: float) -> Floats:
    """(n,) a term that is a column, a number, or not stated (``missing``)."""
    if isinstance(term, str):
        return np.asarray(static[term], dtype=np.float64)
    return np.full(n, missing if term is None else float(term))


def rate_scale(study: Study) -> float:
    """Factor that makes a number in loans.rate_unit an annual fraction."""
    return 0.01 if study.loans.rate_unit == "percent" else 1.0


def periods_of(months: int, frequency: Frequency) -> int:
    """Model periods in so many months; 0 when they are no whole number of periods."""
    each = 12 // frequency.per_year
    return months // each if months % each == 0 else 0


def codes_of(
    column: NDArray[Any], known: Collection[str], *, place: str, by: str, ids: Callable[[], NDArray[Any]]
) -> Ints:
    """(n,) position in ``known`` of each loan's value of column ``by``. Raises DataError for any other value."""
    names = list(known)
    code, found = pd.factorize(np.asarray(column), use_na_sentinel=False)
    place_of = {name: i for i, name in enumerate(names)}
    out = np.array([place_of.get(str(v), -1) for v in found], dtype=np.int64)[code]
    unknown = out < 0
    if unknown.any():
        values = sorted({str(found[i]) for i in np.unique(code[unknown])})
        raise DataError(
            f"{place} says nothing about some values of {by}: {', '.join(map(repr, values[:5]))}",
            [
                Problem(
                    "value_not_declared",
                    f"loans whose {by} is not among the values of {place}",
                    int(unknown.sum()),
                    tuple(map(str, ids()[unknown][:5])),
                    f"Add the values; it has {sorted(names)}.",
                )
            ],
        )
    return np.asarray(out, dtype=np.int64)


def origination(portfolio: Portfolio, loans: Ints) -> Ints:
    """(b,) period ordinal of these loans' first period on book."""
    return portfolio.as_of - portfolio.age[loans] + 1
