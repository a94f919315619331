"""Observed and fitted survival: lifelines for the one, a plain loop for the other."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from lifelines import KaplanMeierFitter

from stresskit.core.errors import NumericError
from stresskit.evidence.survival import middle, supported, survival_against_fit
from stresskit.hazard.fit import fit_hazard
from tests.evidence.world import World, spec

MINIMUM = 40.0


@pytest.fixture(scope="module")
def table(sound: World) -> pd.DataFrame:
    return survival_against_fit(sound.fit(), sound.risk_set, sound.features, minimum_at_risk=MINIMUM)


def test_observed_is_lifelines_with_late_entry(sound: World, table: pd.DataFrame) -> None:
    r = sound.risk_set
    start = table["age"].iloc[0] - 1
    # rows of the cause: a loan that leaves by another cause is not at risk in that period
    leave = r.stay_exit - (r.stay_cause == 2)
    keep = (leave > r.stay_entry) & (leave > start)
    fitter = KaplanMeierFitter().fit(
        leave[keep], r.stay_cause[keep] == 1, entry=np.maximum(r.stay_entry[keep], start).astype(float)
    )
    want = fitter.survival_function_at_times(table["age"]).to_numpy()
    np.testing.assert_allclose(table["observed"], want, rtol=1e-9)


def test_fitted_is_the_mean_hazard_of_those_at_risk(
    sound: World, sound_rows: pd.DataFrame, table: pd.DataFrame
) -> None:
    p = sound.fit().predict(sound_rows)
    survival = 1.0
    for age, fitted in zip(table["age"], table["fitted"], strict=True):
        here = sound_rows["age"] == age
        survival *= 1.0 - float(p[here].mean())
        assert fitted == pytest.approx(survival, rel=1e-10)
    assert (table["at_risk"] >= MINIMUM).all()
    assert table["age"].diff().dropna().eq(1).all()


def test_greenwood_and_z(sound_rows: pd.DataFrame, table: pd.DataFrame) -> None:
    total = 0.0
    for row in table.itertuples():
        total += row.events / (row.at_risk * (row.at_risk - row.events))
    last = table.iloc[-1]
    z = (np.log(last["observed"]) - np.log(last["fitted"])) / np.sqrt(total)
    assert last["z_binomial"] == pytest.approx(z, rel=1e-9)
    assert table["z_shock"].abs().le(table["z_binomial"].abs() + 1e-12).all()
    assert len(middle(table)) < len(table)


def test_a_wrong_age_shape_shows(sound: World) -> None:
    """The truth rises with log(age). A baseline forced to fall by an offset does not."""
    risk_set = sound.risk_set
    flat = survival_against_fit(sound.fit(), risk_set, sound.features, minimum_at_risk=MINIMUM)
    ages = np.arange(1, 400)
    # hazard made to vary against the truth: the age enters through a moving offset of -0.06 per period
    at = np.concatenate(
        [np.arange(e + 1, x + 1) for e, x in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    bent = replace(risk_set, moving={"drift": -0.06 * ages[at - 1].astype(float)})
    fit = fit_hazard(spec({"loan": "x"}, {"offset": "drift"}, {"macro": "m"}), bent, sound.features)
    wrong = survival_against_fit(fit, bent, sound.features, minimum_at_risk=MINIMUM)
    assert middle(flat)["z_shock"].abs().max() < 3.15
    assert middle(wrong)["z_shock"].abs().max() > 4.0


def test_ages_with_enough_loans() -> None:
    ages = np.array([1, 2, 3, 4, 6, 7, 8])
    condition, use = supported(ages, np.array([2.0, 9.0, 40.0, 50.0, 60.0, 45.0, 9.0]), 10.0)
    assert condition == 5
    assert list(ages[use]) == [6, 7]
    condition, use = supported(np.arange(1, 6), np.array([2.0, 30.0, 40.0, 9.0, 35.0]), 10.0)
    assert (condition, list(use)) == (1, [1, 2])
    with pytest.raises(NumericError, match="fewer than 100"):
        supported(ages, np.full(7, 5.0), 100.0)
