"""Mistakes about who was at risk when: fitted the wrong way as witness, and through the engine."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from stresskit.core.values import Portfolio
from stresskit.hazard.curves import product_limit
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.panel.rows import risk_set_from_rows
from stresskit.projection.project import project
from tests.pitfalls import world
from tests.pitfalls.world import STEPS, assert_right, assert_wrong, mean_incidence


def test_censored_loans_stay(book: Portfolio) -> None:
    """A young book: without the loans still on it, default and payoff look far more likely than they are."""
    calm = dict.fromkeys(world.TRUE, world.BASELINE)
    right = mean_incidence(world.true_steps(book, calm), 12)
    path = world.path_features(world.BASELINE)
    used, dropped = [], []
    for batch in range(world.BATCHES):
        seen = world.simulate(
            np.random.default_rng([141, batch]), 16_000, first=world.MONTHS - 66, last=world.MONTHS - 6
        )
        for out, kept in ((used, seen), (dropped, seen.take(seen.cause > 0))):
            fits = world.fit_both(kept.risk_set())
            out.append(float(project(book, fits, path, cap=STEPS).pd_within(12).mean()))
    assert_wrong(dropped, right, by=0.2)
    assert_right(used, right, precise=0.04)


def test_rows_and_stays_are_the_same_risk_set(
    books: list[world.Book], fits: list[dict[str, HazardFit]]
) -> None:
    """The person-period rows of a book, in any order, give the fit of its stays to the last bit."""
    few = books[0].take(np.arange(1500))
    rows = world.rows_of(few)
    risk_set = risk_set_from_rows(
        rows.sample(frac=1.0, random_state=1).assign(loan=rows["loan"].map("L{:06d}".format)),
        loan="loan", age="age", event="event", period="period", causes=("default", "payoff"), static=("x", "product"),
    )  # fmt: skip
    ours = few.risk_set()
    for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "stay_loan"):
        np.testing.assert_array_equal(getattr(risk_set, name), getattr(ours, name))
    for cause in world.TRUE:
        a = fit_hazard(world.spec(), risk_set, world.history_features(), cause=cause)
        b = fit_hazard(world.spec(), ours, world.history_features(), cause=cause)
        np.testing.assert_array_equal(np.asarray(a.params), np.asarray(b.params))


def late_book(rng: np.random.Generator, loans: int = 6_000) -> world.Book:
    """Constant hazard 1/60 a month times e^(0.5 x), one exit, observed over a window of 30 months of age.

    Loans come under observation at ages 0..60; those that left before are never seen. Survival to age
    60 at x = 0 is exp(-1) = 0.368.
    """
    x = rng.normal(size=loans)
    entry = np.where(rng.random(loans) < 0.25, 0, rng.integers(1, 61, loans))
    leaves = np.ceil(rng.exponential(60.0 / np.exp(0.5 * x))).astype(np.int64)
    end = entry + 30
    cause = np.where(leaves <= end, 1, 0)
    seen = leaves > entry
    zero = np.zeros(loans, dtype=np.int64)
    return world.Book(x, zero > 0, world.START - entry, entry, np.minimum(leaves, end), cause).take(seen)


def baseline_survival(fit: HazardFit, at: int = 60) -> float:
    """exp(-sum of hazards) at x = 0, from the coefficients."""
    level, slope = fit.params["intercept"], fit.params["age[log]"]
    return math.exp(-sum(math.exp(level + slope * math.log(a)) for a in range(1, at + 1)))


def test_late_entry_leaves_the_baseline_right_not_only_the_coefficients() -> None:
    truth = math.exp(-1.0)
    spec = world.spec([{"age": "log"}, {"loan": "x"}])
    right, wrong, slopes, wrong_slopes = [], [], [], []
    for batch in range(world.BATCHES):
        seen = late_book(np.random.default_rng([99, batch]))
        good = fit_hazard(spec, seen.risk_set())
        # The witness invents the rows before entry: as if every loan had been watched from its first month.
        bad = fit_hazard(spec, seen.risk_set(entry=np.zeros_like(seen.entry)))
        right.append(baseline_survival(good))
        wrong.append(baseline_survival(bad))
        slopes.append(float(good.params["x"]))
        wrong_slopes.append(float(bad.params["x"]))
    assert_wrong(wrong, truth, by=0.3)
    # The slope hides the mistake: nearly right where the baseline is far off.
    assert abs(np.mean(wrong_slopes) / 0.5 - 1) < 0.2
    assert_right(right, truth, precise=0.03)
    assert_right(slopes, 0.5, precise=0.05)


def test_late_entry_in_the_product_limit() -> None:
    """At x = 0 for all: the truth is 0.368 at age 60, and far above it where entry is ignored."""
    right, wrong = [], []
    for batch in range(world.BATCHES):
        rng = np.random.default_rng([101, batch])
        entry = np.where(rng.random(6_000) < 0.25, 0, rng.integers(1, 61, 6_000))
        leaves = np.ceil(rng.exponential(60.0, 6_000))
        end = np.minimum(leaves, entry + 30)
        seen = leaves > entry
        entry, end, event = entry[seen], end[seen], (leaves <= end)[seen]
        right.append(float(product_limit(entry, end, event).at(60)["survival"].iloc[0]))
        wrong.append(float(product_limit(np.zeros(end.size), end, event).at(60)["survival"].iloc[0]))
    assert_wrong(wrong, math.exp(-1), by=0.3)
    assert_right(right, math.exp(-1))


def test_late_entry_ignored_understates_the_pd(book: Portfolio) -> None:
    """Loans on book long before history begins: the months before it, invented as survived, dilute the hazard."""
    terms = [{"age": "log"}, {"loan": "x"}, {"loan": "product", "as": "category", "reference": "fixed"}]
    calm = np.full(world.MONTHS, 1.0)
    table = world.path_features(world.BASELINE)
    steps = world.true_steps(book, {"default": calm}, causes=["default"])
    truth = mean_incidence(steps)
    right, wrong = [], []
    for batch in range(world.BATCHES):
        seen = world.simulate(np.random.default_rng([111, batch]), 12_000, first=-60, last=-12, m=calm)
        for out, entry in ((right, seen.entry), (wrong, np.zeros_like(seen.entry))):
            fit = fit_hazard(world.spec(terms), seen.risk_set(entry=entry))
            out.append(float(project(book, {"default": fit}, table, cap=STEPS).pd_lifetime().mean()))
    assert_wrong(wrong, truth, by=-0.15)
    assert_right(right, truth, precise=0.03)


def test_an_interval_is_open_at_its_entry() -> None:
    """In discrete time many cases enter at an age at which others leave; counting them there dilutes the hazard."""
    right, wrong = [], []
    for batch in range(world.BATCHES):
        rng = np.random.default_rng([121, batch])
        entry = rng.integers(0, 20, 8_000)
        end = entry + rng.geometric(0.08, entry.size)
        ours = product_limit(entry, end, np.ones(end.size))
        right.append(float(ours.at(20)["survival"].iloc[0]))
        closed = 1.0
        for age in range(1, 21):
            closed *= 1 - (end == age).sum() / ((entry <= age) & (end >= age)).sum()
        wrong.append(closed)
    assert_wrong(wrong, 0.92**20, by=0.08)
    assert_right(right, 0.92**20, precise=0.03)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_weighted_rows_are_the_rows_repeated(link: str) -> None:
    """Aggregated and expanded data: one likelihood, one set of coefficients and errors."""
    rng = np.random.default_rng(8)
    rows = pd.DataFrame({"age": rng.integers(1, 7, 3_000), "x": rng.integers(0, 3, 3_000).astype(float)})
    rows["event"] = (rng.random(3_000) < 0.05 * (1 + rows["x"])).astype(int)
    rows["period"] = 24_000 + rows["age"]
    counted = rows.groupby(["age", "x", "event", "period"]).size().rename("weight").reset_index()
    fits = []
    for frame, weight in ((rows, None), (counted, "weight")):
        frame = frame.assign(loan=[f"{i:05d}" for i in range(len(frame))])
        risk_set = risk_set_from_rows(
            frame, loan="loan", age="age", event="event", period="period", weight=weight, static=("x",)
        )
        fits.append(fit_hazard(world.spec([{"age": "steps"}, {"loan": "x"}], link=link), risk_set))
    one, two = fits
    assert one.nobs == two.nobs == 3_000
    assert two.llf == pytest.approx(one.llf, rel=1e-12)
    np.testing.assert_allclose(np.asarray(two.params), np.asarray(one.params), rtol=0, atol=1e-9)
    for kind in ("model_expected", "model_observed", "period"):
        a, b = (np.asarray(f.cov_params(kind)) for f in fits)
        np.testing.assert_allclose(b, a, rtol=1e-8, atol=1e-14)


def test_a_split_stay_is_the_same_fit(books: list[world.Book]) -> None:
    whole = books[1].take(np.arange(2000)).risk_set()
    long = np.flatnonzero(whole.stay_exit - whole.stay_entry > 1)
    middle = (whole.stay_entry + whole.stay_exit) // 2
    first_exit, first_cause = whole.stay_exit.copy(), whole.stay_cause.copy()
    first_exit[long], first_cause[long] = middle[long], 0
    order = np.argsort(np.concatenate([whole.stay_loan, whole.stay_loan[long]]), kind="stable")

    def joined(first: np.ndarray, second: np.ndarray) -> np.ndarray:
        return np.concatenate([first, second])[order]

    split = replace(
        whole,
        stay_loan=joined(whole.stay_loan, whole.stay_loan[long]),
        stay_origin=joined(whole.stay_origin, whole.stay_origin[long]),
        stay_entry=joined(whole.stay_entry, middle[long]),
        stay_exit=joined(first_exit, whole.stay_exit[long]),
        stay_cause=joined(first_cause, whole.stay_cause[long]),
        weight=joined(whole.weight, whole.weight[long]),
    )
    a, b = (fit_hazard(world.spec(), r, world.history_features()) for r in (whole, split))
    np.testing.assert_allclose(np.asarray(b.params), np.asarray(a.params), rtol=0, atol=1e-10)
    assert b.llf == pytest.approx(a.llf, rel=1e-13)
    for kind in ("loan", "period"):
        np.testing.assert_allclose(np.asarray(b.cov_params(kind)), np.asarray(a.cov_params(kind)), rtol=1e-8)
