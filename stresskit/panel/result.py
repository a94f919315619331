"""What the panel room hands on: risk set, book, and the account of every row."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.contract_rows import ContractRows
from stresskit.core.values import Portfolio, RiskSet

Severity = Literal["note", "warning", "error"]


@dataclass(frozen=True, slots=True)
class Finding:
    """One quality rule that found something.

    code      name of the rule, the key under loans.rules
    policy    what was done: "reject", "leave_out", "keep", or the study's own choice for this case
    severity  "note" (worth knowing), "warning" (changes what is used), "error" (stopped the run)
    count     cases found: rows, loans or levels, as the message says
    first     up to five cases, "loan @ period" for rows of a panel, else the loan or the level
    message   one sentence for the reader
    """

    code: str
    policy: str
    severity: Severity
    count: int
    first: tuple[str, ...]
    message: str


@dataclass(frozen=True, slots=True)
class DefaultedBook:
    """Loans of the history that have defaulted by as_of.

    loans   k loans; balance is what was owed in the row of the default, NaN when unknown; remaining means nothing
    period  (k,) ordinal of the period of default
    """

    loans: Portfolio
    period: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class LoanData:
    """The loan history as the later rooms need it, and the account of how it came about.

    risk_set        who was at risk of what, and when
    portfolio       the loans to project from the period after as_of
    reconciliation  what ("in", "left out", "used"), reason, rows, loans, events_default,
                    events_payoff, balance; "in" = "used" + the sum of "left out" in every column
    findings        every quality rule that found something, in the order of the rules
    not_projected   loan, reason, balance of every loan on book at as_of that is not in the portfolio
    digests         file name -> SHA-256 of its bytes, in hexadecimal
    defaulted       loans that have defaulted by as_of; None when the book is a file of its own
    contracts       what moving columns are computed from, None when no hazard reads one
    """

    risk_set: RiskSet
    portfolio: Portfolio
    reconciliation: pd.DataFrame
    findings: tuple[Finding, ...]
    not_projected: pd.DataFrame
    digests: Mapping[str, str] = field(default_factory=lambda: MappingProxyType({}))
    defaulted: DefaultedBook | None = None
    contracts: ContractRows | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "digests", MappingProxyType(dict(self.digests)))


def loans_alike(not_projected: pd.DataFrame) -> NDArray[np.float64]:
    """(n,) how many loans each row of ``not_projected`` is: by its count where it has one, else one."""
    if "count" not in not_projected:
        return np.ones(len(not_projected))
    return not_projected["count"].fillna(1.0).to_numpy(dtype=np.float64)
