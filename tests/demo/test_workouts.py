"""The demo's workouts: their truth comes back, and the two common mistakes miss it."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency, parse_period
from stresskit.demo.workouts import RecoveryTruth
from stresskit.macro.features import build_features
from stresskit.macro.read import read_history
from stresskit.runs.api import load_study
from stresskit.runs.recovery import estimate_recovery, fit_recovery, read_study_workouts
from tests.demo.conftest import Written


@pytest.mark.slow
def test_truth_by_money_is_the_truth_by_simulation() -> None:
    """The exact loss rate of RecoveryTruth against 400,000 cases worked out by another route, 4 Monte Carlo errors."""
    truth, rng, n = RecoveryTruth(), np.random.default_rng(7), 400_000
    macro = 6.0 + 1.5 * np.sin(np.arange(truth.end) / 9.0)
    left, open_, lost = np.ones(n), np.ones(n, dtype=bool), np.zeros(n)
    for u in range(1, truth.end + 1):
        share = truth.hazard(u, np.full(n, 0.7), float(macro[u - 1]))
        left = np.where(open_ & (rng.random(n) < share / 0.5), 0.5 * left, left)
        fate = rng.random(n)
        cured = open_ & (u <= truth.cure_until) & (fate < truth.cure)
        dropped = open_ & ~cured & (u >= truth.write_off_from) & (rng.random(n) < truth.write_off)
        lost = np.where(dropped, left, lost)
        open_ &= ~(cured | dropped)
    lost = np.where(open_, left, lost)
    want = truth.loss_rate(np.array([0.7]), macro)[0]
    assert abs(lost.mean() - want) < 4.0 * lost.std() / np.sqrt(n)


@pytest.mark.slow
def test_the_demo_finds_its_recovery_again(full: Written) -> None:
    """Coefficients within 3.5 standard errors of the truth (write-offs and cures barely touch them); LGD of the curve within 3.5 of
    its own errors of the exact expectation over the cases' own calendars, undiscounted; dropping or closing open cases misses it by more."""
    file = load_study(full.study)
    assert file.study.macro is not None
    history = read_history(file.study.macro, base=file.base, model=file.frequency)
    data = read_study_workouts(file.study, base=file.base, frequency=file.frequency, as_of=file.as_of)
    fits = fit_recovery(file.study, data, history, frequency=file.frequency)
    truth, fit = RecoveryTruth(), fits["recovered"]
    assert full.truth["recovery"]["unemployment_rate"] == truth.unemployment_rate
    scale = float(pd.read_csv(full.folder / "workouts.csv")["ltv_at_start"].std())
    for name, want in (
        ("unemployment_level", truth.unemployment_rate),
        ("ltv_at_start", truth.ltv_at_start * scale),
    ):
        # amounts weigh, so the centre and scale of the fit are close to, not equal to, those of the cases
        assert abs(fit.params[name] - want) < 3.5 * fit.bse[name] + 0.02, name
    plain = file.study.model_copy(
        update={"recovery": file.study.recovery.model_copy(update={"discount": "none"})}
    )  # type: ignore[union-attr]
    nominal = read_study_workouts(plain, base=file.base, frequency=file.frequency, as_of=file.as_of)
    found = estimate_recovery(plain, nominal)
    w = nominal.workouts
    start, end = int(w.default.min()) + 1, parse_period("2025-12", Frequency.MONTH)
    table = build_features(file.study.macro, history, model=file.frequency, start=start, end=end)
    rate = table.column("unemployment_level")
    # exact expectation of the observed cohorts: those observed to the end of workout
    whole = w.select(w.observed == w.end)
    ltv = whole.static["ltv_at_start"].astype(float)
    rates = np.array(
        [
            truth.loss_rate(np.array([v]), rate[p + 1 - start : p + 1 - start + truth.end])[0]
            for v, p in zip(ltv, whole.default, strict=True)
        ]
    )
    old = estimate_recovery(plain, type(nominal)(whole, nominal.reconciliation, nominal.findings, 0.0))
    curve, band = old.curves[""], old.bands[""]
    want = float(np.average(rates, weights=whole.amount))
    # the last payment of a case that owes little takes all of it: up to 5 % of what is owed comes a little earlier
    assert abs(curve.unresolved[-1] - want) < 3.5 * band.lgd_se + 0.02
    ours = found.tables["treatments"].query("segment == 'all cases'").set_index("treatment")["against_ours"]
    assert ours["open cases as finished"] > 0.15
    assert ours["closed cases only"] < -0.02
