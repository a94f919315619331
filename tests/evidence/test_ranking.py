"""AUC: double loop over cases and controls, a closed form, and no bias from late entry or censoring."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from stresskit.core.errors import UsageError
from stresskit.core.values import RiskSet
from stresskit.evidence.ranking import auc_by_horizon
from stresskit.evidence.rows import window
from stresskit.hazard.result import HazardFit
from tests.evidence.world import END, World, rows_of, simulate


def double_loop(
    fit: HazardFit, world: World, risk_set: RiskSet, horizon: int, every: int
) -> tuple[float, float]:
    """(auc, cases): every case against every control of its landmark and period."""
    rows = rows_of(risk_set, world.features)
    rows["p"] = fit.predict(rows)
    last, first = int(rows["period"].max()), int(rows["period"].min()) - 1
    at = {
        (s, t): (p, y, w)
        for s, t, p, y, w in zip(*[rows[c] for c in ("stay", "period", "p", "y", "weight")], strict=True)
    }
    by_period: dict[int, list[int]] = {}
    for s, t in at:
        by_period.setdefault(t, []).append(s)
    total = cases = 0.0
    for landmark in range(last - 1, first - 1, -every):
        for t in range(landmark + 1, min(landmark + horizon, last) + 1):
            there = [s for s in by_period.get(t, []) if (s, landmark + 1) in at]
            controls = [s for s in there if not at[s, t][1]]
            mass = sum(at[s, t][2] for s in controls)
            for case in (s for s in there if at[s, t][1]):
                if not controls:
                    continue
                mine, below = at[case, landmark + 1][0], 0.0
                for s in controls:
                    other = at[s, landmark + 1][0]
                    tie = abs(other - mine) < 1e-13
                    below += at[s, t][2] * (0.5 if tie else float(other < mine))
                total += at[case, t][2] * below / mass
                cases += at[case, t][2]
    return total / cases, cases


def with_gaps(risk_set: RiskSet, rng: np.random.Generator) -> RiskSet:
    """Some stays cut in two with a hole between, weights of 1 and 2."""
    n = risk_set.stay_loan.size
    length = risk_set.stay_exit - risk_set.stay_entry
    cut = np.flatnonzero((length > 6) & (rng.random(n) < 0.3))
    middle = risk_set.stay_entry + length // 2
    first_exit, first_cause = risk_set.stay_exit.copy(), risk_set.stay_cause.copy()
    first_exit[cut], first_cause[cut] = middle[cut] - 1, 0
    columns = {
        "stay_loan": (risk_set.stay_loan, risk_set.stay_loan[cut]),
        "stay_origin": (risk_set.stay_origin, risk_set.stay_origin[cut]),
        "stay_entry": (risk_set.stay_entry, middle[cut] + 1),
        "stay_exit": (first_exit, risk_set.stay_exit[cut]),
        "stay_cause": (first_cause, risk_set.stay_cause[cut]),
    }
    joined = {name: np.concatenate(pair) for name, pair in columns.items()}
    order = np.lexsort((joined["stay_entry"], joined["stay_loan"]))
    weight = np.where(joined["stay_loan"] % 3 == 0, 2.0, 1.0)
    return replace(risk_set, **{n: v[order] for n, v in joined.items()}, weight=weight[order])


@pytest.mark.parametrize("horizon", [1, 12, 24])
def test_double_loop(sound: World, rng: np.random.Generator, horizon: int) -> None:
    world = simulate(12, loans=500, level=-4.8)
    risk_set = with_gaps(world.risk_set, rng)
    fit = world.fit()
    got = auc_by_horizon(fit, risk_set, world.features, horizons=(horizon,)).set_index("horizon").loc[horizon]
    auc, cases = double_loop(fit, world, risk_set, horizon, 1 if horizon == 1 else 12)
    assert got["cases"] == cases
    assert got["auc"] == pytest.approx(auc, rel=1e-10)


def test_two_levels_have_a_closed_form() -> None:
    """Only a two-level category matters: in a period with share s of the risky, hazard ratio r, a case is
    risky with chance h = s r / (s r + 1 - s), so AUC = h (1 - s) + (h s + (1 - h)(1 - s)) / 2."""
    world = simulate(31, loans=9000, slope=0.0, x_effect=0.0, level=-5.4)
    fit = world.fit(({"loan": "product", "as": "category", "reference": "fixed"},))
    got = auc_by_horizon(fit, world.risk_set, horizons=(12,)).set_index("horizon")
    ratio = np.exp(0.4)
    s = float((world.risk_set.static["product"] == "floating").mean())
    h = s * ratio / (s * ratio + 1 - s)
    truth = h * (1 - s) + 0.5 * (h * s + (1 - h) * (1 - s))
    for horizon in (1, 12):
        row = got.loc[horizon]
        assert row["se"] < 0.02
        assert abs(row["auc"] - truth) < 4 * row["se"] + 0.003  # the share falls a little as the risky leave


def test_late_entry_and_censoring_leave_it_where_it_was() -> None:
    """A third of the loans enters late at random, a third is lost at random: the same AUC within error."""
    world = simulate(32, loans=9000, level=-5.6)
    fit, rng = world.fit(), np.random.default_rng(5)
    r = world.risk_set
    length = r.stay_exit - r.stay_entry
    late = np.where((rng.random(length.size) < 0.33) & (length > 4), length // 2, 0)
    lost = np.where((rng.random(length.size) < 0.33) & (length - late > 4), (length - late) // 3, 0)
    cut = replace(
        r,
        stay_entry=r.stay_entry + late,
        stay_exit=r.stay_exit - lost,
        stay_cause=np.where(lost > 0, 0, r.stay_cause),
    )
    whole = auc_by_horizon(fit, r, world.features).set_index("horizon")
    less = auc_by_horizon(fit, cut, world.features).set_index("horizon")
    for horizon in (1, 12, 24, 36):
        a, b = whole.loc[horizon], less.loc[horizon]
        assert b["cases"] < 0.9 * a["cases"]
        assert abs(a["auc"] - b["auc"]) < 4 * b["se"]
        assert 0.6 < a["auc"] < 0.75


def test_standard_error_is_the_spread_between_books() -> None:
    values, errors = [], []
    for seed in range(24):
        world = simulate(500 + seed, loans=1500, level=-5.2)
        row = (
            auc_by_horizon(world.fit(), world.risk_set, world.features, horizons=(12,))
            .set_index("horizon")
            .loc[12]
        )
        values.append(row["auc"])
        errors.append(row["se"])
    # a standard deviation from 24 values has a relative error of 1 / sqrt(46)
    assert np.std(values, ddof=1) == pytest.approx(np.mean(errors), rel=4 / np.sqrt(46))


def test_refused_and_empty(sound: World) -> None:
    with pytest.raises(UsageError, match="at least 1"):
        auc_by_horizon(sound.fit(), sound.risk_set, sound.features, horizons=(0,))
    end = window(sound.risk_set, first=END)
    quiet = replace(end, stay_cause=np.zeros_like(end.stay_cause))
    row = auc_by_horizon(sound.fit(), quiet, sound.features).iloc[0]
    assert np.isnan(row["auc"])
    assert row["cases"] == 0
