"""What the loan history knows of each row's contract at the START of its period."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import frozen

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class ContractRows:
    """Rows of a risk set, in its order; all (R,) float64, NaN where not known.

    balance   outstanding at the end of the period before; in a loan's first period on book the amount at origination
    rate      nominal annual fraction in force at the end of the period before
    maturity  period ordinal of the contract's end
    money     what the reconciliation counts as the row's balance
    per_loan  layout spells: one row of input stands for the whole stay, and money repeats along it
    """

    balance: Floats
    rate: Floats
    maturity: Floats
    money: Floats
    per_loan: bool

    def __post_init__(self) -> None:
        for f in fields(self):
            if f.name != "per_loan":
                object.__setattr__(self, f.name, frozen(getattr(self, f.name)))
