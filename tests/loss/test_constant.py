"""The constant balance sheet against a plain loop, position by position, and what must hold between its figures."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.assess import assess
from stresskit.loss.constant import BLOCK, hold_book
from stresskit.loss.interfaces import YearFlows
from stresskit.loss.yearly import YearCells
from stresskit.loss.years import year_edges
from stresskit.spec.study import Loss
from tests.loss import plain_years as slow
from tests.oracle import plain
from tests.oracle.coefficients import predictor
from tests.oracle.worlds import AS_OF, HAZARDS, STEPS, Case, fitted, table, worlds

YEARS = 3


def points_of(case: Case) -> np.ndarray:
    """As the run chooses them: all years asked for that end within the cap, at least one."""
    book = case.portfolio
    edges = year_edges(book.as_of, book.frequency, 50)[:YEARS]
    shown = edges if case.cap is None else edges[: max(1, int((edges <= case.cap).sum()))]
    return np.concatenate([[0], shown])


def ours(
    case: Case, fits: dict[str, HazardFit], *, threads: int = 1, codes: np.ndarray | None = None
) -> YearCells:
    """One cell per position unless told otherwise."""
    n = case.portfolio.n_loans
    codes = np.arange(n) if codes is None else codes
    book = hold_book(
        case.portfolio,
        fits,
        case.loss,
        codes=codes,
        count=int(codes.max()) + 1,
        points=points_of(case),
        cap=case.cap,
    )
    return book.along(case.path, threads=threads)


def one_position(case: Case, fits: dict[str, HazardFit], i: int) -> list[dict[str, float]]:
    """Flows of one position by calendar year: an age that is counted up, and starts again after the contract's last period."""
    book, loss, first = case.portfolio, case.loss, case.portfolio.as_of + 1 - case.path.start
    year = book.frequency.per_year
    columns = {name: values[i] for name, values in book.static.items()}
    etas = {cause: predictor(fit) for cause, fit in fits.items()}
    rate, discount = float(book.rate[i]) / year, loss.discount
    per_period = (
        rate if discount == "rate" else 0.0 if discount == "none" else (1 + float(discount)) ** (1 / year) - 1
    )
    lgd = loss.lgd.constant if hasattr(loss.lgd, "constant") else loss.lgd.values[columns["product"]]
    exposure = float(book.balance[i]) * (1 + loss.exposure.accrued * max(rate, 0.0))
    ends = slow.bucket_ends(book.as_of, year, 200)[: points_of(case).size - 1]
    out = [dict.fromkeys(("default", "payoff", "matured", "default_amount", "loss", "el"), 0.0) for _ in ends]
    age, left, bucket = int(book.age[i]), int(book.remaining[i]), 0
    for h in range(1, min(ends[-1], case.cap or 10**9) + 1):
        age += 1
        macro = dict(zip(case.path.names, case.path.values[first + h - 1], strict=True))
        value = {c: eta(age, columns, macro) for c, eta in etas.items()}
        stay, leave = plain.compete(
            {c: plain.probability(v, fits[c].spec.link) for c, v in value.items()},
            {c: math.exp(plain.log_survival(v, fits[c].spec.link)) for c, v in value.items()},
        )
        left -= 1
        if h > ends[bucket]:
            bucket += 1
        here = out[bucket]
        here["default"] += leave["default"]
        here["payoff"] += leave.get("payoff", 0.0)
        here["matured"] += stay if left == 0 else 0.0
        here["default_amount"] += leave["default"] * exposure
        here["loss"] += leave["default"] * exposure * lgd
        when = h - 0.5 if loss.timing == "mid" else h
        here["el"] += leave["default"] * exposure * lgd * (1 + per_period) ** -when
        if left == 0:
            age, left = 0, int(book.age[i]) + int(book.remaining[i])
    return out


@pytest.mark.parametrize("frequency", list(Frequency), ids=lambda f: f.value)
@pytest.mark.parametrize("name", HAZARDS)
@given(data=st.data())
@settings(max_examples=15, deadline=None)
def test_it_is_the_plain_loop(name: str, frequency: Frequency, data: st.DataObject) -> None:
    case, by = data.draw(worlds(frequency)), data.draw(st.integers(0, frequency.per_year - 1))
    book = replace(case.portfolio, as_of=case.portfolio.as_of + by)
    case = Case(book, replace(case.path, start=case.path.start + by), case.loss, case.cap)
    fits = fitted(name, frequency)
    found = ours(case, fits)
    for i in range(book.n_loans):
        size = max(1.0, float(book.balance[i]))
        np.testing.assert_array_equal(found.measures["balance"][i], book.balance[i])
        np.testing.assert_array_equal(found.measures["on_book"][i], 1.0)
        for j, wanted in enumerate(one_position(case, fits, i), start=1):
            for measure, value in wanted.items():
                scale = size if measure in ("default_amount", "loss", "el") else 1.0
                np.testing.assert_allclose(
                    found.measures[measure][i, j], value, rtol=1e-12, atol=1e-12 * scale,
                    err_msg=f"{measure} of loan {i} at {j}",
                )  # fmt: skip


