"""Mistakes made when hazards become a PD: each built as a witness on the true hazards, and the engine beside it."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from pydantic import ValidationError

from stresskit.core.errors import NumericError, StresskitError
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.curves import cumulative_incidence, product_limit
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.projection.project import Projection, project
from tests.pitfalls import world
from tests.pitfalls.world import STEPS, STRESS, assert_right, assert_wrong, mean_incidence, true_steps

Steps = list[list[dict]]


def test_the_truth_is_stressed_enough_to_matter(truth: Steps) -> None:
    assert 0.2 < mean_incidence(truth) < 0.5


def test_payoff_is_not_censoring(projections: list[Projection], truth: Steps, book: Portfolio) -> None:
    right = mean_incidence(truth)
    alone = true_steps(book, {"default": STRESS}, causes=["default"])
    witness = mean_incidence(alone)
    assert_wrong(witness, right, by=0.15)
    assert_right([p.pd_within(STEPS).mean() for p in projections], right)
    # The same number under its own name.
    assert_right([p.pd_no_payoff().mean() for p in projections], witness)


def test_payoff_is_not_censoring_in_observed_curves() -> None:
    """All loans seen from their first to their last month: the share that defaulted IS the incidence."""
    seen = world.simulate(np.random.default_rng(3), 20_000, first=0, last=40)
    until = 100
    cause = np.where(seen.exit > until, 0, seen.cause)
    end = np.minimum(seen.exit, until)
    right = float((cause == 1).mean())
    assert_wrong(1 - product_limit(seen.entry, end, cause == 1).survival[-1], right, by=0.5)
    table = cumulative_incidence(seen.entry, end, cause)
    assert table.incidence[-1, 0] == pytest.approx(right, abs=1e-12)


def test_conditional_hazards_are_not_summed(projections: list[Projection], truth: Steps) -> None:
    right = mean_incidence(truth)
    summed = math.fsum(s["hazards"]["default"] for loan in truth for s in loan) / len(truth)
    assert_wrong(summed, right, by=0.5)
    assert_right([p.pd_lifetime().mean() for p in projections], right)
    for p in projections:
        left = p.survival[:, -1] + p.flows["payoff"].sum(axis=1) + p.flows["default"].sum(axis=1)
        np.testing.assert_allclose(left, 1.0, rtol=0, atol=1e-12)


def test_payoff_follows_the_same_path(projections: list[Projection], truth: Steps, book: Portfolio) -> None:
    right = mean_incidence(truth)
    witness = true_steps(book, {"default": STRESS, "payoff": world.BASELINE})
    assert_wrong(mean_incidence(witness), right, by=-0.15)
    payoff = math.fsum(s["flows"]["payoff"] for loan in truth for s in loan) / len(truth)
    assert_right([p.flows["payoff"].sum(axis=1).mean() for p in projections], payoff)
    assert_right([p.pd_lifetime().mean() for p in projections], right)


@pytest.mark.parametrize(
    ("stand_in", "by"), [(STRESS.mean(), -0.2), (STRESS[-1], -0.5)], ids=["mean", "last"]
)
def test_a_path_is_not_one_number(
    projections: list[Projection], truth: Steps, book: Portfolio, stand_in: float, by: float
) -> None:
    right = mean_incidence(truth)
    flat = np.full(STEPS, stand_in)
    assert_wrong(mean_incidence(true_steps(book, dict.fromkeys(world.TRUE, flat))), right, by=by)
    assert_right([p.pd_within(STEPS).mean() for p in projections], right)


def test_a_path_must_be_whole(fits: list[dict[str, HazardFit]], book: Portfolio) -> None:
    for path in (STRESS[:1], STRESS[:-1]):
        with pytest.raises(NumericError, match="the projection needs 60"):
            project(book, fits[0], world.path_features(path), cap=STEPS)
    late = FeatureTable(
        book.frequency, world.AS_OF + 2, ("m",), STRESS.reshape(-1, 1), np.zeros((STEPS, 1), dtype=np.int64)
    )
    with pytest.raises(NumericError, match="the projection needs"):
        project(book, fits[0], late, cap=STEPS)
    hole = STRESS.copy()
    hole[17] = np.nan
    with pytest.raises(NumericError, match="no value in 2027-06"):
        project(book, fits[0], world.path_features(hole), cap=STEPS)


def test_seasoning_enters_once(projections: list[Projection], truth: Steps, book: Portfolio) -> None:
    """The hazard already rises with age; an external seasoning curve on top counts it twice."""
    right = mean_incidence(truth)
    slope = world.TRUE["default"]["log_age"]
    twice = true_steps(book, dict.fromkeys(world.TRUE, STRESS), extra=lambda age: slope * math.log(age / 24))
    assert_wrong(mean_incidence(twice), right, by=0.1)
    assert_right([p.pd_within(STEPS).mean() for p in projections], right)
    with pytest.raises(ValidationError, match="stated twice: age"):
        world.spec([{"age": "log"}, {"age": "spline", "knots": 3}])


@pytest.mark.parametrize(
    ("cohort", "clock"),
    [
        (lambda origin: origin - world.START, np.arange(world.MONTHS)),
        (lambda origin: origin / 12, (world.START + np.arange(world.MONTHS)) / 12),
        (lambda origin: origin / 12, np.arange(world.MONTHS)),
        (lambda origin: origin, world.START + np.arange(world.MONTHS)),
    ],
    ids=["months from start", "years", "year of origination", "period numbers"],
)
def test_age_period_and_cohort_are_not_all_linear(
    cohort: Callable[[np.ndarray], np.ndarray], clock: np.ndarray
) -> None:
    """Age, calendar time and cohort are linearly dependent, in whatever unit and from whatever zero."""
    whole = world.simulate(np.random.default_rng(4), 4_000).risk_set()
    static = {**whole.static, "cohort": np.asarray(cohort(whole.stay_origin), dtype=float)}
    risk_set = replace(whole, static=static)
    terms = [{"age": "linear"}, {"loan": "cohort"}, {"macro": "clock"}]
    with pytest.raises(StresskitError) as caught:
        fit_hazard(world.spec(terms), risk_set, world.features(clock, world.START, "clock"))
    for name in ("age", "cohort", "clock"):
        assert name in str(caught.value)


def test_the_average_borrower_is_not_the_book(
    projections: list[Projection], truth: Steps, book: Portfolio
) -> None:
    right = mean_incidence(truth)
    etas = {}
    age0, x, floating = (
        float(np.mean(v)) for v in (book.age, book.static["x"], book.static["product"] == "floating")
    )
    for cause, b in world.TRUE.items():
        fixed = b["intercept"] + b["x"] * x + b["floating"] * floating
        etas[cause] = lambda age, h, b=b, fixed=fixed: (
            fixed + b["log_age"] * math.log(age) + b["m"] * float(STRESS[h - 1])
        )
    loan = {"age": age0, "remaining": 120, "balance": 1.0, "rate": 0.0}
    witness = world.plain.project_loan(loan, etas, dict.fromkeys(etas, "cloglog"), cap=STEPS)
    assert_wrong(mean_incidence([witness]), right, by=-0.03)
    assert_right([p.pd_within(STEPS).mean() for p in projections], right)
