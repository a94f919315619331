"""The engine finds the truth again on seeds that nobody chose, from risk sets made straight from the draw."""

from __future__ import annotations

import math

import numpy as np
import pytest

from stresskit.demo.truth import DefaultTruth, PayoffTruth, default_age_curve, payoff_age_curve
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.spec.load import load_study
from tests.demo.conftest import Written
from tests.demo.drawn import TRUE, Drawn, draw, errors

SEEDS = (1, 2, 3, 4, 5, 6)
LOANS = 8000
D, P = DefaultTruth(), PayoffTruth()


@pytest.fixture(scope="module")
def fits_of_seeds(small: Written) -> list[tuple[Drawn, dict[str, HazardFit]]]:
    hazards = load_study(small.study).model.hazards
    drawn = [draw(seed, LOANS) for seed in SEEDS]
    return [(d, {c: fit_hazard(hazards[c], d.risk_set, d.features, cause=c) for c in TRUE}) for d in drawn]


@pytest.mark.slow
def test_no_bias_and_honest_intervals_on_seeds_nobody_chose(
    fits_of_seeds: list[tuple[Drawn, dict[str, HazardFit]]],
) -> None:
    """Mean standardised error of 6 seeds has standard error 1/sqrt(6): bound 3.5 of those, per coefficient.

    Of 48 intervals of 95 % a binomial count above 8 outside has probability below 0.0005.
    """
    rows = [{(c, n): z for c in TRUE for n, z in errors(fits[c]).items()} for _, fits in fits_of_seeds]
    outside = 0
    for key in rows[0]:
        z = np.array([row[key] for row in rows])
        assert abs(z.mean()) < 3.5 / math.sqrt(len(SEEDS)), (key, z)
        outside += int((np.abs(z) > 1.98).sum())
    assert outside <= 8


@pytest.mark.slow
def test_the_age_curves_come_back(fits_of_seeds: list[tuple[Drawn, dict[str, HazardFit]]]) -> None:
    """Mean over seeds of the fitted baseline between ages 6 and 84, relative to age 40.

    The standard error of one fit's height is about 0.15 for default and 0.05 for payoff (8,000 loans); the
    mean of six has 0.06 and 0.02. Bounds are four of those plus 0.05 for what a spline cannot bend.
    """
    ages = np.array([6, 12, 24, 40, 60, 84])
    for cause, curve, bound in (
        ("default", default_age_curve(D, ages), 0.30),
        ("payoff", payoff_age_curve(P, ages), 0.13),
    ):
        fitted = []
        for _, fits in fits_of_seeds:
            names = fits[cause].feature_names
            z = fits[cause].cell_part(ages, np.zeros((ages.size, len(names))), names).z
            fitted.append(z - z[3])
        assert np.abs(np.mean(fitted, axis=0) - (curve - curve[3])).max() < bound, cause


@pytest.mark.slow
def test_late_entry_shapes_the_baseline(fits_of_seeds: list[tuple[Drawn, dict[str, HazardFit]]]) -> None:
    """The level of the baseline, not only its slope: expected equals seen, and the hazard at age 40 is true."""
    at = np.array([40])
    for cause, true_eta in (
        ("default", D.intercept + default_age_curve(D, at)[0] + D.ltv_at_start * 0.7 + D.income_cover * 2.0),
        ("payoff", P.intercept + payoff_age_curve(P, at)[0]),
    ):
        etas = []
        for _, fits in fits_of_seeds:
            fit_ = fits[cause]
            loan = fit_.loan_part(
                {
                    "product": np.array(["fixed"], dtype=object),
                    "ltv_at_start": np.array([0.7]),
                    "income_cover": np.array([2.0]),
                },
                1,
            )
            cell = fit_.cell_part(at, np.zeros((1, len(fit_.feature_names))), fit_.feature_names)
            moving = (
                fit_.moving_part({n: np.array([[0.6]]) for n in fit_.moving_columns})
                if fit_.moving_columns
                else 0.0
            )
            etas.append(float(loan.s[0] + cell.z[0] + np.sum(moving)))
        # one fit's eta has standard error near 0.1 (default) and 0.035 (payoff): four of the mean's
        assert np.mean(etas) == pytest.approx(true_eta, abs=0.17 if cause == "default" else 0.06)
