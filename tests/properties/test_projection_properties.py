"""What holds for any book, hazard and path (the invariants of the method)."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.loss.assess import LossResult, assess
from stresskit.projection.project import project
from stresskit.spec.terms import HazardSpec
from tests.oracle.worlds import HAZARDS, Case, fitted, history, worlds

TWO = "two causes, two links, interactions"
each_hazard = pytest.mark.parametrize("name", HAZARDS)
MONTHS, QUARTERS = worlds(Frequency.MONTH), worlds(Frequency.QUARTER)


def assessed(case: Case, fits: dict[str, HazardFit], *, cells: int = 1) -> LossResult:
    codes = np.arange(case.portfolio.n_loans) % cells
    return assess(case.portfolio, fits, case.path, case.loss, cells=codes, n_cells=cells, cap=case.cap)


def of_size(case: Case) -> float:
    return max(1.0, float(case.portfolio.balance.sum()))


def taken(book: Portfolio, order: np.ndarray) -> Portfolio:
    """The loans in another order, under other names."""
    names = np.array([f"other {i:03d}" for i in range(book.n_loans)], dtype=object)
    return replace(
        book, loan_ids=names, age=book.age[order], remaining=book.remaining[order], balance=book.balance[order],
        rate=book.rate[order], static={k: v[order] for k, v in book.static.items()},
    )  # fmt: skip


@each_hazard
@given(case=st.one_of(MONTHS, QUARTERS))
@settings(max_examples=20, deadline=None)
def test_survival_falls_and_shares_add_up(name: str, case: Case) -> None:
    p = project(case.portfolio, fitted(name, case.portfolio.frequency), case.path, cap=case.cap)
    assert ((p.survival >= 0) & (p.survival <= 1)).all()
    assert (np.diff(p.survival, axis=1, prepend=1.0) <= 0).all()
    whole = p.survival + sum(np.cumsum(flow, axis=1) for flow in p.flows.values())
    np.testing.assert_allclose(whole, 1.0, rtol=0, atol=1e-12)
    for flow in p.flows.values():
        assert (flow >= 0).all()
    assert (p.pd_lifetime() <= p.pd_no_payoff() + 1e-12).all()
    assert (p.pd_within(case.portfolio.frequency.per_year) <= p.pd_lifetime() + 1e-15).all()


@given(case=st.one_of(MONTHS, QUARTERS))
@settings(max_examples=30, deadline=None)
def test_on_book_matured_default_and_payoff_are_all_loans(case: Case) -> None:
    result = assessed(case, fitted(TWO, case.portfolio.frequency), cells=2)
    c = result.cells
    gone = np.cumsum(c["default"] + c["payoff"], axis=1)
    loans = np.bincount(np.arange(case.portfolio.n_loans) % 2, minlength=2)[:, None]
    np.testing.assert_allclose(
        c["on_book"] + c["matured"] + gone, np.broadcast_to(loans, gone.shape), rtol=0, atol=1e-12
    )
    assert (np.diff(c["matured"], axis=1, prepend=0.0) >= -1e-12).all()
    if case.cap is None:
        np.testing.assert_allclose(c["on_book"][:, -1], 0.0, rtol=0, atol=1e-12)


@each_hazard
@given(case=st.one_of(MONTHS, QUARTERS))
@settings(max_examples=20, deadline=None)
def test_loss_lies_between_nothing_and_the_discounted_exposure(name: str, case: Case) -> None:
    r = assessed(case, fitted(name, case.portfolio.frequency)).loans
    slack = 1e-12 * of_size(case)
    assert (r["el_lifetime"] >= 0).all()
    assert (r["el_12m"] <= r["el_lifetime"] + slack).all()
    assert (r["el_lifetime"] <= r["exposed_lifetime"] + slack).all()
    # The exposure of a loan at its largest, discounted over the shortest wait.
    book, loss = case.portfolio, case.loss
    per_period = np.maximum(book.rate, 0) / book.frequency.per_year
    top = book.balance * (1 + loss.exposure.accrued * per_period)
    if loss.discount in ("none", 0.0, 0.07) or (loss.discount == "rate" and (book.rate >= 0).all()):
        assert (r["exposed_lifetime"] <= top * r["pd_lifetime"] + slack).all()


@each_hazard
@given(case=MONTHS)
@settings(max_examples=10, deadline=None)
def test_an_identical_scenario_gives_identical_bits(name: str, case: Case) -> None:
    fits = fitted(name, case.portfolio.frequency)
    again = FeatureTable(
        case.path.frequency, case.path.start, case.path.names, case.path.values.copy(), case.path.flags.copy()
    )
    one, two = assessed(case, fits, cells=2), assessed(replace(case, path=again), fits, cells=2)
    for ours, theirs in ((one.loans, two.loans), (one.cells, two.cells)):
        for measure in ours:
            np.testing.assert_array_equal(ours[measure], theirs[measure])


@each_hazard
@given(case=MONTHS, cells=st.integers(2, 4))
@settings(max_examples=10, deadline=None)
def test_segments_sum_to_the_portfolio(name: str, case: Case, cells: int) -> None:
    fits = fitted(name, case.portfolio.frequency)
    whole, parts = assessed(case, fits), assessed(case, fits, cells=cells)
    for measure, values in whole.cells.items():
        np.testing.assert_allclose(
            parts.cells[measure].sum(axis=0), values[0], rtol=1e-12, atol=1e-12 * of_size(case)
        )
    for cell, loan in (
        ("default", "pd_lifetime"),
        ("payoff", "payoff_lifetime"),
        ("el", "el_lifetime"),
        ("exposed", "exposed_lifetime"),
    ):
        total = whole.loans[loan].sum()
        assert whole.cells[cell].sum() == pytest.approx(total, rel=1e-12, abs=1e-12 * of_size(case))
        for k in range(cells):
            mine = whole.loans[loan][np.arange(case.portfolio.n_loans) % cells == k].sum()
            assert parts.cells[cell][k].sum() == pytest.approx(mine, rel=1e-12, abs=1e-12 * of_size(case))


@each_hazard
@given(case=MONTHS, chance=st.randoms(use_true_random=False))
@settings(max_examples=15, deadline=None)
def test_names_and_order_of_loans_mean_nothing(name: str, case: Case, chance: Any) -> None:
    fits = fitted(name, case.portfolio.frequency)
    order = list(range(case.portfolio.n_loans))
    chance.shuffle(order)
    at = np.array(order)
    one, two = assessed(case, fits), assessed(replace(case, portfolio=taken(case.portfolio, at)), fits)
    for measure, values in one.loans.items():
        np.testing.assert_array_equal(two.loans[measure], values[at], err_msg=measure)
    for measure, values in one.cells.items():
        np.testing.assert_allclose(two.cells[measure], values, rtol=1e-12, atol=1e-15 * of_size(case))


@each_hazard
@given(case=st.one_of(MONTHS, QUARTERS))
@settings(max_examples=10, deadline=None)
def test_doubling_every_balance_doubles_the_loss(name: str, case: Case) -> None:
    fits = fitted(name, case.portfolio.frequency)
    doubled = replace(case, portfolio=replace(case.portfolio, balance=2 * case.portfolio.balance))
    one, two = assessed(case, fits), assessed(doubled, fits)
    for measure in ("el_12m", "el_lifetime", "exposed_lifetime"):
        np.testing.assert_array_equal(two.loans[measure], 2 * one.loans[measure])
    for measure in ("balance", "default_amount", "exposed", "el"):
        np.testing.assert_array_equal(two.cells[measure], 2 * one.cells[measure])
    for measure in ("pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime"):
        np.testing.assert_array_equal(two.loans[measure], one.loans[measure])


def in_unit(features: FeatureTable, name: str, factor: float) -> FeatureTable:
    values = features.values.copy()
    values[:, features.names.index(name)] *= factor
    return replace(features, values=values)


@given(case=MONTHS, factor=st.sampled_from([0.01, 100.0, 1e4, 0.3]))
@settings(max_examples=20, deadline=None)
def test_a_unit_of_a_macro_variable_means_nothing(case: Case, factor: float) -> None:
    """u in other units, every coefficient that multiplies it divided by the factor."""
    fits = fitted(TWO, case.portfolio.frequency)
    rescaled = {}
    for cause, fit in fits.items():
        reads = np.array(["u" in label.split(":") for label in fit.params.index])
        rescaled[cause] = replace(
            fit, coefficients=np.where(reads, fit.coefficients / factor, fit.coefficients)
        )
    other = replace(case, path=in_unit(case.path, "u", factor))
    one, two = assessed(case, fits), assessed(other, rescaled)
    for measure, values in one.loans.items():
        np.testing.assert_allclose(two.loans[measure], values, rtol=1e-10, atol=1e-12 * of_size(case))


@pytest.mark.parametrize("factor", [0.01, 100.0, 1e4])
def test_a_fit_in_other_units_is_the_same_fit(factor: float) -> None:
    risk_set, features = history(Frequency.MONTH)
    spec = HazardSpec.model_validate(HAZARDS[TWO]["default"], strict=False)
    one = fit_hazard(spec, risk_set, features)
    two = fit_hazard(spec, risk_set, in_unit(features, "u", factor))
    reads = np.array(["u" in label.split(":") for label in one.params.index])
    assert reads.sum() == 3
    for a, b in ((one.params, two.params), (one.bse, two.bse)):
        np.testing.assert_allclose(np.where(reads, b * factor, b), a, rtol=1e-6, atol=1e-9)
    assert two.llf == pytest.approx(one.llf, rel=1e-12)


@each_hazard
@given(case=MONTHS)
@settings(max_examples=10, deadline=None)
def test_a_longer_horizon_never_lowers_the_pd(name: str, case: Case) -> None:
    fits = fitted(name, case.portfolio.frequency)
    last = None
    for cap in (1, 2, 5, 12, 40, None):
        now = assessed(replace(case, cap=cap), fits).loans
        if last is not None:
            for measure in ("pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime", "el_lifetime"):
                assert (now[measure] >= last[measure] - 1e-12 * of_size(case)).all(), measure
        last = now


def test_relabelled_loans_give_the_same_fit() -> None:
    risk_set, features = history(Frequency.MONTH)
    rng = np.random.default_rng(2)
    order = rng.permutation(risk_set.n_loans)
    moved = replace(
        risk_set,
        static={k: v[order] for k, v in risk_set.static.items()},
        **{
            f: getattr(risk_set, f)[order]
            for f in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    for cause, text in HAZARDS[TWO].items():
        spec = HazardSpec.model_validate(text, strict=False)
        one, two = (fit_hazard(spec, r, features, cause=cause) for r in (risk_set, moved))
        np.testing.assert_allclose(two.params, one.params, rtol=0, atol=1e-9)
        np.testing.assert_allclose(two.bse, one.bse, rtol=1e-7)
