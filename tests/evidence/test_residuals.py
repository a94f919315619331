"""Autocorrelation and Ljung-Box by their formulas, and what an omitted macro term leaves."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from stresskit.core.errors import NumericError
from stresskit.evidence.residuals import longest_run, residual_autocorrelation
from stresskit.evidence.rows import window
from stresskit.hazard.diagnostics import actual_expected
from tests.evidence.world import START, World


def test_against_the_formulas(sound: World) -> None:
    fit = sound.fit()
    residuals, memory = residual_autocorrelation(fit, sound.risk_set, sound.features)
    by_period = actual_expected(fit, sound.risk_set, sound.features)
    assert list(residuals["period"]) == list(by_period["period"])
    np.testing.assert_allclose(residuals["expected"], by_period["expected"], rtol=1e-9)
    gap = residuals["events"] - residuals["expected"]
    d, e = residuals["events"].to_numpy(), residuals["expected"].to_numpy()
    twice = [2 * ((a * np.log(a / b) if a else 0.0) - (a - b)) for a, b in zip(d, e, strict=True)]
    np.testing.assert_allclose(residuals["deviance_residual"], np.sign(gap) * np.sqrt(twice), rtol=1e-9)
    z = residuals["residual"].to_numpy() - residuals["residual"].mean()
    deviance = residuals["deviance_residual"].to_numpy() - residuals["deviance_residual"].mean()
    n, q = z.size, 0.0
    for row in memory.itertuples():
        r = sum(z[t] * z[t - row.lag] for t in range(row.lag, n)) / sum(v * v for v in z)
        q += n * (n + 2) * r * r / (n - row.lag)
        assert row.autocorrelation == pytest.approx(r, rel=1e-9, abs=1e-12)
        of_deviance = sum(deviance[t] * deviance[t - row.lag] for t in range(row.lag, n)) / (
            deviance @ deviance
        )
        assert row.of_deviance == pytest.approx(of_deviance, rel=1e-9, abs=1e-12)
        assert row.ljung_box == pytest.approx(q, rel=1e-9)
        assert row.p_value == pytest.approx(stats.chi2.sf(q, row.lag), rel=1e-8)
        assert row.band == pytest.approx(1.959964 / np.sqrt(n), rel=1e-6)
    assert list(memory["lag"]) == list(range(1, 13))


def test_too_few_periods_are_refused(sound: World) -> None:
    short = window(sound.risk_set, first=START + 100, last=START + 110)
    with pytest.raises(NumericError, match="11 calendar periods"):
        residual_autocorrelation(sound.fit(), short, sound.features)


def test_longest_run() -> None:
    assert longest_run(np.array([3, 4, 5, 9, 10])) == slice(0, 3)
    assert longest_run(np.array([1, 7, 8])) == slice(1, 3)
