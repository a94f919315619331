"""What those who watch the loss year by year are given."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class YearFlows:
    """Some loans of a book along one path, by bucket of steps; all but ``loans`` and ``edges`` are (b, Y).

    loans           (b,) indices into the portfolio
    edges           (Y,) last step of each bucket, ascending; a bucket starts after the one before, the first in step 1.
                    For calendar years the first bucket runs from as_of + 1 to the end of its calendar year
    default, payoff, matured   probability of leaving so in the bucket, seen from as_of
    survival        probability of being on book at the bucket's end: not defaulted, paid off or matured
    balance         expected performing balance at the bucket's end: survival x scheduled balance
    default_amount  sum over the bucket of q_d * EAD
    loss            the same times LGD, not discounted
    el              the same discounted to as_of
    discount        factor from the bucket's end to as_of, at the loan's discount rate

    A loan whose life ends inside a bucket adds nothing in later ones; steps past a cap belong to no bucket.
    """

    loans: Ints
    edges: Ints
    default: Floats
    payoff: Floats
    matured: Floats
    survival: Floats
    balance: Floats
    default_amount: Floats
    loss: Floats
    el: Floats
    discount: Floats


OnYears = Callable[[YearFlows], None]
