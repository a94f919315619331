"""Traps that general libraries set, and where the engine stands: detected, exact, or refused."""

from __future__ import annotations

import math
import warnings
from dataclasses import replace
from pathlib import Path

import mpmath
import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from threadpoolctl import threadpool_limits

from stresskit.core.errors import DataError, NumericError, StresskitError, TextError
from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.hazard.curves import cumulative_incidence, first_supported_age, product_limit
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.macro.read import read_history
from stresskit.panel.rows import risk_set_from_rows
from stresskit.projection.project import project
from stresskit.spec.load import load_scenario
from tests.oracle import plain
from tests.pitfalls import world
from tests.pitfalls.test_timing_mistakes import macro


def segment_without_defaults() -> pd.DataFrame:
    rng = np.random.default_rng(5)
    rows = pd.DataFrame(
        {"loan": [f"{i:04d}" for i in range(1500)], "age": 1, "region": np.repeat(["n", "s", "w"], 500)}
    )
    rows["event"] = np.where(rows["region"] == "w", 0, rng.random(1500) < 0.1).astype(int)
    return rows


def test_a_segment_without_defaults_is_found_before_fitting() -> None:
    rows = segment_without_defaults()
    design = sm.add_constant(pd.get_dummies(rows["region"], drop_first=True).astype(float))
    found = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # what the general solver says about itself is not under test
        for tolerance in (1e-3, 1e-6, 1e-12):
            family = sm.families.Binomial(sm.families.links.CLogLog())
            result = sm.GLM(rows["event"], design, family=family).fit(tol=tolerance, maxiter=100)
            found.append((bool(result.converged), float(result.params["w"])))
    # The witness: "converged" each time, at coefficients far from one another.
    assert sum(ok for ok, _ in found) >= 2
    assert max(c for ok, c in found if ok) - min(c for ok, c in found if ok) > 2
    risk_set = risk_set_from_rows(rows, loan="loan", age="age", event="event", static=("region",))
    with pytest.raises(NumericError, match=r"region\[w\].*no events"):
        fit_hazard(world.spec([{"loan": "region", "as": "category", "reference": "n"}]), risk_set)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_likelihood_at_extreme_predictors(link: str) -> None:
    """Rows with linear predictors near -45 and +5: where 1 - exp(-L) is 0 or 1 in double precision."""
    push = np.repeat([-40.0, -5.0, 0.0, 5.0], 4)
    event = np.array([0, 0, 0, 1, 0, 1, 0, 1, 1, 0, 1, 0, 1, 1, 1, 1 if link == "cloglog" else 0])
    rows = pd.DataFrame({"loan": [f"{i:02d}" for i in range(16)], "age": 1, "push": push, "event": event})
    risk_set = risk_set_from_rows(rows, loan="loan", age="age", event="event", static=("push",))
    fit = fit_hazard(world.spec([{"offset": "push"}], link=link), risk_set)
    level = float(fit.params["intercept"])
    records = [
        {"event": "default" if e else None, "eta": level + p} for p, e in zip(push, event, strict=True)
    ]
    want = plain.log_likelihood(records, "default", lambda r: r["eta"], link)
    with mpmath.workdps(120):
        exact = mpmath.mpf(0)
        for r in records:
            eta = mpmath.mpf(r["eta"])
            survive = mpmath.exp(-mpmath.exp(eta)) if link == "cloglog" else 1 / (1 + mpmath.exp(eta))
            exact += mpmath.log(1 - survive if r["event"] else survive)
        exact = float(exact)
    assert want == pytest.approx(exact, rel=1e-13)
    assert fit.llf == pytest.approx(exact, rel=1e-12)
    # The witness: probabilities clipped at 1e-10 before the logarithm.
    clipped = 0.0
    for r in records:
        p = min(max(plain.probability(r["eta"], link), 1e-10), 1 - 1e-10)
        clipped += math.log(p) if r["event"] else math.log(1 - p)
    assert abs(clipped - exact) > 5


