"""Expected loss of a book under one path: per loan, and per cell of the finest breakdown and step."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.book import Route, prepare_book
from stresskit.loss.interfaces import OnYears
from stresskit.loss.lgd import LgdSource
from stresskit.loss.result import CELL_MEASURES, LOAN_MEASURES, LossResult
from stresskit.projection.interfaces import ContractPaths
from stresskit.spec.study import Loss

__all__ = ["CELL_MEASURES", "LOAN_MEASURES", "LossResult", "assess"]

Ints = NDArray[np.int64]


def assess(
    portfolio: Portfolio,
    fits: Mapping[str, HazardFit],
    features: FeatureTable,
    loss: Loss,
    *,
    cells: Ints,
    n_cells: int,
    cap: int | None = None,
    contracts: ContractPaths | None = None,
    lgd: LgdSource | None = None,
    years: Sequence[int] | None = None,
    on_years: OnYears | None = None,
    threads: int = 1,
    progress: Callable[[int, int], None] | None = None,
) -> LossResult:
    """Project the book along one path and put money on it.

    cells      (n,) index of each loan's cell in the finest breakdown, 0 <= cell < n_cells
    cap        largest number of steps
    contracts  balances, rates, exposures and moving columns along the path; default: the study's schedule
    lgd        where LGD comes from; default: what ``loss.lgd`` declares
    years      last steps of the buckets of which on_years is told, ascending; on_years is called block by block,
               always in the same order, with every loan once
    threads    the result is the same bits for any number of them
    progress   told how many of how many blocks are done

    Several paths of one book: :func:`stresskit.loss.book.prepare_book`, which shares the work they have in common.
    Raises what :func:`stresskit.projection.project.check_path` raises, DataError for a missing loan column.
    """
    if portfolio.n_loans == 0:
        return LossResult(
            {m: np.zeros(0) for m in LOAN_MEASURES}, {m: np.zeros((n_cells, 0)) for m in CELL_MEASURES}
        )
    book = prepare_book(
        portfolio, fits, loss, cells=cells, n_cells=n_cells, cap=cap, lgd=lgd, threads=threads
    )
    route = Route(features, contracts, on_years)
    return book.along([route], years=years, threads=threads, progress=progress)[0]
