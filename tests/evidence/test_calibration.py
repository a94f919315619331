"""Calibration against statsmodels GLM on the predictor; deciles by sorting."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from stresskit.core.errors import NumericError
from stresskit.evidence.calibration import calibration, deciles
from stresskit.evidence.rows import window
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from tests.evidence.world import END, START, TERMS, World, rows_of, simulate, spec

SPLIT = START + 60


def halves(world: World, link: str) -> tuple[HazardFit, pd.DataFrame]:
    early = fit_hazard(spec(*TERMS, link=link), window(world.risk_set, last=SPLIT), world.features)
    late = rows_of(window(world.risk_set, first=SPLIT + 1), world.features)
    return early, late


@pytest.mark.parametrize("link", ["logit", "cloglog"])
def test_against_statsmodels(sound: World, link: str) -> None:
    early, late = halves(sound, link)
    got = calibration(early, window(sound.risk_set, first=SPLIT + 1), sound.features).set_index("term")
    p, y = early.predict(late).to_numpy(), late["y"].to_numpy(float)
    eta = np.log(p / (1 - p)) if link == "logit" else np.log(-np.log1p(-p))
    family = sm.families.Binomial(
        sm.families.links.Logit() if link == "logit" else sm.families.links.CLogLog()
    )
    both = sm.GLM(y, sm.add_constant(eta), family=family).fit(
        tol=1e-12, cov_type="cluster", cov_kwds={"groups": late["period"].to_numpy(), "use_correction": False}
    )
    level = sm.GLM(y, np.ones_like(eta), family=family, offset=eta).fit(tol=1e-12)
    np.testing.assert_allclose(got.loc[["intercept", "slope"], "estimate"], both.params, rtol=1e-6)
    assert got.loc["level", "estimate"] == pytest.approx(level.params[0], rel=1e-6)
    t = late["period"].nunique()
    # statsmodels' sandwich takes the expected information, ours the observed; equal for the logit
    tolerance = 1e-5 if link == "logit" else 0.02
    np.testing.assert_allclose(
        got.loc[["intercept", "slope"], "se_period"], both.bse * np.sqrt(t / (t - 1)), rtol=tolerance
    )
    assert got.loc["level", "se"] == pytest.approx(level.bse[0], rel=tolerance)
    assert (got["events"].iloc[0], got["periods"].iloc[0]) == (y.sum(), t)
    assert got["expected"].iloc[0] == pytest.approx(p.sum(), rel=1e-9)


def test_the_fits_own_error_is_a_numerical_derivative(sound: World) -> None:
    """se_fit: refits with each coefficient moved, by statsmodels."""
    early, late = halves(sound, "logit")
    got = calibration(early, window(sound.risk_set, first=SPLIT + 1), sound.features).set_index("term")
    x = np.column_stack(
        [np.ones(len(late)), np.log(late["age"]), late["x"], late["product"] == "floating", late["m"]]
    ).astype(float)
    beta, y = early.params.to_numpy(), late["y"].to_numpy(float)
    family = sm.families.Binomial()

    def level(b: np.ndarray) -> float:
        return float(sm.GLM(y, np.ones(len(y)), family=family, offset=x @ b).fit(tol=1e-13).params[0])

    h = 1e-4
    slope = np.array([(level(beta + h * e) - level(beta - h * e)) / (2 * h) for e in np.eye(beta.size)])
    want = max(slope @ early.cov_params(k).to_numpy() @ slope for k in ("model_observed", "period"))
    # linearised at slope 1 and level 0, which the refit is near
    assert got.loc["level", "se_fit"] == pytest.approx(np.sqrt(want), rel=0.1)


def test_on_its_own_rows_the_answer_is_0_and_1(sound: World) -> None:
    for link in ("logit", "cloglog"):
        got = calibration(sound.fit(link=link), sound.risk_set, sound.features)
        np.testing.assert_allclose(got["estimate"], [0.0, 1.0, 0.0], atol=1e-6)


def test_intervals_out_of_time_cover() -> None:
    """16 sound books: slope and level within two-sided 95 % intervals, binomial tolerance."""
    inside = []
    for seed in range(16):
        world = simulate(400 + seed, loans=1200, level=-5.4, shock_sd=0.2)
        early = fit_hazard(spec(*TERMS), window(world.risk_set, last=SPLIT), world.features)
        got = calibration(early, window(world.risk_set, first=SPLIT + 1), world.features).set_index("term")
        for term in ("slope", "level"):
            row = got.loc[term]
            inside.append(row["lower"] <= row["ideal"] <= row["upper"])
    assert np.mean(inside) > 0.95 - 4 * np.sqrt(0.95 * 0.05 / len(inside))


def test_deciles_by_sorting(sound: World, sound_rows: pd.DataFrame) -> None:
    fit = sound.fit()
    got = deciles(fit, sound.risk_set, sound.features)
    p = np.sort(fit.predict(sound_rows).to_numpy())
    parts = np.array_split(p, 10)
    # edges are exact to 1/1024 in the predictor, so bands hold a few rows more or less
    np.testing.assert_allclose(got["predicted"], [part.mean() for part in parts], rtol=5e-3)
    np.testing.assert_allclose(got["at_risk"], len(p) / 10, rtol=0.03)
    assert got["events"].sum() == sound_rows["y"].sum()
    assert got["expected"].sum() == pytest.approx(p.sum(), rel=1e-9)


def test_no_events_to_calibrate_on(sound: World) -> None:
    quiet = window(sound.risk_set, first=END)
    quiet = type(quiet)(
        *[getattr(quiet, n) if n != "stay_cause" else quiet.stay_cause * 0 for n in quiet.__slots__]
    )
    with pytest.raises(NumericError, match="no events"):
        calibration(sound.fit(), quiet, sound.features)


def test_a_predictor_that_hardly_varies_is_no_trouble(sound: World) -> None:
    """Intercept and slope are then nearly one direction; the joint test must not break on it."""
    terms = ({"loan": "product", "as": "category", "reference": "fixed"},)
    early = fit_hazard(spec(*terms), window(sound.risk_set, last=SPLIT), sound.features)
    moved = replace(early, coefficients=early.coefficients * np.array([1.0, 1e-5]))
    got = calibration(moved, window(sound.risk_set, first=SPLIT + 1), sound.features)
    assert np.isfinite(got[["estimate", "lower", "upper", "joint_p"]].to_numpy()).all()


def test_predictions_without_variation_are_refused(sound: World) -> None:
    early = fit_hazard(spec(), window(sound.risk_set, last=SPLIT), sound.features)
    with pytest.raises(NumericError, match="do not vary"):
        calibration(early, window(sound.risk_set, first=SPLIT + 1), sound.features)
