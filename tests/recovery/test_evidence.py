"""Triangle, hold-out, worst years: by hand and with what was known at a date."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.recovery.cases import OPEN
from stresskit.recovery.curves import recovery_curve
from stresskit.recovery.evidence import hold_out, long_run_average, resolved_by_year, triangle, worst_years
from tests.recovery.world import UNTIL, draw, workouts


def test_a_triangle_by_hand() -> None:
    """Defaults in 2022, 2023 and 2024, observed to December 2025."""
    rows = [
        {"amount": 100.0, "observed": UNTIL - (2022 * 12 + 5), "flows": {1: 10.0, 13: 30.0, 25: 20.0}},
        {
            "amount": 300.0,
            "observed": UNTIL - (2023 * 12 + 0),
            "flows": {12: 60.0, 24: 60.0},
            "kind": "write_off",
            "closed": 24,
        },
        {"amount": 100.0, "observed": UNTIL - (2024 * 12 + 11), "flows": {12: 50.0}},
    ]
    w = workouts(rows, end=30)
    table = triangle(w).set_index(["default_year", "workout_year"])["recovered_share"]
    assert table.to_dict() == {
        (2022, 1): 0.1,
        (2022, 2): 0.4,
        (2022, 3): 0.6,
        (2023, 1): 0.2,
        (2023, 2): 0.4,
        (2024, 1): 0.5,
        (2023, 3): 0.4,
    }
    years = resolved_by_year(w).set_index("default_year")
    assert years.loc[2023, "closed_share_amount"] == 1.0
    assert years.loc[2022, "still_owed_open_share"] == pytest.approx(0.4)
    assert years.loc[2022, "open"] == 1


def test_what_was_known_at_a_date_is_what_a_reader_of_that_date_would_have() -> None:
    w = draw(np.random.default_rng(3), 400, window=50).known
    then = UNTIL - 20
    past = w.known_at(then)
    assert (past.default < then).all()
    assert past.until == then
    later = np.arange(1, w.end + 1)[None, :] > (then - past.default)[:, None]
    assert not past.recovered[later].any()
    assert (past.closed <= then - past.default).all()
    assert ((past.kind == OPEN) == (past.closed == 0)).all()
    # nothing that happened later can move it
    changed = draw(np.random.default_rng(3), 400, window=50).known.known_at(then)
    np.testing.assert_array_equal(changed.recovered, past.recovered)


@pytest.mark.slow
def test_the_hold_out_predicts_a_steady_world_and_sees_a_slump() -> None:
    """Steady: mean difference within 4 errors of zero over 40 draws. Slump in the last two years: realised losses stand out."""
    steady, slump = [], []
    for k in range(40):
        rng = np.random.default_rng([21, k])
        steady.append(
            hold_out(draw(rng, 1500, window=72, end=24).known, cure_loss=0.0, support=5)["difference"].mean()
        )
        scale = np.where(np.arange(72 + 24 + 1) < 48, 1.0, 0.4)
        slump.append(
            hold_out(draw(rng, 1500, window=72, end=24, hazard=scale).known, cure_loss=0.0, support=5)[
                "difference"
            ].iloc[-1]
        )
    assert abs(np.mean(steady)) < 4.0 * np.std(steady) / np.sqrt(40)
    assert np.mean(slump) > 0.1


def test_worst_years_are_completed_and_ranked() -> None:
    w = draw(np.random.default_rng(4), 2000, window=60, end=24).known
    curve = recovery_curve(w)
    worst = worst_years(w, curve, years=3)
    assert list(worst["lgd"]) == sorted(worst["lgd"], reverse=True)
    year = int(worst["default_year"].iloc[0])
    cohort = w.select(w.default_year == year)
    upto = int(cohort.observed.min())
    own = recovery_curve(cohort)
    assert worst["lgd"].iloc[0] == pytest.approx(
        own.unresolved[upto] * curve.unresolved[-1] / curve.unresolved[upto]
    )
    whole = [y for y in np.unique(w.default_year) if int(w.select(w.default_year == y).observed.min()) >= 24]
    mean = np.mean([recovery_curve(w.select(w.default_year == y)).lgd for y in whole])
    assert long_run_average(w, curve) == pytest.approx(mean)
