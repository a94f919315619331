"""The loan table, scenario after scenario: rows are made when they are asked for, so that a large book's never stand in memory together."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.loss.result import LossResult

#: Columns of the loan table that are ours; a segment of the same name is marked as a loan column.
_OURS = (
    "scenario", "loan", "balance", "age", "remaining", "pd_12m", "pd_lifetime", "pd_no_payoff",
    "payoff_lifetime", "lgd", "el_12m", "el_lifetime",
)  # fmt: skip


def _free(name: str, *, counted: bool = False) -> str:
    return f"{name} (loan column)" if name in _OURS or (counted and name == "count") else name


@dataclass(slots=True, eq=False)
class LoanRows:
    """A row per scenario and loan; where the book has counts, with them: probabilities are of one loan, amounts of all.

    segments  loan columns that stand in the table
    results   scenario -> measures of each loan
    stages    scenario -> (n,) stage at as_of, 0 for none; no column without any
    """

    portfolio: Portfolio
    segments: tuple[str, ...]
    results: Mapping[str, LossResult]
    stages: Mapping[str, NDArray[np.int8]] = field(default_factory=dict)
    _whole: pd.DataFrame | None = field(default=None, init=False, repr=False)

    def __len__(self) -> int:
        return self.portfolio.n_loans * len(self.results)

    def frame(self) -> pd.DataFrame:
        """All rows, made on the first call and kept."""
        if self._whole is None:
            self._whole = self.part(0, len(self))
        return self._whole

    def part(self, start: int, stop: int) -> pd.DataFrame:
        """Rows start .. stop - 1."""
        n, pieces, counts = self.portfolio.n_loans, [], self.portfolio.count
        for k, (scenario, result) in enumerate(self.results.items()):
            low, high = max(start - k * n, 0), min(stop - k * n, n)
            if low < high:
                pieces.append((scenario, result, slice(low, high)))
        columns: dict[str, Any] = {
            "scenario": np.repeat(
                np.array([s for s, _, _ in pieces], dtype=object), [at.stop - at.start for _, _, at in pieces]
            ),
            "loan": self._of_loans(self.portfolio.loan_ids, pieces),
            **{
                _free(c, counted=counts is not None): self._of_loans(self.portfolio.static[c], pieces)
                for c in self.segments
            },
            **{
                c: self._of_loans(getattr(self.portfolio, c), pieces) for c in ("balance", "age", "remaining")
            },
            **({} if counts is None else {"count": self._of_loans(counts, pieces)}),
        }

        def measure(name: str) -> NDArray[np.float64]:
            return np.concatenate([r.loans[name][at] for _, r, at in pieces] or [np.zeros(0)])

        columns |= {m: measure(m) for m in ("pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime")}
        loss, exposed = measure("el_lifetime"), measure("exposed_lifetime")
        columns["lgd"] = np.divide(loss, exposed, out=np.full(loss.shape, np.nan), where=exposed > 0)
        columns |= {"el_12m": measure("el_12m"), "el_lifetime": loss}
        if self.stages:
            none = np.zeros(n, dtype=np.int8)
            stage = np.concatenate([self.stages.get(s, none)[at] for s, _, at in pieces] or [none[:0]])
            columns["stage"] = pd.arrays.IntegerArray(stage, stage == 0)
        return pd.DataFrame(columns, copy=False)

    def typed(self) -> pd.DataFrame:
        """A few rows from which the type of every column shows: of each the first that holds a value."""
        known = {0} | {int(pd.notna(self.portfolio.static[c]).argmax()) for c in self.segments}
        return pd.concat([self.part(i, i + 1) for i in sorted(known)], ignore_index=True)

    @staticmethod
    def _of_loans(values: NDArray[Any], pieces: Sequence[tuple[str, LossResult, slice]]) -> NDArray[Any]:
        return np.concatenate([values[at] for _, _, at in pieces] or [values[:0]])
