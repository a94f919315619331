"""Stages of single loans worked out by hand in every branch, and the stock of defaults cohort by cohort."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.loss.staging import StagePoint, default_stock, in_stage_2, stage_measures
from stresskit.spec.provisions import Staging

BOTH = {"ratio": 2.0, "increase": 0.01}

#: name: (rule, lifetime PD, at origination, 12-month PD, past due, stage 2?)
BRANCHES = {
    "both exceeded": (BOTH, 0.050, 0.020, 0.010, None, True),
    "both: twice as high, but by too little": (BOTH, 0.015, 0.006, 0.003, None, False),
    "both: much higher, but not twice": (BOTH, 0.150, 0.100, 0.030, None, False),
    "either: twice is enough": ({**BOTH, "combine": "either"}, 0.015, 0.006, 0.003, None, True),
    "either: much is enough": ({**BOTH, "combine": "either"}, 0.150, 0.100, 0.030, None, True),
    "either: neither": ({**BOTH, "combine": "either"}, 0.015, 0.010, 0.003, None, False),
    "ratio alone": ({"ratio": 2.0}, 0.015, 0.006, 0.003, None, True),
    "ratio alone: exactly twice is not more": ({"ratio": 2.0}, 0.012, 0.006, 0.003, None, False),
    "increase alone": ({"increase": 0.01}, 0.150, 0.100, 0.030, None, True),
    "increase alone: too little": ({"increase": 0.01}, 0.105, 0.100, 0.030, None, False),
    "backstop whatever it was": ({**BOTH, "backstop_pd": 0.2}, 0.5, 0.5, 0.21, None, True),
    "backstop: at it is not above it": ({**BOTH, "backstop_pd": 0.2}, 0.5, 0.5, 0.20, None, False),
    "backstop by itself": ({"backstop_pd": 0.2}, 0.5, 0.01, 0.19, None, False),
    "low risk takes back": ({"ratio": 2.0, "low_risk": 0.003}, 0.015, 0.006, 0.003, None, False),
    "low risk: just above": ({"ratio": 2.0, "low_risk": 0.003}, 0.015, 0.006, 0.0031, None, True),
    "past due has the last word": ({"ratio": 2.0, "low_risk": 0.003}, 0.001, 0.006, 0.001, True, True),
    "not past due": ({"ratio": 2.0}, 0.001, 0.006, 0.001, False, False),
    "nothing at origination": ({"ratio": 2.0}, 0.001, 0.0, 0.001, None, True),
    "no life left": ({"ratio": 2.0}, 0.0, 0.0, 0.0, None, False),
}  # fmt: skip


@pytest.mark.parametrize("name", BRANCHES)
def test_every_branch_of_the_trigger(name: str) -> None:
    rule, lifetime, origin, year, late, expected = BRANCHES[name]
    point = StagePoint(np.array([lifetime]), np.array([origin]), np.array([year]))
    past_due = None if late is None else np.array([late])
    assert in_stage_2(point, Staging.model_validate(rule), past_due).tolist() == [expected]


def test_impairment_of_two_loans_by_hand() -> None:
    """Stage 1: 12-month loss; stage 2: the rest of life; balances and numbers as expected amounts."""
    found = stage_measures(
        np.array([False, True]), on_book=np.array([0.9, 0.8]), balance=np.array([90.0, 160.0]),
        el_year=np.array([1.5, 2.5]), el_rest=np.array([4.0, 7.0]),
    )  # fmt: skip
    assert found["loans_stage_1"].tolist() == [0.9, 0.0]
    assert found["loans_stage_2"].tolist() == [0.0, 0.8]
    assert found["balance_stage_1"].tolist() == [90.0, 0.0]
    assert found["balance_stage_2"].tolist() == [0.0, 160.0]
    assert found["impairment_stage_1"].tolist() == [1.5, 0.0]
    assert found["impairment_stage_2"].tolist() == [0.0, 7.0]


def test_defaults_stay_for_the_declared_year_ends() -> None:
    """as_of in December 2025; 7 defaulted in 2024, 5 in 2025; 10, 20, 30 default in 2026 to 2028; two year ends each."""
    inflow = np.array([[0.0, 10.0, 20.0, 30.0]])
    stock = default_stock(
        inflow, np.array([[7.0, 5.0]]), np.array([2024, 2025]), np.array([2025, 2026, 2027, 2028]), 2
    )
    assert stock.held.tolist() == [[12.0, 15.0, 30.0, 50.0]]
    assert stock.left.tolist() == [[0.0, 7.0, 5.0, 10.0]]


def test_stock_within_the_year_of_as_of() -> None:
    """as_of in June 2025: the bucket to December 2025 is the calendar year of the opening defaults too."""
    inflow = np.array([[0.0, 4.0, 20.0]])
    stock = default_stock(inflow, np.array([[5.0]]), np.array([2025]), np.array([2025, 2025, 2026]), 1)
    assert stock.held.tolist() == [[5.0, 9.0, 20.0]]
    assert stock.left.tolist() == [[0.0, 0.0, 9.0]]


@pytest.mark.parametrize("stays", [1, 2, 5])
def test_what_comes_in_is_held_or_has_left(stays: int) -> None:
    rng = np.random.default_rng(5)
    inflow = np.concatenate([np.zeros((3, 1)), rng.uniform(0, 9, (3, 6))], axis=1)
    opening = rng.uniform(0, 9, (3, stays))
    years = np.arange(2025, 2032)
    stock = default_stock(inflow, opening, np.arange(2026 - stays, 2026), years, stays)
    entered = opening.sum(axis=1)[:, None] + np.cumsum(inflow, axis=1)
    np.testing.assert_allclose(stock.held + np.cumsum(stock.left, axis=1), entered, rtol=0, atol=1e-12)
