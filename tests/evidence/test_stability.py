"""Before and after: refits against fits of each part, a break that is found, none that is not there."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from stresskit.core.errors import NumericError
from stresskit.evidence import verdicts
from stresskit.evidence.rows import window
from stresskit.evidence.stability import stability
from stresskit.hazard.fit import fit_hazard
from tests.evidence.world import START, World, simulate, spec

#: Terms that learn nothing from the data, so that a fit of a part has the same design.
PLAIN = (
    {"age": "log", "support": 1},
    {"loan": "x"},
    {"loan": "product", "as": "category", "reference": "fixed"},
    {"macro": "m"},
)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_refits_are_the_fits_of_the_parts(sound: World, link: str) -> None:
    split = START + 55
    got = stability(sound.fit(PLAIN, link=link), sound.risk_set, sound.features, split=split)
    parts = {"before": window(sound.risk_set, last=split), "after": window(sound.risk_set, first=split + 1)}
    for name, part in parts.items():
        fit = fit_hazard(spec(*PLAIN, link=link), part, sound.features)
        np.testing.assert_allclose(got[name], fit.params, rtol=1e-6, atol=1e-8)
        se = np.maximum(fit.standard_errors("period"), fit.standard_errors("model_observed"))
        np.testing.assert_allclose(got[f"se_{name}"], se, rtol=1e-4)
        assert (got[f"events_{name}"] == fit.n_events).all()
        assert (got[f"periods_{name}"] == fit.n_periods).all()
    z = (got["after"] - got["before"]) / np.sqrt(got["se_before"] ** 2 + got["se_after"] ** 2)
    np.testing.assert_allclose(got["z"], z, rtol=1e-9)
    degrees = got[["periods_before", "periods_after"]].min(axis=1) - 1
    np.testing.assert_allclose(got["p_value"], 2 * stats.t.sf(z.abs(), degrees), rtol=1e-9)
    # one macro coefficient: the joint test is its t test squared, by the weaker of the two covariances
    m = got.set_index("term").loc["m"]
    assert m["joint_p"] <= m["p_value"] * 1.0001


def test_the_default_date_halves_the_events(sound: World) -> None:
    got = stability(sound.fit(), sound.risk_set, sound.features)
    total = sound.fit().n_events
    assert abs(got["events_before"].iloc[0] - total / 2) <= 0.05 * total


@pytest.mark.parametrize("seed", [61, 62, 63])
def test_a_break_is_found_and_its_absence_too(seed: int) -> None:
    at = START + 59
    steady = simulate(seed, loans=4000, level=-5.4)
    table = stability(steady.fit(), steady.risk_set, steady.features, split=at)
    assert verdicts.on_stability("default", table, "then").status == "in order"
    broken = simulate(seed, loans=4000, level=-5.4, slope=0.6, slope_after=-0.1)
    table = stability(broken.fit(), broken.risk_set, broken.features, split=at)
    row = table.set_index("term").loc["m"]
    assert abs(row["difference"] + 0.7) < 4 * np.hypot(row["se_before"], row["se_after"])
    verdict = verdicts.on_stability("default", table, "then")
    assert verdict.status == "look at"
    assert "m 0." in verdict.found


@pytest.mark.slow
def test_p_values_without_a_break_are_uniform() -> None:
    """24 books, shocks of sd 0.3: mean of the macro p-value within 4 sd of 1/2, few below 5 %."""
    p = []
    for seed in range(24):
        world = simulate(700 + seed, loans=1200, level=-5.0, shock_sd=0.3)
        table = stability(world.fit(), world.risk_set, world.features, split=START + 59)
        p.append(float(table.set_index("term").loc["m", "p_value"]))
    assert abs(np.mean(p) - 0.5) < 4 * 0.2887 / np.sqrt(24)
    # binomial(24, 0.05): more than 6 has a chance of 1e-4
    assert sum(v < 0.05 for v in p) <= 6


def test_what_a_part_cannot_estimate_is_held() -> None:
    """A level that has events after the date only."""
    world = simulate(64, loans=1500, level=-5.2)
    r = world.risk_set
    new = (r.stay_origin > START + 60) & (r.stay_loan % 2 == 0)
    risk_set = replace(r, static=dict(r.static) | {"desk": np.where(new, "new", "old").astype(object)})
    fit = fit_hazard(
        spec(
            {"age": "log", "support": 1},
            {"loan": "desk", "as": "category", "reference": "old"},
            {"macro": "m"},
        ),
        risk_set,
        world.features,
    )
    got = stability(fit, risk_set, world.features, split=START + 59).set_index("term")
    held = got.loc["desk[new]"]
    assert held["held"]
    assert held["before"] == held["after"] == fit.params["desk[new]"]
    assert np.isnan(held["z"])
    assert not got.drop(index="desk[new]")["held"].any()


def test_a_side_without_periods_is_refused(sound: World) -> None:
    with pytest.raises(NumericError, match=r"5 periods with .* events"):
        stability(sound.fit(), sound.risk_set, sound.features, split=START + 4)
