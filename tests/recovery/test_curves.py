"""Recovery curves: by hand, against published product limits, and against a known truth."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import NumericError, UsageError
from stresskit.recovery.cases import OPEN, Workouts
from stresskit.recovery.curves import curves_by, open_case_estimates, recovery_curve, resampled
from stresskit.recovery.evidence import treatments
from tests.recovery.world import draw, workouts

DATA = Path(__file__).parent.parent / "data" / "curves"


def test_a_weighted_case_by_hand() -> None:
    """Three cases, two workout periods: n_1 = 100 + 200 + 300, d_1 = 60 + 0 + 90; case 3 is open after one period."""
    w = workouts(
        [
            {"amount": 100.0, "observed": 9, "flows": {1: 60.0, 2: 40.0}, "kind": "full", "closed": 2},
            {"amount": 200.0, "observed": 9, "flows": {2: 50.0}, "kind": "write_off", "closed": 2},
            {"amount": 300.0, "observed": 1, "flows": {1: 90.0}},
        ],
        end=2,
    )
    curve = recovery_curve(w)
    np.testing.assert_array_equal(curve.at_risk, [600.0, 240.0])
    np.testing.assert_array_equal(curve.recovered, [150.0, 90.0])
    # S(1) = 1 - 150/600 = 3/4; S(2) = 3/4 (1 - 90/240) = 15/32
    np.testing.assert_allclose(curve.unresolved, [1.0, 0.75, 15.0 / 32.0], rtol=1e-15)
    assert curve.lgd == pytest.approx(15.0 / 32.0, rel=1e-15)
    assert curve.loss_rate_from(1) == pytest.approx(0.625, rel=1e-15)
    assert list(curve.cases_observed) == [3, 2]
    table = treatments(w, curve).set_index("treatment")["lgd"]
    # closed only: case 2 lost 150 of 300 owed; open as finished: 150 + 210 of 600
    assert table["closed cases only"] == pytest.approx(0.5)
    assert table["open cases as finished"] == pytest.approx(360.0 / 600.0)


def test_a_written_off_amount_stays_at_risk_and_a_cured_one_leaves() -> None:
    """Same flows, once written off, once cured: the write-off keeps 50 in n_2, the cure takes it out at the end of u = 1."""
    open_case = {"amount": 100.0, "observed": 9, "flows": {2: 40.0}}
    first = {"amount": 100.0, "observed": 9, "flows": {1: 50.0}, "closed": 1}
    lost = recovery_curve(workouts([open_case, {**first, "kind": "write_off"}], end=2))
    np.testing.assert_allclose(lost.at_risk, [200.0, 150.0])
    np.testing.assert_allclose(lost.unresolved, [1.0, 0.75, 0.75 * (1 - 40.0 / 150.0)])
    cured = recovery_curve(workouts([open_case, {**first, "kind": "cure"}], end=2), cure_loss=0.1)
    np.testing.assert_allclose(cured.at_risk, [200.0, 100.0])
    np.testing.assert_allclose(cured.cured, [50.0, 0.0])
    np.testing.assert_allclose(cured.unresolved, [1.0, 0.5, 0.5 * 0.6])
    np.testing.assert_allclose(cured.cured_share, [0.0, 0.25, 0.25])
    assert cured.lgd == pytest.approx(0.3 + 0.1 * 0.25)
    # what is left of a case after one period: 0.6 of it is lost, nobody cures any more
    assert cured.loss_rate_from(1) == pytest.approx(0.6)


def test_costs_stand_apart() -> None:
    w = workouts(
        [
            {"amount": 100.0, "observed": 2, "flows": {1: 60.0}, "costs": {1: 3.0, 2: 1.0}},
            {"amount": 300.0, "observed": 1, "costs": {1: 1.0}},
        ],
        end=2,
    )
    # 4 of 400 owed in the first period, 1 of the 100 still under observation in the second
    np.testing.assert_allclose(recovery_curve(w).cost, [0.0, 0.01, 0.02])
    without = recovery_curve(replace(w, costs=np.zeros_like(w.costs)))
    np.testing.assert_array_equal(recovery_curve(w).unresolved, without.unresolved)


def _as_workouts(time: np.ndarray, event: np.ndarray, entry: np.ndarray | None = None) -> Workouts:
    """A unit of money per subject, recovered at once at the event, open when censored."""
    entry = np.zeros(time.size, dtype=int) if entry is None else entry
    rows = [
        {
            "amount": 1.0, "observed": int(t), "entered": int(a),
            **({"flows": {int(t): 1.0}, "kind": "full", "closed": int(t)} if e else {}),
        }
        for t, e, a in zip(time, event, entry, strict=True)
    ]  # fmt: skip
    return workouts(rows, end=int(time.max()))


@pytest.mark.parametrize("arm", ["6-MP", "control"])
def test_unweighted_it_is_the_product_limit(arm: str) -> None:
    """R 4.2.2, survival 3.5-3: survfit on the 6-MP trial (Freireich et al. 1963); tests/data/curves/README.md."""
    trial = pd.read_csv(DATA / "gehan.csv").query("treat == @arm")
    want = pd.read_csv(DATA / "km_na_gehan.csv").query("treat == @arm")
    curve = recovery_curve(_as_workouts(trial["time"].to_numpy(), trial["event"].to_numpy()))
    at = want["t"].to_numpy(dtype=int)
    np.testing.assert_allclose(curve.unresolved[at], want["S_km"].to_numpy(dtype=float), atol=1e-12)
    np.testing.assert_allclose(curve.at_risk[at - 1], want["n_risk"].to_numpy(dtype=float))


@pytest.mark.parametrize("gender", [1, 2])
def test_late_entry_is_the_product_limit_given_survival(gender: int) -> None:
    """R 4.2.2, survival 3.5-3: Channing House, months of age, conditional on 68 years (cond_age)."""
    home = pd.read_csv(DATA / "channing.csv").query("gender == @gender")
    want = pd.read_csv(DATA / "channing_lt_km.csv").query("gender == @gender and cond_age == 68")
    start = 68 * 12
    lives = home[home["exit"] > start]
    entry = np.maximum(lives["ageentry"].to_numpy() - start, 0)
    curve = recovery_curve(_as_workouts(lives["exit"].to_numpy() - start, lives["death"].to_numpy(), entry))
    at = want["age"].to_numpy() * 12 - start
    inside = (at >= 0) & (at < curve.unresolved.size)
    assert inside.sum() >= 4
    np.testing.assert_allclose(
        curve.unresolved[at[inside]], want["S"].to_numpy(dtype=float)[inside], atol=1e-9
    )


def _long_run(sets: int, n: int) -> pd.DataFrame:
    rows = []
    for k in range(sets):
        world = draw(np.random.default_rng([7, k]), n)
        curve = recovery_curve(world.known)
        table = treatments(world.known, curve).set_index("treatment")["lgd"]
        rows.append(
            {
                "truth": world.truth,
                "ours": curve.lgd,
                "to_the_end": _closed_kept_to_the_end(world.known),
                **table,
            }
        )
    return pd.DataFrame(rows)


@pytest.mark.slow
def test_open_and_closed_together_are_more_precise_than_cases_observed_to_the_end() -> None:
    """Cases old enough to be observed for the whole workout give an unbiased LGD too, from fewer cases (Rapisarda & Echeverry 2010): both
    means within 4 Monte Carlo errors of the truth, ours with a spread at least a fifth smaller."""
    gaps = []
    for k in range(200):
        world = draw(np.random.default_rng([17, k]), 600, window=60, end=24)
        w = world.known
        old = w.select(w.observed == w.end)
        finished = float(old.unrecovered()[:, -1].sum() / old.amount.sum())
        gaps.append((recovery_curve(w).lgd - world.truth, finished - world.truth))
    ours, theirs = np.array(gaps).T
    for gap in (ours, theirs):
        assert abs(gap.mean()) < 4.0 * gap.std() / np.sqrt(gap.size)
    assert ours.std() < 0.8 * theirs.std()


def _closed_kept_to_the_end(w: Workouts) -> float:
    """The product limit that keeps what closed cases still owe at risk to U, where open cases of their age are gone."""
    last = np.where(w.kind == OPEN, w.observed, w.end)
    here = np.arange(1, w.end + 1)[None, :] <= last[:, None]
    left = w.unrecovered()[:, :-1]
    return float(np.prod(1.0 - (w.recovered * here).sum(axis=0) / (left * here).sum(axis=0)))


@pytest.mark.slow
def test_open_cases_censored_are_unbiased_and_the_common_mistakes_are_not() -> None:
    """Heavy censoring: defaults of the last 40 months, workouts of 36. Tolerance: 4 Monte Carlo errors of the mean of 120 sets.

    Published property: open and closed cases together are unbiased and more precise than closed ones only
    (Rapisarda & Echeverry 2010). Keeping closed cases at risk after the end of observation is a mistake too: there the
    risk set holds those that failed and not those that may still pay (docs/recovery.md).
    """
    found = _long_run(120, 1500)
    gap = found["ours"] - found["truth"]
    assert abs(gap.mean()) < 4.0 * gap.std() / np.sqrt(len(found))
    for mistake, lowest in (
        ("closed cases only", 0.10),
        ("open cases as finished", 0.30),
        ("to_the_end", 0.10),
    ):
        bias = found[mistake] - found["truth"]
        assert abs(bias.mean()) / found["truth"].mean() > lowest, mistake
        assert abs(bias.mean()) > 10.0 * bias.std() / np.sqrt(len(found)), mistake


@pytest.mark.slow
def test_bands_cover_and_counting_money_would_not() -> None:
    """90 % bands from resampled cases cover the truth in 90 % of 200 sets, within 3.3 binomial errors; Greenwood's formula
    with money for counts gives an error several times too small."""
    covered, ours, money = 0, [], []
    for k in range(200):
        rng = np.random.default_rng([11, k])
        world = draw(rng, 400)
        curve = recovery_curve(world.known)
        bands = resampled(world.known, curve, resamples=200, rng=rng)
        covered += bands.lgd_lower <= _truth() <= bands.lgd_upper
        ours.append(bands.lgd_se)
        d, y = curve.recovered, curve.at_risk
        money.append(curve.lgd * np.sqrt(np.sum(d / (y * (y - d)))))
    assert abs(covered / 200 - 0.9) < 3.3 * np.sqrt(0.9 * 0.1 / 200)
    assert np.mean(ours) > 5.0 * np.mean(money)


def _truth() -> float:
    """Loss rate of the world of ``draw`` in the long run: mean over one large draw (standard error below 0.0004)."""
    if not _KNOWN:
        _KNOWN.append(draw(np.random.default_rng(99), 1_000_000).truth)
    return _KNOWN[0]


_KNOWN: list[float] = []


def test_counting_cases_alike() -> None:
    w = workouts(
        [
            {"amount": 100.0, "observed": 1, "flows": {1: 50.0}},
            {"amount": 900.0, "observed": 1},
        ],
        end=1,
    )
    assert recovery_curve(w).lgd == pytest.approx(0.95)
    assert recovery_curve(w, by="cases").lgd == pytest.approx(0.75)
    with pytest.raises(UsageError, match="'amount' or 'cases'"):
        recovery_curve(w, by="loans")


def test_periods_without_support_count_no_recovery() -> None:
    rows = [{"amount": 100.0, "observed": 1, "flows": {1: 10.0}} for _ in range(6)]
    rows.append({"amount": 100.0, "observed": 3, "flows": {3: 50.0}})
    curve = recovery_curve(workouts(rows, end=3), support=2)
    assert curve.last_supported == 1
    np.testing.assert_allclose(curve.unresolved[1:], curve.unresolved[1])
    with pytest.raises(
        NumericError, match="7 cases are observed in the first workout period, 8 are asked for"
    ):
        recovery_curve(workouts(rows, end=3), support=8)


def test_the_order_of_cases_and_the_unit_of_money_change_nothing() -> None:
    w = draw(np.random.default_rng(5), 300).known
    back = replace(w.select(np.arange(300)[::-1]), case_ids=w.case_ids)
    np.testing.assert_allclose(recovery_curve(back).unresolved, recovery_curve(w).unresolved, rtol=1e-12)
    thousands = replace(w, amount=w.amount / 1000.0, recovered=w.recovered / 1000.0)
    np.testing.assert_allclose(recovery_curve(thousands).unresolved, recovery_curve(w).unresolved, rtol=1e-12)
    twice = recovery_curve(replace(w, amount=2.0 * w.amount, recovered=2.0 * w.recovered))
    np.testing.assert_array_equal(twice.unresolved, recovery_curve(w).unresolved)


def test_segments_and_best_estimates_of_open_cases() -> None:
    rows = [
        {
            "amount": 100.0,
            "observed": 9,
            "flows": {1: 50.0, 2: 25.0},
            "kind": "write_off",
            "closed": 2,
            "static": {"s": "x"},
        },
        {"amount": 200.0, "observed": 1, "flows": {1: 20.0}, "static": {"s": "x"}},
        {
            "amount": 100.0,
            "observed": 9,
            "flows": {1: 100.0},
            "kind": "full",
            "closed": 1,
            "static": {"s": "y"},
        },
    ]
    w = workouts(rows, end=2)
    curves = curves_by(w, ("s",))
    assert list(curves) == ["", "x", "y"]
    assert curves["y"].lgd == 0.0
    table = open_case_estimates(w, curves, ("s",))
    assert list(table["case"]) == ["c00001"]
    # x after one period: 25 of 50 are recovered in the second, so half of the 180 still owed is lost
    assert table["expected_loss"].iloc[0] == pytest.approx(90.0)
    assert table["loss_rate"].iloc[0] == pytest.approx(0.45)
