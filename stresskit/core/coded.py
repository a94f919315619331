"""Loan columns as codes: text is looked at once per loan, whoever asks after that works with small numbers."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pandas as pd

from stresskit.core.values import Coded, Portfolio, frozen

#: A loan column by its name, as codes. Raises KeyError for one that is not there.
Coder = Callable[[str], Coded]


def coded(portfolio: Portfolio, name: str) -> Coded:
    """A loan column as codes; kept with the portfolio, whose columns do not change.

    Values that are missing (NaN, None) share a code of their own. Raises KeyError for a column that is not there.
    """
    found = portfolio.coded.get(name)
    if found is None:
        column = portfolio.static[name]
        codes, values = pd.factorize(column)
        lost = codes < 0  # what pandas takes for missing; told apart here, which is faster than asking it to
        if lost.any():
            codes = np.where(lost, len(values), codes)
            values = np.append(np.asarray(values), column[lost][:1])
        found = Coded(frozen(codes.astype(np.int32)), frozen(np.asarray(values)))
        portfolio.coded[name] = found
    return found


def coder(portfolio: Portfolio) -> Coder:
    """The columns of a portfolio by name."""
    return lambda name: coded(portfolio, name)
