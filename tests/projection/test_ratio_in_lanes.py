"""Balance over value worked out in the lanes, against the same column loan by loan and step by step."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import mpmath
import numpy as np
import pytest

from stresskit.contract.balances import Balances, ScheduleTerms
from stresskit.contract.index import IndexLevels
from stresskit.contract.paths import ContractPaths
from stresskit.contract.rates import RatePaths
from stresskit.core.period import Frequency
from stresskit.hazard.result import HazardFit, MovingTerm
from stresskit.kernels.compiled import compiled
from stresskit.kernels.odds import LIMIT, exp_lanes
from stresskit.kernels.vectors import load, store
from stresskit.loss.book import Route, prepare_book
from stresskit.spec.exposure import Schedule
from stresskit.spec.moving import BalanceOverValue
from tests.oracle.worlds import AS_OF, fitted, table
from tests.projection.world import THREE, TWO, book, losses

MONTH = Frequency.MONTH
LOSS = losses()


class OnValue:
    """A hazard with ``slope`` times balance over value, less ``centre``, or its logarithm, on top."""

    moving_columns = ("over",)

    def __init__(self, fit: HazardFit, slope: float, logged: bool) -> None:
        self._fit, self._term = fit, MovingTerm("over", slope, 0.4, logged)

    def __getattr__(self, name: str) -> Any:
        return getattr(self._fit, name)

    def moving_term(self) -> MovingTerm:
        return self._term

    def moving_part(self, values: Any) -> np.ndarray:
        x = np.log(values["over"]) if self._term.logged else values["over"]
        return np.asarray(self._term.slope * (x - self._term.centre))


def contracts(portfolio: Any, valued: str, *, seed: int, plain: bool) -> ContractPaths:
    n, rng = portfolio.n_loans, np.random.default_rng(seed)
    none, everyone = np.zeros(n), np.ones(n, dtype=bool)
    terms = ScheduleTerms(
        Schedule(accrued=1.5), everyone, none.astype(np.int64), none, none, none, None, None
    )
    column = BalanceOverValue.model_validate(
        {"balance_over_value": {"value": "value", "index": {"by": "area", "of": {"a": "x", "b": "y"}}, "valued": valued}}
    )  # fmt: skip
    start, moves = portfolio.as_of - 70, np.random.default_rng(0).normal(0, 0.02, (2, 140))
    moves[:, 71:] = rng.normal(0, 0.02, (2, 69))  # one history, a path of its own
    levels = IndexLevels(start, np.exp(np.cumsum(moves, axis=1)), np.arange(n) % 2)
    return ContractPaths(
        portfolio, RatePaths(portfolio, ()), Balances(portfolio, (terms,)), {"over": column}, {"over": levels},
        np.zeros(60, dtype=bool), plain,
    )  # fmt: skip


def valued_book(n: int) -> Any:
    portfolio = book(n)
    value = np.random.default_rng(8).uniform(4e4, 3e5, n)
    return replace(
        portfolio, balance=np.maximum(portfolio.balance, 10.0), static=portfolio.static | {"value": value}
    )


@pytest.mark.parametrize("name", [TWO, THREE])
@pytest.mark.parametrize("logged", [False, True])
@pytest.mark.parametrize("valued", ["origination", "as_of"])
def test_lanes_give_the_figures_of_loan_by_loan(name: str, logged: bool, valued: str) -> None:
    portfolio = valued_book(1200)
    fits = {
        c: OnValue(f, 0.9, logged) if c in ("default", "payoff") else f
        for c, f in fitted(name, MONTH).items()
    }
    cells = np.arange(1200) % 5
    ready = prepare_book(portfolio, fits, LOSS, cells=cells, n_cells=5, cap=45)
    path = table(MONTH, AS_OF[MONTH] + 1, 60, seed=3)
    fast = [Route(path, contracts(portfolio, valued, seed=k, plain=True)) for k in (1, 2)]
    assert len(ready._jobs(fast, np.zeros(0, dtype=np.int64), np.zeros((2, 1200, 9)))) == 1
    found = ready.along(fast)
    for k, mine in zip((1, 2), found, strict=True):
        slow = ready.along([Route(path, contracts(portfolio, valued, seed=k, plain=False))])[0]
        for what in ("loans", "cells"):
            for measure, values in getattr(slow, what).items():
                size = max(1.0, float(np.abs(values).max()))
                np.testing.assert_allclose(
                    getattr(mine, what)[measure], values, rtol=0, atol=1e-12 * size, err_msg=measure
                )
    assert (found[0].loans["pd_lifetime"] != found[1].loans["pd_lifetime"]).any()
    for threads in (2, 3):
        for one, two in zip(found, ready.along(fast, threads=threads), strict=True):
            for measure, values in one.loans.items():
                np.testing.assert_array_equal(values, two.loans[measure])


@compiled
def _exponentials(x: np.ndarray, out: np.ndarray) -> None:
    for i in range(0, x.size, 8):
        store(out, i, exp_lanes(load(x, i)))


def test_exponentials_of_lanes() -> None:
    x = np.concatenate([np.linspace(-LIMIT, LIMIT, 4000), np.linspace(-1.0, 1.0, 2000)])
    out = np.empty_like(x)
    _exponentials(x, out)
    with mpmath.workdps(40):
        apart = [
            abs(float(mpmath.mpf(float(o)) / mpmath.exp(mpmath.mpf(float(v))) - 1)) for o, v in zip(out, x)
        ]
    assert max(apart) < 5e-16
    ends = np.array([-np.inf, -1e300, 1e300, np.inf, 0.0, 0.0, 0.0, 0.0])
    _exponentials(ends, out)
    np.testing.assert_allclose(
        out[:5], [np.exp(-LIMIT), np.exp(-LIMIT), np.exp(LIMIT), np.exp(LIMIT), 1.0], rtol=1e-13
    )
