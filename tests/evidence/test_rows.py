"""Rows through a fit's design against predictions on spelled-out rows; windows against a plain filter."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError
from stresskit.evidence.rows import fit_rows, window
from stresskit.hazard.fit import fit_hazard
from tests.evidence.world import END, START, World, rows_of, spec


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_probability_and_derivatives(sound: World, sound_rows: pd.DataFrame, link: str) -> None:
    fit = sound.fit(link=link)
    rows = fit_rows(fit, sound.risk_set, sound.features)
    blocks = list(rows.blocks(5000))
    assert len(blocks) > 3
    p = np.concatenate([b.p for b in blocks])
    np.testing.assert_allclose(p, fit.predict(sound_rows).to_numpy(), rtol=1e-12)
    assert np.concatenate([b.event for b in blocks]).sum() == sound_rows["y"].sum()
    b = blocks[0]
    score, slope = rows.scores(b)
    h = 1e-6
    up, down = (fit.link.probability(b.eta + d) for d in (h, -h))
    np.testing.assert_allclose(slope, (up - down) / (2 * h), rtol=1e-6)
    loglik = [np.where(b.event, np.log(q), np.log1p(-q)) for q in (up, down)]
    np.testing.assert_allclose(score, (loglik[0] - loglik[1]) / (2 * h), rtol=1e-5, atol=1e-9)


def test_columns_that_move(sound: World, rng: np.random.Generator) -> None:
    risk_set = replace(sound.risk_set, moving={"arrears": rng.normal(size=sound.risk_set.n_rows)})
    fit = fit_hazard(
        spec({"age": "log", "support": 1}, {"loan": "arrears"}, {"macro": "m"}), risk_set, sound.features
    )
    p = np.concatenate([b.p for b in fit_rows(fit, risk_set, sound.features).blocks(3000)])
    np.testing.assert_allclose(p, fit.predict(rows_of(risk_set, sound.features)).to_numpy(), rtol=1e-12)


def test_window_keeps_exactly_the_rows_of_its_periods(sound: World, rng: np.random.Generator) -> None:
    risk_set = replace(sound.risk_set, moving={"arrears": rng.normal(size=sound.risk_set.n_rows)})
    low, high = START + 30, START + 70
    columns = ["loan", "age", "period", "y", "arrears"]
    whole = rows_of(risk_set)
    wanted = whole[whole["period"].between(low, high)][columns].reset_index(drop=True)
    got = rows_of(window(risk_set, first=low, last=high))[columns]
    pd.testing.assert_frame_equal(got, wanted)
    with pytest.raises(DataError, match="window"):
        window(risk_set, first=END + 1)
