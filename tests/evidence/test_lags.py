"""Lead/lag profile: the shifted feature is the study's own with another lag; a misaligned quarter is found."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import UsageError
from stresskit.core.period import Frequency
from stresskit.evidence import verdicts
from stresskit.evidence.lags import lag_profile
from stresskit.hazard.fit import fit_hazard
from stresskit.macro.features import build_features
from tests.evidence.world import END, START, TERMS, World, macro_history, macro_section, simulate, spec


@pytest.mark.parametrize("place", ["step", "linear"])
@pytest.mark.parametrize(("transform", "over"), [("level", 1), ("difference", 2), ("moving_average", 3)])
def test_refits_are_those_of_the_study_with_another_lag(
    rng: np.random.Generator, place: str, transform: str, over: int
) -> None:
    """Log-likelihood and coefficient of every shift, by building the feature with that lag."""
    world = simulate(41, loans=400, level=-5.0)
    history = macro_history(rng, place=place)

    def features(lag: int):
        macro = macro_section(lag, transform=transform, over=over, place=place)
        return macro, build_features(macro, history, model=Frequency.MONTH, start=START, end=END)

    macro, table = features(2)
    fit = fit_hazard(spec(*TERMS), world.risk_set, table)
    got = lag_profile(fit, world.risk_set, table, macro=macro, history=history, shifts=(-2, -1, 0, 3))
    assert list(got["lag"]) == [0, 1, 2, 5]
    assert got["rows"].nunique() == 1
    for row in got.itertuples():
        again = fit_hazard(spec(*TERMS), world.risk_set, features(row.lag)[1])
        assert row.llf == pytest.approx(again.llf, abs=1e-7)
        assert row.coef == pytest.approx(float(again.params["m"]), abs=1e-7)
        assert row.se_period == pytest.approx(float(again.standard_errors("period")["m"]), rel=1e-5)
    assert got["behind"].min() == 0.0
    assert got.loc[got["best"], "llf"].iloc[0] == got["llf"].max()


def profile(world: World, shifts: tuple[int, ...]) -> pd.DataFrame:
    return lag_profile(
        world.fit(), world.risk_set, world.features, macro=world.macro, history=world.history, shifts=shifts
    )


@pytest.mark.parametrize(("true_lag", "study_lag"), [(1, 1), (1, 2), (2, 1), (0, 1)])
def test_a_quarter_of_misalignment_is_found(true_lag: int, study_lag: int) -> None:
    world = simulate(42, loans=4000, level=-5.4, true_lag=true_lag, study_lag=study_lag)
    table = profile(world, (-2, -1, 0, 1, 2))
    best = table[table["best"]].iloc[0]
    assert best["shift"] == true_lag - study_lag
    verdict = verdicts.on_lag("default", table)
    if true_lag == study_lag:
        assert verdict.status == "in order"
        assert "within 2" in verdict.found
    else:
        assert verdict.status == "look at"
        assert f"Best lag {true_lag}, the study's is {study_lag}" in verdict.found
        assert "beyond 2" in verdict.found


def test_shocks_of_periods_weaken_the_evidence() -> None:
    world = simulate(43, loans=6000, level=-5.0, shock_sd=0.5)
    table = profile(world, (-1, 0, 1))
    worst = table["behind"].idxmax()
    assert table.loc[worst, "behind_scaled"] < 0.6 * table.loc[worst, "behind"]


def test_leads_end_with_history_and_all_shifts_use_the_same_rows() -> None:
    """History that ends with the window: 4 quarters of lead cost the last 12 months, for every shift."""
    world = simulate(44, loans=800, level=-5.2, study_lag=0)
    history = world.history
    last = END // 3 - history.start + 1
    short = type(history)(
        history.frequency,
        history.start,
        {"u": history.values["u"][:last]},
        dict(history.units),
        dict(history.place),
    )
    got = lag_profile(
        world.fit(), world.risk_set, world.features, macro=world.macro, history=short, shifts=(-4, 0, 2)
    )
    begin = world.risk_set.stay_origin + world.risk_set.stay_entry
    end = np.minimum(world.risk_set.stay_origin + world.risk_set.stay_exit, END - 12)
    # a loan that left by payoff is not at risk of default in its last period
    paid = (world.risk_set.stay_cause == 2) & (
        world.risk_set.stay_origin + world.risk_set.stay_exit <= END - 12
    )
    assert set(got["rows"]) == {float(np.maximum(end - begin, 0).sum() - paid.sum())}


def test_shifts_that_history_cannot_carry_are_left_out() -> None:
    world = simulate(45, loans=800, level=-5.2, study_lag=0)
    history = world.history
    late = START // 3 - history.start
    short = type(history)(
        history.frequency,
        START // 3,
        {"u": history.values["u"][late:]},
        dict(history.units),
        dict(history.place),
    )
    got = lag_profile(
        world.fit(), world.risk_set, world.features, macro=world.macro, history=short, shifts=(0, 3, 36)
    )
    assert list(got["shift"]) == [0, 3]


def test_shifts_without_the_studys_own_are_refused(sound: World) -> None:
    with pytest.raises(UsageError, match="own lag"):
        profile(sound, (1, 2))