def test_tied_exits_need_no_seed() -> None:
    """Months tie defaults with payoffs; broken at random the curve depends on the seed."""
    seen = world.simulate(np.random.default_rng(6), 400)
    quarter = np.ceil(seen.exit / 12)
    entry = np.ceil(seen.entry / 12)
    kept = quarter > entry
    entry, quarter, cause = entry[kept], quarter[kept], seen.cause[kept]
    exact = cumulative_incidence(entry, quarter, cause).incidence[-1]
    jittered = []
    for seed in range(6):
        shift = np.random.default_rng(seed).uniform(0, 0.5, quarter.size)
        jittered.append(cumulative_incidence(entry, quarter - shift, cause).incidence[-1])
    spread = np.ptp(np.array(jittered)[:, 0])
    assert spread > 1e-4
    order = np.random.default_rng(9).permutation(quarter.size)
    again = cumulative_incidence(entry[order], quarter[order], cause[order]).incidence[-1]
    np.testing.assert_array_equal(again, exact)
    survival, by_cause = 1.0, np.zeros(2)
    for age in sorted(set(quarter[cause > 0])):
        at_risk = ((entry < age) & (quarter >= age)).sum()
        gone = np.array([((quarter == age) & (cause == k)).sum() for k in (1, 2)])
        by_cause += survival * gone / at_risk
        survival *= 1 - gone.sum() / at_risk
    np.testing.assert_allclose(exact, by_cause, rtol=0, atol=1e-13)


def test_a_risk_set_that_empties_early_does_not_end_the_curve() -> None:
    rng = np.random.default_rng(12)
    entry = np.concatenate([[0, 0], rng.integers(10, 20, 3_000)])
    leaves = np.concatenate([[3, 4], entry[2:] + rng.geometric(0.05, 3_000)])
    event = np.ones(leaves.size)
    whole = product_limit(entry, leaves, event)
    assert whole.at(30)["survival"].iloc[0] == 0  # the witness: no one at risk after age 4, 0 for ever
    assert whole.emptied_at == 4
    start = first_supported_age(entry, leaves, minimum_at_risk=200)
    kept = product_limit(entry, leaves, event, condition_on=start, minimum_at_risk=200)
    truth = 0.95 ** (30 - start)
    row = kept.at(30).iloc[0]
    assert abs(row["survival"] - truth) < 4 * row["se"]
    assert row["se"] < 0.03


def test_an_unseen_level_is_an_error(fits: list[dict[str, HazardFit]], book: Portfolio) -> None:
    product = book.static["product"].copy()
    product[7] = "capped"
    strange = replace(book, static={**book.static, "product": product})
    with pytest.raises(DataError, match=r"'product'.*'capped'.*Known levels: 'fixed', 'floating'"):
        project(strange, fits[0], world.path_features(world.STRESS), cap=world.STEPS)


def test_an_offset_is_demanded_and_used(book: Portfolio) -> None:
    seen = world.simulate(np.random.default_rng(7), 3_000)
    whole = seen.risk_set()
    shift = np.where(seen.x > 0, 1.0, 0.0)
    risk_set = replace(whole, static={**whole.static, "shift": shift})
    fit = fit_hazard(world.spec([{"age": "log"}, {"offset": "shift"}]), risk_set)
    table = world.path_features(world.STRESS)
    with pytest.raises(StresskitError, match="shift"):
        project(book, {"default": fit}, table, cap=12)
    pds = []
    for value in (0.0, math.log(2.0)):
        shifted = replace(book, static={**book.static, "shift": np.full(book.n_loans, value)})
        pds.append(project(shifted, {"default": fit}, table, cap=12).pd_lifetime())
    np.testing.assert_allclose(np.log1p(-pds[1]), 2 * np.log1p(-pds[0]), rtol=1e-12)


def test_months_to_quarters() -> None:
    """Grouped proportional hazards keep their coefficients when periods are merged; logit ones drift."""
    drift: dict[str, list[float]] = {"cloglog": [], "logit": []}
    monthly: list[float] = []
    for batch in range(6):
        rng = np.random.default_rng([131, batch])
        x = rng.normal(size=4_000)
        age = np.arange(1, 25)
        hazard = np.exp(-2.6 + 0.3 * np.sin(age / 4) + x[:, None])
        hit = rng.random((x.size, age.size)) < -np.expm1(-hazard)
        default = hit.any(axis=1)
        exit_age = np.where(default, hit.argmax(axis=1) + 1, age.size)
        for link, found in drift.items():
            slopes = []
            for width in (1, 3):
                n = x.size
                risk_set = world.Book(
                    x, np.zeros(n, dtype=bool), np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64),
                    -(-exit_age // width), default.astype(np.int64),
                ).risk_set()  # fmt: skip
                slopes.append(
                    float(
                        fit_hazard(world.spec([{"age": "steps"}, {"loan": "x"}], link=link), risk_set).params[
                            "x"
                        ]
                    )
                )
            found.append(slopes[1] - slopes[0])
            if link == "cloglog":
                monthly.append(slopes[0])
    world.assert_right(monthly, 1.0)
    error = {k: np.std(v, ddof=1) / math.sqrt(len(v)) for k, v in drift.items()}
    assert abs(np.mean(drift["cloglog"])) < 4 * error["cloglog"]
    assert error["cloglog"] < 0.005
    assert np.mean(drift["logit"]) > 0.05 + 4 * error["logit"]


