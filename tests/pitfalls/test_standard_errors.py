"""Macro coefficients vary by period only: their error is that of the periods, not of the loans."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd

from stresskit.hazard.fit import fit_hazard
from stresskit.panel.rows import risk_set_from_rows
from tests.pitfalls import world

MONTHS, AT_RISK, REPEATS, SHOCK = 96, 60_000, 200, 0.15
TRUE_SLOPE = 0.2


def test_macro_errors_come_from_the_periods() -> None:
    """Months share a shock of sd 0.15; ~100,000 defaults a sample. 200 samples show the true error."""
    rng = np.random.default_rng(2718)
    m = rng.normal(size=MONTHS)
    table = world.features(m, world.START)
    loans = [f"{t:03d}{kind}" for t in range(MONTHS) for kind in "ab"]
    frame = pd.DataFrame(
        {
            "loan": loans,
            "age": 1,
            "event": [1, 0] * MONTHS,
            "period": np.repeat(world.START + np.arange(MONTHS), 2),
        }
    )
    slopes, shown, alone, inside, inside_alone = [], [], [], 0, 0
    for _ in range(REPEATS):
        hazard = np.exp(-4.0 + TRUE_SLOPE * m + rng.normal(0.0, SHOCK, MONTHS))
        defaults = rng.binomial(AT_RISK, -np.expm1(-hazard))
        frame["weight"] = np.stack([defaults, AT_RISK - defaults], axis=1).ravel()
        risk_set = risk_set_from_rows(
            frame, loan="loan", age="age", event="event", period="period", weight="weight"
        )
        fit = fit_hazard(world.spec([{"macro": "m"}]), risk_set, table)
        slopes.append(float(fit.params["m"]))
        shown.append(float(fit.bse["m"]))
        model = pd.DataFrame(
            fit.cov_params("model_expected"), index=fit.params.index, columns=fit.params.index
        )
        alone.append(math.sqrt(model.loc["m", "m"]))
        low, high = np.asarray(fit.conf_int().loc["m"], dtype=float)
        inside += low < TRUE_SLOPE < high
        inside_alone += abs(slopes[-1] - TRUE_SLOPE) < 1.96 * alone[-1]
        assert fit.n_periods == MONTHS
    spread = float(np.std(slopes, ddof=1))
    # The witness: independent rows. The error shown is a small part of the true one.
    assert spread / np.mean(alone) > 4
    assert inside_alone / REPEATS < 0.5
    # The engine's first choice, clustered by period, within the Monte Carlo error of the spread.
    assert abs(np.mean(shown) / spread - 1) < 3 / math.sqrt(2 * REPEATS)
    assert inside / REPEATS > 0.95 - 3 * math.sqrt(0.95 * 0.05 / REPEATS)
    assert abs(np.mean(slopes) - TRUE_SLOPE) < 4 * spread / math.sqrt(REPEATS)