def some_book(n: int, *, term: int, age: int = 3, frequency: Frequency = Frequency.MONTH) -> Portfolio:
    rng = np.random.default_rng(8)
    return Portfolio(
        frequency, AS_OF[frequency], np.array([f"L{i:05d}" for i in range(n)], dtype=object),
        np.full(n, age), rng.integers(max(1, term // 2), term + 1, n), rng.uniform(1e3, 1e5, n), np.full(n, 0.04),
        {"x": rng.normal(size=n), "w": rng.uniform(0.5, 3, n), "push": np.zeros(n),
         "product": rng.choice(np.array(["fixed", "floating", "stepped"], dtype=object), n)},
    )  # fmt: skip


def case_of(book: Portfolio, schedule: str = "bullet") -> Case:
    loss = Loss.model_validate(
        {"exposure": {"schedule": schedule, "accrued": 1.0}, "lgd": {"constant": 0.4}, "discount": "rate"}
    )
    path = table(book.frequency, book.as_of + 1, STEPS, seed=5)
    return Case(book, path, loss, None)


def test_contracts_renewed_three_times_within_the_years() -> None:
    """Terms of at most 10 months against 36: the hazard starts over each time, and each end is counted."""
    case, fits = case_of(some_book(4, term=7)), fitted("two causes, two links, interactions", Frequency.MONTH)
    found = ours(case, fits)
    term = case.portfolio.age + case.portfolio.remaining
    assert term.max() <= 10
    assert (found.measures["matured"][:, 1:].sum(axis=1) > 1.5).all()
    # survivors of a contract's last period are renewed, and there is one such period per term and year
    for i in range(4):
        assert found.measures["matured"][i].sum() < 36 / int(term[i]) + 1


def test_without_anybody_leaving_it_is_the_run_off_of_a_bullet_book() -> None:
    """Hazards of nothing but what is negligible: no repayment, no exit, both balance sheets are one."""
    fits = fitted("two causes, two links, interactions", Frequency.MONTH)
    still = {c: replace(f, coefficients=_without_events(f)) for c, f in fits.items()}
    book = some_book(50, term=80)
    book = replace(book, remaining=np.maximum(book.remaining, 60))
    case = case_of(book)
    held = ours(case, still)
    flows: list[YearFlows] = []
    points = points_of(case)
    assess(
        book, still, case.path, case.loss, cells=np.zeros(50, dtype=np.int64), n_cells=1,
        years=points[1:].tolist(), on_years=flows.append,
    )  # fmt: skip
    for part in flows:
        rows = part.loans
        np.testing.assert_allclose(part.balance, held.measures["balance"][rows, 1:], rtol=1e-12)
        for name in ("default", "default_amount", "loss", "el"):
            np.testing.assert_allclose(
                getattr(part, name), held.measures[name][rows, 1:], rtol=1e-9, atol=0, err_msg=name
            )
            assert (held.measures[name][rows, 1:] > 0).all()
        np.testing.assert_array_equal(held.measures["matured"][rows, 1:], 0.0)


def _without_events(fit: HazardFit) -> np.ndarray:
    """The fit's coefficients with an intercept that leaves an event of one in 10^13."""
    out = np.array(fit.coefficients)
    out[list(fit.design.labels).index("intercept")] -= 30.0
    return out


def test_sums_doubling_order_and_threads() -> None:
    case = case_of(some_book(2000, term=40), "annuity")
    fits = fitted("three causes, spline, offset", Frequency.MONTH)
    assert case.portfolio.n_loans > 0 < BLOCK
    each = ours(case, fits).measures
    codes = np.arange(2000) % 7
    cells = ours(case, fits, codes=codes).measures
    whole = ours(case, fits, codes=np.zeros(2000, dtype=np.int64)).measures
    double = replace(case.portfolio, balance=2 * case.portfolio.balance)
    twice = ours(Case(double, case.path, case.loss, None), fits, codes=codes).measures
    for name, values in cells.items():
        np.testing.assert_allclose(values.sum(axis=0), whole[name][0], rtol=1e-12, err_msg=name)
        np.testing.assert_allclose(each[name].sum(axis=0), whole[name][0], rtol=1e-12, err_msg=name)
        factor = 2.0 if name in ("balance", "default_amount", "loss", "el") else 1.0
        np.testing.assert_array_equal(twice[name], factor * values, err_msg=name)


def test_the_same_bits_for_any_number_of_threads() -> None:
    n = 3 * BLOCK // 36 + 5
    case = case_of(some_book(n, term=40), "annuity")
    fits = fitted("two causes, two links, interactions", Frequency.MONTH)
    codes = np.arange(n) % 3
    one, two = (ours(case, fits, threads=k, codes=codes).measures for k in (1, 2))
    for name in one:
        assert one[name].tobytes() == two[name].tobytes(), name
