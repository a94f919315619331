"""What an assessment of a book along one path finds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.kernels.lanes import CELL_ROWS, LOAN_ROWS

Floats = NDArray[np.float64]

LOAN_MEASURES = LOAN_ROWS
CELL_MEASURES = CELL_ROWS
#: Measures of loans that are amounts; the others are probabilities.
AMOUNTS = ("el_12m", "el_lifetime", "exposed_lifetime")
#: Measures of cells that are numbers of loans; the others are amounts.
NUMBERS = ("on_book", "matured", "default", "payoff")


@dataclass(frozen=True, slots=True)
class LossResult:
    """One path's losses.

    loans  measure -> (n,): probabilities; el_* and exposed_lifetime (sum of q_d * EAD * D, the
           denominator of the loss-weighted LGD) are amounts; extrapolated and beyond_path are the parts of
           pd_lifetime from ages beyond the last supported one and from steps after the last given path value
    cells  measure -> (cells, H): on_book and matured are expected numbers of loans at the END of the step,
           default and payoff numbers leaving in it; balance is the expected performing balance at its
           START; default_amount is q_d * EAD, exposed the same discounted, el the discounted loss

    Where entries of the portfolio stand for several loans (Portfolio.count), probabilities are those of one of them,
    amounts those of all, numbers of loans go by the counts.
    """

    loans: Mapping[str, Floats]
    cells: Mapping[str, Floats]
