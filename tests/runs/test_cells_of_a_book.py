"""Segments whose values or names could be taken for something else."""

from __future__ import annotations

import numpy as np

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.loss.assess import CELL_MEASURES, LOAN_MEASURES, LossResult
from stresskit.runs.loan_rows import LoanRows
from stresskit.runs.tables import make_cells, summary_table


def book(**static: list[str]) -> Portfolio:
    n = len(next(iter(static.values())))
    whole = np.arange(1, n + 1, dtype=np.int64)
    return Portfolio(
        Frequency.MONTH, 24000, np.array([f"L{i}" for i in range(n)], dtype=object), whole, whole,
        whole * 100.0, np.full(n, 0.05), {k: np.array(v, dtype=object) for k, v in static.items()},
    )  # fmt: skip


def result(n: int, cells: int) -> LossResult:
    return LossResult(
        {m: np.arange(1.0, n + 1) for m in LOAN_MEASURES}, {m: np.ones((cells, 3)) for m in CELL_MEASURES}
    )


def test_labels_that_would_collide_stay_apart() -> None:
    portfolio = book(product=["a", "a / b", "a"], place=["b / c", "c", "c"])
    cells = make_cells(portfolio, ("product", "place"))
    table = summary_table(portfolio, cells, {"one": result(3, cells.count)})
    assert cells.count == 3
    crossed = table[table["by"] == "product+place"]
    assert sorted(crossed["segment"]) == [
        "product='a / b', place='c'", "product='a', place='b / c'", "product='a', place='c'",
    ]  # fmt: skip
    by_product = table[table["by"] == "product"].set_index("segment")
    assert by_product.loc["a", "exposure"] == 400.0
    assert by_product.loc["a / b", "exposure"] == 200.0
    for by in table["by"].unique():
        assert table.loc[table["by"] == by, "el_lifetime"].sum() == 6.0


def test_segments_named_like_results_lose_nothing() -> None:
    portfolio = book(loan=["x", "y"], scenario=["p", "q"], balance=["high", "low"])
    cells = make_cells(portfolio, ("loan", "scenario", "balance"))
    table = LoanRows(portfolio, ("loan", "scenario", "balance"), {"one": result(2, cells.count)}).frame()
    assert table["loan"].tolist() == ["L0", "L1"]
    assert table["scenario"].tolist() == ["one", "one"]
    assert table["balance"].tolist() == [100.0, 200.0]
    assert table["loan (loan column)"].tolist() == ["x", "y"]
    assert table["balance (loan column)"].tolist() == ["high", "low"]
