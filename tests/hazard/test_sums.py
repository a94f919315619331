"""Factored sums against row blocks, threads, order of loans, and a plain loop over rows."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import UsageError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.factored import FactoredSums
from stresskit.hazard.fit import choose_sums, fit_hazard
from stresskit.hazard.learn import learn_design
from stresskit.hazard.link import LINKS
from stresskit.hazard.moving_sums import MovingSums
from stresskit.hazard.powers import LinkPowers, link_powers, powers_of
from stresskit.hazard.row_products import RowProducts
from stresskit.hazard.sums import HazardData, LoanSums, RowBlockSums, hazard_data
from stresskit.spec.terms import HazardSpec
from tests.hazard.hazard_cases import make_spec, simulated_panel

TERMS = {
    "plain": ({"age": "spline", "knots": 3}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"}),
    "no loan column": ({"age": "steps", "bands": (6, 18)}, {"macro": "rate"}),
    "no cell column": ({"loan": "ltv", "transform": "standardise"},),
    "category x macro": (
        {"age": "linear"}, {"loan": "product", "as": "category"}, {"macro": "gap"}, {"interaction": ("product", "gap")}
    ),
    "category x age, age x macro": (
        {"age": "quadratic"}, {"loan": "product", "as": "category"}, {"macro": "rate"}, {"loan": "ltv"},
        {"interaction": ("age", "product")}, {"interaction": ("age", "rate")},
    ),
    "category x number": ({"loan": "product", "as": "category"}, {"loan": "ltv"}, {"interaction": ("product", "ltv")}),
    "offset": ({"age": "log"}, {"offset": "shift"}, {"macro": "rate"}),
}  # fmt: skip


def _data(weights: bool = True) -> tuple[RiskSet, FeatureTable]:
    risk_set, features = simulated_panel(loans=400)
    rng = np.random.default_rng(5)
    weight = rng.integers(1, 4, risk_set.weight.size).astype(float) if weights else risk_set.weight
    static = {**risk_set.static, "shift": rng.normal(0.0, 0.5, risk_set.n_loans)}
    return dataclasses.replace(risk_set, weight=weight, static=static), features


def _split_in_two(risk_set: RiskSet) -> RiskSet:
    """Every stay of two periods or more cut in the middle: loans with several stays."""
    longer = risk_set.stay_exit - risk_set.stay_entry > 1
    middle = (risk_set.stay_entry + risk_set.stay_exit) // 2
    again = np.concatenate([np.arange(longer.size), np.flatnonzero(longer)])
    second = np.arange(again.size) >= longer.size
    entry, exit_ = risk_set.stay_entry[again], risk_set.stay_exit[again].copy()
    cause = risk_set.stay_cause[again].copy()
    exit_[: longer.size][longer], cause[: longer.size][longer] = middle[longer], 0
    entry = np.where(second, middle[again], entry)
    order = np.lexsort((entry, risk_set.stay_loan[again]))
    return dataclasses.replace(
        risk_set,
        stay_loan=risk_set.stay_loan[again][order], stay_origin=risk_set.stay_origin[again][order],
        stay_entry=entry[order], stay_exit=exit_[order], stay_cause=cause[order], weight=risk_set.weight[again][order],
    )  # fmt: skip


def _hazard_data(spec: HazardSpec, risk_set: RiskSet, features: FeatureTable) -> HazardData:
    rows = cause_rows(risk_set, "default", features, spec.macro_features())
    return hazard_data(learn_design(spec, rows, features), rows, features, LINKS[spec.link])


def _both(
    spec: HazardSpec, risk_set: RiskSet, features: FeatureTable
) -> tuple[FactoredSums, RowBlockSums, np.ndarray[Any, Any]]:
    data = _hazard_data(spec, risk_set, features)
    design, plain = data.design, RowBlockSums(data, block_rows=1000)
    size = np.sqrt(np.diag(plain.evaluate(np.zeros(design.k)).information))
    params = np.random.default_rng(0).normal(0.0, 0.3, design.k) * size[0] / size
    params[0] -= 3.0
    return FactoredSums(data), plain, params


def _same(ours: Any, plain: Any) -> None:
    """Equal to 1e-9 of the largest entry of the same quantity."""
    ours, plain = np.asarray(ours), np.asarray(plain)
    assert ours.shape == plain.shape
    assert np.abs(ours - plain).max() <= 1e-9 * np.abs(plain).max()


def _limit_powers(monkeypatch: pytest.MonkeyPatch, limit: float) -> None:
    """Stays with a larger e^eta than ``limit`` go row by row."""

    def limited(name: str) -> LinkPowers:
        found = link_powers(name)
        return dataclasses.replace(found, limit=min(limit, found.limit))

    monkeypatch.setattr("stresskit.hazard.stay_sums.link_powers", limited)


@pytest.mark.parametrize("cut", [False, True])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("name", sorted(TERMS))
def test_factored_sums_equal_row_blocks(name: str, link: str, cut: bool) -> None:
    _compare(name, link, cut)


@pytest.mark.parametrize("at_a_time", [1, 300])
@pytest.mark.parametrize("limit", [0.0, 0.01], ids=["none by powers", "some by powers"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_every_way_through_the_rows_gives_the_same_sums(
    link: str, limit: float, at_a_time: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    _limit_powers(monkeypatch, limit)
    monkeypatch.setattr("stresskit.hazard.stay_sums.AT_A_TIME", at_a_time)
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 50)
    _compare("category x macro", link, cut=True)


@pytest.mark.parametrize("limit", [0.0, 0.01, 1.0], ids=["none by powers", "some", "most"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("name", sorted(TERMS))
def test_squared_scores_and_information_by_period_equal_those_of_rows(
    name: str, link: str, limit: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    _limit_powers(monkeypatch, limit)
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 100)
    risk_set, features = _data()
    factored, _, params = _both(make_spec(*TERMS[name], link=link), _split_in_two(risk_set), features)
    plain = RowProducts(_hazard_data(make_spec(*TERMS[name], link=link), _split_in_two(risk_set), features))
    assert factored.n_rows == plain.n_rows
    _same(factored.of_scores(params), plain.of_scores(params))
    ours, theirs = factored.by_period(params), plain.by_period(params)
    _same(ours, theirs)
    np.testing.assert_allclose(ours.sum(axis=0), factored.evaluate(params).information, rtol=1e-8, atol=1e-6)


def test_two_categories_and_more_than_eight_numbers() -> None:
    """Columns that do not fit into one register, and products of levels of two categories."""
    risk_set, features = _data()
    rng = np.random.default_rng(9)
    numbers = {f"n{j}": rng.normal(size=risk_set.n_loans) for j in range(10)}
    kind = rng.choice(np.array(["a", "b", "c"], dtype=object), risk_set.n_loans)
    risk_set = dataclasses.replace(risk_set, static={**risk_set.static, **numbers, "kind": kind})
    terms = (
        {"age": "spline", "knots": 5}, {"loan": "product", "as": "category"}, {"loan": "kind", "as": "category"},
        {"macro": "rate"}, {"macro": "gap"}, *({"loan": name} for name in numbers),
    )  # fmt: skip
    for link in ("cloglog", "logit"):
        spec = make_spec(*terms, link=link)
        factored, plain, params = _both(spec, _split_in_two(risk_set), features)
        _same_sums(factored, plain, params)
        rows = RowProducts(_hazard_data(spec, _split_in_two(risk_set), features))
        _same(factored.of_scores(params), rows.of_scores(params))
        _same(factored.by_period(params), rows.by_period(params))


def test_powers_carry_most_stays_of_a_book_with_small_hazards() -> None:
    """All of them here, so that the comparison below is one of powers alone."""
    risk_set, features = _data()
    for link in ("cloglog", "logit"):
        factored, plain, params = _both(make_spec(*TERMS["plain"], link=link), risk_set, features)
        params[0] -= 6.0
        at = factored._point(params)
        assert all(factored._power_side(factored._block(b), at).small.all() for b in range(factored.blocks))
        _same_sums(factored, plain, params)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_polynomials_are_the_functions_up_to_the_limit(link: str) -> None:
    found = link_powers(link)
    x = found.limit * np.random.default_rng(0).random(1000) ** 3
    p, q, information = LINKS[link].from_exp(x)
    for c, exact, error in (
        (found.loglik, np.log1p(-p), 1e-13), (found.probability, p, 1e-13), (found.information, information, 1e-13),
        (found.variance, p * q, 1e-13), (found.joint, information, 3e-10), (found.joint_score, p, 3e-10),
    ):  # fmt: skip
        np.testing.assert_allclose(powers_of(x, c.size) @ c, exact, rtol=2 * error)


def _compare(name: str, link: str, cut: bool) -> None:
    risk_set, features = _data()
    if cut:
        risk_set = _split_in_two(risk_set)
    _same_sums(*_both(make_spec(*TERMS[name], link=link), risk_set, features))


def _same_sums(
    factored: FactoredSums | MovingSums, plain: RowBlockSums, params: np.ndarray[Any, Any]
) -> None:
    a, b = factored.evaluate(params), plain.evaluate(params)
    assert a.llf == pytest.approx(b.llf, rel=1e-12)
    _same(a.score, b.score)
    _same(a.information, b.information)
    _same(factored.expected_information(params), plain.expected_information(params))
    a, b = factored.score_products(params), plain.score_products(params)
    _same(a.by_loan, b.by_loan)
    _same(a.by_period, b.by_period)
    assert (a.loans, a.periods) == (b.loans, b.periods)
    a, b = factored.tally(params), plain.tally(params)
    _same(a.by_age, b.by_age)
    _same(a.by_period, b.by_period)
    for a, b in zip(factored.column_totals(), plain.column_totals(), strict=True):
        _same(a, b)
    for a, b in zip(factored.expected_by_loan(params), plain.expected_by_loan(params), strict=True):
        _same(a, b)
    # What is kept of the last evaluation is not taken for another point.
    other = params * 1.01
    _same(factored.expected_information(other), plain.expected_information(other))
    _same(factored.score_products(other).by_loan, plain.score_products(other).by_loan)


MOVING = {
    "one": ({"age": "spline", "knots": 3}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"},
            {"loan": "use"}),
    "with everything": (
        {"age": "linear"}, {"loan": "product", "as": "category"}, {"macro": "gap"}, {"loan": "use"}, {"loan": "band", "as": "category"},
        {"interaction": ("product", "gap")}, {"interaction": ("use", "gap")}, {"interaction": ("use", "product")},
        {"interaction": ("use", "age")}, {"offset": "drift"}, {"offset": "shift"},
    ),
    "number x macro": ({"age": "log"}, {"loan": "ltv"}, {"macro": "rate"}, {"interaction": ("ltv", "rate")}),
    "alone": ({"loan": "use"},),
}  # fmt: skip


@pytest.mark.parametrize("kept", [0, 1 << 25], ids=["made anew", "kept"])
@pytest.mark.parametrize("cut", [False, True])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("name", sorted(MOVING))
def test_sums_with_columns_that_move_equal_row_blocks(
    name: str, link: str, cut: bool, kept: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stresskit.hazard.moving_sums.BLOCK_ROWS", 700)
    monkeypatch.setattr("stresskit.hazard.moving_sums.KEPT_VALUES", kept)
    risk_set, features = _with_moving()
    if cut:
        risk_set = _split_in_two(risk_set)
    _same_sums(*_moving_and_plain(make_spec(*MOVING[name], link=link), risk_set, features))


def _with_moving() -> tuple[RiskSet, FeatureTable]:
    risk_set, features = _data()
    rng, n = np.random.default_rng(6), risk_set.n_rows
    band = rng.choice(np.array(["high", "low", "mid"], dtype=object), n)
    moving = {"use": rng.normal(0.3, 1.0, n), "band": band, "drift": rng.normal(0.0, 0.3, n)}
    return dataclasses.replace(risk_set, moving=moving), features


def _moving_and_plain(
    spec: HazardSpec, risk_set: RiskSet, features: FeatureTable
) -> tuple[MovingSums, RowBlockSums, np.ndarray[Any, Any]]:
    rows = cause_rows(risk_set, "default", features, spec.macro_features())
    design = learn_design(spec, rows, features)
    data = hazard_data(design, rows, features, LINKS[spec.link])
    sums = choose_sums(data)
    assert isinstance(sums, MovingSums)
    params = np.random.default_rng(0).normal(0.0, 0.1, design.k)
    params[0] -= 3.0
    return sums, RowBlockSums(data, block_rows=1000), params


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_a_moving_fit_has_the_same_bits_for_any_threads_and_order(
    link: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stresskit.hazard.moving_sums.BLOCK_ROWS", 500)
    risk_set, features = _with_moving()
    place = np.random.default_rng(8).permutation(risk_set.n_loans)
    stays = np.argsort(np.argsort(place)[risk_set.stay_loan], kind="stable")
    length = risk_set.stay_exit - risk_set.stay_entry
    first = np.cumsum(length) - length
    rows = np.concatenate([np.arange(first[i], first[i] + length[i]) for i in stays])
    shuffled = dataclasses.replace(
        risk_set,
        loan_ids=risk_set.loan_ids[place],
        static={k: v[place] for k, v in risk_set.static.items()},
        moving={k: v[rows] for k, v in risk_set.moving.items()},
        stay_loan=np.argsort(place)[risk_set.stay_loan][stays],
        **{
            name: getattr(risk_set, name)[stays]
            for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    spec = make_spec(*MOVING["one"], link=link)
    one = fit_hazard(spec, risk_set, features)
    assert one.to_json() == fit_hazard(spec, risk_set, features, threads=2).to_json()
    assert one.to_json() == fit_hazard(spec, shuffled, features).to_json()
    plain = fit_hazard(spec, risk_set, features, backend="rows")
    np.testing.assert_allclose(one.coefficients, plain.coefficients, rtol=1e-8, atol=1e-9)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_row_blocks_equal_a_plain_loop(link: str) -> None:
    """The slowest way: one row at a time, columns looked up by name, scalar formulas."""
    risk_set, features = simulated_panel(loans=60)
    spec = make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, link=link)
    _, plain, _ = _both(spec, risk_set, features)
    beta = np.array([-3.0, 0.01, 0.7, -0.2])
    llf, score, by_loan, by_period = 0.0, np.zeros(4), {}, {}
    for stay in range(risk_set.stay_loan.size):
        loan, cause = risk_set.stay_loan[stay], risk_set.stay_cause[stay]
        for age in range(risk_set.stay_entry[stay] + 1, risk_set.stay_exit[stay] + 1):
            last = age == risk_set.stay_exit[stay]
            if last and cause == 2:
                continue
            period = risk_set.stay_origin[stay] + age
            x = np.array(
                [1.0, age, risk_set.static["ltv"][loan], features.column("rate")[period - features.start]]
            )
            eta, y = float(x @ beta), bool(last and cause == 1)
            p = 1 / (1 + np.exp(-eta)) if link == "logit" else 1 - np.exp(-np.exp(eta))
            slope = p * (1 - p) if link == "logit" else np.exp(eta) * (1 - p)
            llf += np.log(p) if y else np.log(1 - p)
            s = (y - p) / (p * (1 - p)) * slope * x
            score += s
            by_loan[loan] = by_loan.get(loan, 0) + s
            by_period[period] = by_period.get(period, 0) + s
    at, products = plain.evaluate(beta), plain.score_products(beta)
    assert at.llf == pytest.approx(llf, rel=1e-12)
    np.testing.assert_allclose(at.score, score, rtol=1e-9)
    np.testing.assert_allclose(products.by_loan, sum(np.outer(s, s) for s in by_loan.values()), rtol=1e-9)
    np.testing.assert_allclose(products.by_period, sum(np.outer(s, s) for s in by_period.values()), rtol=1e-9)
    h = 1e-5
    for j in range(4):
        step = h * np.eye(4)[j]
        slope = (plain.evaluate(beta + step).score - plain.evaluate(beta - step).score) / (2 * h)
        np.testing.assert_allclose(-slope, at.information[j], rtol=1e-5)


@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_threads_do_not_change_the_bits(link: str, backend: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 64)
    risk_set, features = _data()
    spec = make_spec(*TERMS["category x macro"], link=link)
    one, two = (
        fit_hazard(spec, risk_set, features, backend=backend, threads=t, block_rows=700) for t in (1, 2)
    )
    assert one.to_json() == two.to_json()


@pytest.mark.parametrize("backend", ["rows", "factored"])
def test_the_order_of_loans_does_not_change_the_bits(backend: str) -> None:
    risk_set, features = _data()
    place = np.random.default_rng(8).permutation(risk_set.n_loans)
    stays = np.argsort(np.argsort(place)[risk_set.stay_loan], kind="stable")
    shuffled = dataclasses.replace(
        risk_set,
        loan_ids=risk_set.loan_ids[place],
        static={k: v[place] for k, v in risk_set.static.items()},
        stay_loan=np.argsort(place)[risk_set.stay_loan][stays],
        **{
            name: getattr(risk_set, name)[stays]
            for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    assert shuffled.loan_ids[0] != risk_set.loan_ids[0]
    spec = make_spec(*TERMS["plain"])
    first, second = (fit_hazard(spec, r, features, backend=backend) for r in (risk_set, shuffled))
    assert first.to_json() == second.to_json()


def test_the_factored_backend_is_chosen_where_it_can_be() -> None:
    risk_set, features = _data()
    moving = np.arange(risk_set.n_rows, dtype=float)
    with_moving = dataclasses.replace(risk_set, moving={"balance": moving})
    for spec, data, expected in (
        (make_spec(*TERMS["plain"]), risk_set, FactoredSums),
        (make_spec(*TERMS["category x number"]), risk_set, FactoredSums),
        (
            make_spec({"loan": "ltv"}, {"macro": "rate"}, {"interaction": ("ltv", "rate")}),
            risk_set,
            MovingSums,
        ),
        (make_spec({"loan": "balance"}), with_moving, MovingSums),
    ):
        rows = cause_rows(data, "default", features, spec.macro_features())
        design = learn_design(spec, rows, features)
        assert type(choose_sums(hazard_data(design, rows, features, LINKS["cloglog"]))) is expected
    with pytest.raises(UsageError, match="balance"):
        fit_hazard(make_spec({"loan": "balance"}), with_moving, features, backend="factored")


def test_extreme_loan_columns_do_not_overflow_the_factors() -> None:
    """e^s alone would be e^1400 here; the linear predictor itself is ordinary."""
    risk_set, features = simulated_panel(loans=300)
    year = 2000.0 + np.random.default_rng(2).integers(0, 8, risk_set.n_loans)
    risk_set = dataclasses.replace(risk_set, static={**risk_set.static, "year": year})
    for link in ("cloglog", "logit"):
        factored, plain, _ = _both(make_spec({"loan": "year"}, link=link), risk_set, features)
        params = np.array([-0.7 * 2003 - 4.0, 0.7])
        a, b = factored.evaluate(params), plain.evaluate(params)
        assert a.llf == pytest.approx(b.llf, rel=1e-11)
        _same(a.information, b.information)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_pieces_of_work_do_not_change_the_bits(link: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """One piece of all blocks, and every block by itself because its sums are many."""
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 50)
    spec, found = make_spec(*TERMS["category x macro"], link=link), []
    for pieces, numbers in ((4, 1 << 21), (1, 1 << 30), (1, 1)):
        monkeypatch.setattr("stresskit.hazard.stay_sums.PIECES", pieces)
        monkeypatch.setattr("stresskit.hazard.stay_sums.MOST_NUMBERS", numbers)
        found.append(fit_hazard(spec, *_data(), threads=2).to_json())
    assert found[0] == found[1] == found[2]


@pytest.mark.parametrize(("least", "used"), [(0, 2), (10**9, 1)])
def test_automatic_threads_go_by_rows_and_cores_and_change_no_bits(
    least: int, used: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stresskit.hazard.fit.THREADED_ROWS", least)
    monkeypatch.setattr("stresskit.hazard.fit.processors", lambda: 2)
    asked: list[int] = []

    def noted(data: HazardData, **how: Any) -> LoanSums:
        asked.append(how["threads"])
        return choose_sums(data, **how)

    monkeypatch.setattr("stresskit.hazard.fit.choose_sums", noted)
    spec = make_spec(*TERMS["plain"])
    assert (
        fit_hazard(spec, *_data(), threads=None).to_json() == fit_hazard(spec, *_data(), threads=1).to_json()
    )
    assert asked == [used, 1]
