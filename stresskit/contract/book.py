"""Loans of the book whose contract terms or moving columns are not known: they are reported, not projected."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.collateral import CollateralShortfall
from stresskit.contract.history import REASON
from stresskit.contract.paths import ContractPaths, index_ratio
from stresskit.core.values import Portfolio


def book_reasons(
    portfolio: Portfolio, contracts: ContractPaths | None, collateral: CollateralShortfall | None
) -> NDArray[Any]:
    """(n,) object: why a loan cannot be projected along any path, "" where it can."""
    reasons = np.full(portfolio.n_loans, "", dtype=object)

    def mark(bad: NDArray[np.bool_], reason: str) -> None:
        reasons[bad & (reasons == "")] = reason

    everyone = np.arange(portfolio.n_loans)
    if contracts is not None:
        for term, bad in (contracts.rate_paths.lacking() | contracts.schedules.lacking()).items():
            mark(bad, f"missing_term: {term}")
        usable = np.flatnonzero(reasons == "")
        for name, values in contracts.columns(usable, 1).items():
            bad = np.zeros(portfolio.n_loans, dtype=bool)
            bad[usable] = ~np.isfinite(values[:, 0])
            mark(bad, f"{REASON}: {name}")
    if collateral is not None:
        known = np.isfinite(collateral.proceeds) & (collateral.proceeds >= 0.0)
        mark(~known, "missing_term: loss.lgd.collateral.value")
        if collateral.levels is not None:
            base, _ = index_ratio(
                collateral.levels, portfolio, everyone, np.arange(1), collateral.collateral.valued
            )
            mark(
                ~np.isfinite(np.broadcast_to(base[:, 0], everyone.shape)),
                "missing_term: loss.lgd.collateral.index",
            )
    return reasons


def without(portfolio: Portfolio, out: NDArray[np.bool_]) -> Portfolio:
    """The portfolio without some of its loans."""
    keep = ~out
    return Portfolio(
        frequency=portfolio.frequency,
        as_of=portfolio.as_of,
        loan_ids=portfolio.loan_ids[keep],
        age=portfolio.age[keep],
        remaining=portfolio.remaining[keep],
        balance=portfolio.balance[keep],
        rate=portfolio.rate[keep],
        static={name: column[keep] for name, column in portfolio.static.items()},
        count=None if portfolio.count is None else portfolio.count[keep],
    )