def test_beyond_the_last_knot_the_curve_holds(book: Portfolio) -> None:
    """Natural splines run on in a straight line; the engine holds the last fitted value, as declared."""
    rng = np.random.default_rng(14)
    n, last = 20_000, 40
    rising = 1 - np.exp(-np.exp(-6.0 + 0.05 * np.arange(1, last + 1)))
    hit = rng.random((n, last)) < rising
    leaves = np.where(hit.any(axis=1), hit.argmax(axis=1) + 1, last)
    zero = np.zeros(n, dtype=np.int64)
    seen = world.Book(rng.normal(size=n), zero > 0, zero, zero, leaves, hit.any(axis=1).astype(np.int64))
    fit = fit_hazard(world.spec([{"age": "spline", "knots": 2}]), seen.risk_set())
    assert fit.largest_age == last
    young = replace(book, age=np.full(book.n_loans, last - 3))
    alone = project(young, {"default": fit}, world.path_features(world.STRESS), cap=40).survival[0]
    hazard = -np.diff(np.log(alone), prepend=0.0)
    assert abs(math.log(hazard[2]) - (-6.0 + 0.05 * last)) < 0.2
    np.testing.assert_allclose(hazard[3:], hazard[2], rtol=1e-9)
    # The witness: the straight line through the last two fitted ages is far away after three more years.
    straight = math.log(hazard[2]) + 37 * (math.log(hazard[2]) - math.log(hazard[1]))
    assert straight - math.log(hazard[-1]) > 0.5


def test_thread_counts_change_no_bit(books: list[world.Book]) -> None:
    risk_set = books[2].risk_set()
    found = []
    for blas, threads in ((1, 1), (2, 1), (1, 2)):
        with threadpool_limits(limits=blas, user_api="blas"):
            found.append(fit_hazard(world.spec(), risk_set, world.history_features(), threads=threads))
    for other in found[1:]:
        np.testing.assert_array_equal(np.asarray(other.params), np.asarray(found[0].params))
        np.testing.assert_array_equal(np.asarray(other.cov_params()), np.asarray(found[0].cov_params()))
        assert other.llf == found[0].llf


@pytest.mark.parametrize("how", ["value missing", "row missing"])
def test_a_hole_in_macro_history_is_not_stepped_over(
    how: str, tmp_path_factory: pytest.TempPathFactory
) -> None:
    """A lag that skips a missing quarter would straddle the hole."""
    quarters = [f"{y}Q{q}" for y in range(2010, 2016) for q in range(1, 5)]
    frame = pd.DataFrame({"period": quarters, "unemployment_rate": np.linspace(5, 8, len(quarters))})
    if how == "row missing":
        frame = frame.drop(index=9)
    else:
        frame.loc[9, "unemployment_rate"] = np.nan
    base = tmp_path_factory.getbasetemp()
    with pytest.raises(DataError, match="2012"):
        read_history(macro(), base=base, model=Frequency.MONTH, frame=frame)


def test_yaml_says_what_it_looks_like(tmp_path: Path) -> None:
    """1e-3 is a number, NO is text, 12:30 is no number of minutes, a key twice is an error."""

    def scenario(name: str, values: str, more: str = "") -> Path:
        file = tmp_path / "scenario.yaml"
        file.write_text(
            f"scenario: {name}\nstarts: 2026Q1\npaths:\n  m: {{values: [{values}]}}\n{more}", encoding="utf-8"
        )
        return file

    model = load_scenario(scenario("NO", "1e-3, 5")).model
    assert model.scenario == "NO"
    assert model.paths["m"].values == (0.001, 5.0)
    with pytest.raises(TextError, match=r"scenario\.yaml:4:.*12:30"):
        load_scenario(scenario("calm", "12:30, 5"))
    with pytest.raises(TextError, match=r"scenario\.yaml:5"):
        load_scenario(scenario("calm", "1, 5", "starts: 2026Q2\n"))
