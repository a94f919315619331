"""Loans that the fit is certain of in double precision: no variance, so no test, and that is said."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest

import stresskit.evidence.calibration as calibrating
from stresskit.core.errors import NumericError
from stresskit.evidence import verdicts
from stresskit.evidence.actual import compare
from stresskit.evidence.collect import Evidence, Questions, evidence
from stresskit.evidence.groups import by_period, relative_variance, tally
from stresskit.evidence.lags import _pearson
from stresskit.evidence.residuals import residual_tables
from stresskit.evidence.rows import fit_rows, window
from stresskit.evidence.stability import stability
from stresskit.hazard.link import LINKS
from tests.evidence.certain import OFFSET_TERMS, pushed
from tests.evidence.world import MONTHS, START, TERMS, World

ASKED = Questions(columns=("pushed", "region"), shifts=(0,))


@pytest.fixture(scope="module", params=["cloglog", "logit"])
def certain(request: pytest.FixtureRequest, sound: World) -> Evidence:
    """The evidence with 40 loans more whose first month has p = 1, and which default in it."""
    world = pushed(sound, 50.0)
    fit = world.fit(OFFSET_TERMS, link=request.param)
    return evidence({"default": fit}, world.risk_set, world.features, questions=ASKED)


def verdict(found: Evidence, asked: str) -> verdicts.Verdict:
    (one,) = [v for v in found.verdicts if v.asked == asked]
    return one


def test_a_group_without_variance_is_left_out_and_named(certain: Evidence) -> None:
    table, totals = certain.tables["actual_expected"], certain.tables["totals"].set_index("by")
    group = table[(table["by"] == "pushed") & (table["group"] == "yes")].iloc[0]
    assert (group["events"], group["expected"]) == (40.0, 40.0)
    assert np.isnan(group["z_binomial"])
    assert np.isnan(group["z_shock"])
    assert (group["low_events"], group["high_events"]) == (40.0, 40.0)
    assert group["note"] == "no variance: the fit is certain of every row"
    others = table.drop(group.name)
    assert (others.loc[~others["by"].isin(("push", "pushed")), "note"] == "").all()
    assert totals.loc["pushed", "note"] == "left out for want of variance: yes"
    assert (totals.loc["pushed", "groups"], totals.loc["pushed", "pooled_to"]) == (2, 1)
    assert totals.loc["region", "note"] == ""
    assert "pushed, left out for want of variance: yes" in verdict(certain, verdicts.MATCH).found
    assert verdict(certain, verdicts.MATCH).status == "in order"


def test_the_other_groups_are_tested_as_if_the_certain_one_were_not_there(sound: World) -> None:
    """The test of a third group beside them: the same book without the certain loans gives the same chi-square."""
    world = pushed(sound, 50.0)
    r = world.risk_set
    three = np.where(
        r.static["pushed"] == "yes", "certain", np.where(r.static["x"] > 0.3, "high", "low")
    ).astype(object)
    wide = dataclasses.replace(r, static={**r.static, "three": three})
    alone = dataclasses.replace(
        sound.risk_set, static={**sound.risk_set.static, "three": three[: sound.risk_set.loan_ids.size]}
    )
    terms = ({"age": "log", "support": 1}, {"macro": "m"})
    ours = dataclasses.replace(world, risk_set=wide).fit((*terms, {"offset": "push"}), link="logit")
    theirs = dataclasses.replace(sound, risk_set=alone).fit(terms, link="logit")
    a = compare(ours, wide, world.features, columns=["three"]).totals.set_index("by").loc["three"]
    b = compare(theirs, alone, sound.features, columns=["three"]).totals.set_index("by").loc["three"]
    assert a["df"] == b["df"] == 1
    assert a["chi2"] == pytest.approx(b["chi2"], rel=1e-6)
    assert a["chi2"] > 10.0


def test_events_that_the_fit_rules_out_ask_for_a_look(sound: World) -> None:
    """With the logit p underflows to 0 at -800, and yet one of 40 such loans defaults."""
    world = pushed(sound, -800.0, events=1, ages=5)
    fit = world.fit(OFFSET_TERMS, link="logit")
    compared = compare(fit, world.risk_set, world.features, columns=["pushed"])
    row = compared.table[(compared.table["by"] == "pushed") & (compared.table["group"] == "yes")].iloc[0]
    assert (row["events"], row["expected"]) == (1.0, 0.0)
    assert row[["ratio", "z_binomial", "z_shock"]].isna().all()
    assert row["note"].endswith(", and wrong")
    found = verdicts.on_groups("default", compared.totals)
    assert found.status == "look at"
    assert found.found.startswith("Not where the fit is certain")


def test_periods_without_variance_do_not_hang_the_moment_equation(rng: np.random.Generator) -> None:
    expected = np.full(60, 40.0)
    events = rng.poisson(expected * rng.gamma(10.0, 0.1, 60)).astype(float)
    plain = relative_variance(events, expected, expected, 1)
    assert plain > 0.0
    more = [np.append(column, [v, 0.0]) for column, v in ((events, 7.0), (expected, 7.0), (expected, 0.0))]
    assert relative_variance(*more, 1) == plain
    wrong = [np.append(column, v) for column, v in ((events, 3.0), (expected, 0.0), (expected, 0.0))]
    assert relative_variance(*wrong, 1) == plain
    tiny = [np.append(column, v) for column, v in ((events, 1.0), (expected, 1e-200), (expected, 1e-200))]
    with pytest.raises(NumericError, match=r"explains 1 of them \(the first has 1 events, 1e-200 expected"):
        relative_variance(*tiny, 1)


def _seen(eta: list[float], event: list[bool]) -> calibrating._Seen:
    n = len(eta)
    return calibrating._Seen(
        0.0, np.array(eta), np.array(event, dtype=np.bool_), np.ones(n), np.arange(n) % 6, np.zeros((2, 1))
    )


BOTH = np.array([True, True])


def test_a_refit_without_an_improving_step_is_refused_in_words() -> None:
    """Rows certain both ways and one that is not so: information e^-50, a step of e^50, no halving of which helps."""
    rows = _seen([-50.0] * 20 + [50.0] * 20, [False] * 19 + [True] * 21)
    with pytest.raises(NumericError, match="no step that improves its log-likelihood in 30 halvings"):
        calibrating._refit(rows, LINKS["logit"], BOTH)
    with pytest.raises(NumericError, match="too many predictions are certain to tell level and slope"):
        calibrating._refit(rows, LINKS["cloglog"], BOTH)


def test_events_beyond_the_reach_of_exp_count_as_certain(rng: np.random.Generator) -> None:
    """An event row at 800 has log-likelihood 0 and score 0, as one at 50 has: the level moves by neither."""
    eta = list(rng.normal(-2.0, 1.0, 200))
    event = list(rng.random(200) < 0.15)
    link, level = LINKS["cloglog"], np.array([True, False])
    plain, near, far = (
        calibrating._refit(_seen(eta + more, event + [True] * len(more)), link, level)
        for more in ([], [50.0], [800.0])
    )
    assert near.params == pytest.approx(plain.params, rel=1e-9)
    assert far.params == pytest.approx(plain.params, rel=1e-9)
    assert np.isfinite(calibrating._refit(_seen([*eta, 800.0], [*event, True]), link, BOTH).params).all()
    with pytest.raises(NumericError, match="a row without event has a predicted probability of 1"):
        calibrating._refit(_seen([*eta, 800.0], [*event, False]), link, BOTH)
    tried = calibrating._evaluate(_seen([*eta, 50.0], [*event, False]), link, np.array([0.0, 13.1]), BOTH)
    assert tried.llf == -np.inf


@pytest.mark.parametrize("push", [-50.0, 50.0])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_later_loans_pushed_out_of_reach_raise_no_warning(sound: World, link: str, push: float) -> None:
    """Survivors of an offset that the earlier fit has not seen: an answer or a reason, and nothing on stderr."""
    world = pushed(sound, push, events=0, ages=3)
    split = START + 60
    earlier = dataclasses.replace(sound, risk_set=window(sound.risk_set, last=split))
    static = {**earlier.risk_set.static, "push": np.zeros(earlier.risk_set.loan_ids.size)}
    earlier = dataclasses.replace(earlier, risk_set=dataclasses.replace(earlier.risk_set, static=static))
    fit = earlier.fit(OFFSET_TERMS, link=link)
    later = window(world.risk_set, first=split + 1)
    if push > 0.0 and link == "cloglog":
        with pytest.raises(NumericError, match="calibrat"):
            calibrating.calibration(fit, later, world.features)
        return
    table = calibrating.calibration(fit, later, world.features)
    assert np.isfinite(table[["estimate", "se", "p_value"]].to_numpy(dtype=float)).all()


def test_an_offset_is_no_walk_of_the_coefficients(sound: World) -> None:
    """Certain loans move no estimate, so the halves are those of the book without them."""
    world = pushed(sound, 50.0)
    split = START + 57
    ours = stability(world.fit(OFFSET_TERMS, link="logit"), world.risk_set, world.features, split=split)
    theirs = stability(sound.fit(TERMS, link="logit"), sound.risk_set, sound.features, split=split)
    columns = ["before", "after", "z"]
    np.testing.assert_allclose(
        ours.loc[~ours["held"], columns], theirs.loc[~theirs["held"], columns], rtol=1e-4, atol=1e-6
    )


def test_a_period_without_variance_ends_a_run_of_residuals(sound: World) -> None:
    """Month 30 has no variance: its residual is blank, and memory is judged on the 89 months after it."""
    fit = sound.fit()
    rows = fit_rows(fit, sound.risk_set, sound.features)
    period = tally(rows, [by_period(rows)]).groups["period"]
    variance, events = period.variance.copy(), period.events.copy()
    variance[30], events[30] = 0.0, period.expected[30]
    certain = dataclasses.replace(period, variance=variance, events=events)
    residuals, memory = residual_tables(rows, certain, 0.0)
    assert list(np.flatnonzero(residuals["residual"].isna())) == [30]
    assert np.isnan(residuals["deviance_residual"][30])
    assert (memory["periods"] == MONTHS - 31).all()
    plain, _ = residual_tables(rows, period, 0.0)
    kept = np.arange(31, MONTHS)
    z = plain["residual"].to_numpy()[kept]
    z = z - z.mean()
    assert memory["autocorrelation"][0] == pytest.approx(float(z[1:] @ z[:-1] / (z @ z)), rel=1e-9)
    assert memory["p_value"].notna().all()


def test_residuals_that_do_not_vary_are_refused(sound: World) -> None:
    fit = sound.fit()
    rows = fit_rows(fit, sound.risk_set, sound.features)
    period = tally(rows, [by_period(rows)]).groups["period"]
    flat = dataclasses.replace(period, events=period.expected)
    with pytest.raises(NumericError, match="do not vary"):
        residual_tables(rows, flat, 0.0)


def test_events_where_none_is_expected_leave_the_size_of_shocks_unknown() -> None:
    events, expected = np.array([3.0, 0.0, 5.0]), np.array([4.0, 0.0, 4.0])
    assert _pearson(events, expected) == pytest.approx(0.5)
    assert np.isnan(_pearson(events + 1.0, expected))
    profile = pd.DataFrame(
        {"term": "m", "lag": [0, 1], "shift": [-1, 0], "llf": [-100.0, -190.0], "behind": [0.0, 90.0], "behind_scaled": np.nan,
         "coef": 0.4, "best": [True, False], "study": [False, True]}
    )  # fmt: skip
    assert verdicts.on_lag("default", profile).status == "not possible"


def test_a_fitted_curve_at_zero_under_living_loans_asks_for_a_look() -> None:
    table = pd.DataFrame(
        {"age": [1, 2, 3], "events": [5.0, 5.0, 5.0], "observed": [0.9, 0.8, 0.7], "fitted": [0.9, 0.0, 0.0], "gap": [0.0, 0.8, 0.7],
         "z_shock": [0.1, np.nan, np.nan]}
    )  # fmt: skip
    found = verdicts.on_survival("default", table)
    assert found.status == "look at"
    assert found.found == "No: by the fit no loan is left from age 2 on, where 80.00 % are."


def test_horizons_without_an_interval_are_named() -> None:
    auc = pd.DataFrame(
        {"sample": ["all periods", "all periods", "out of time"], "horizon": [1, 12, 1], "auc": [0.7, 0.7, 0.9],
         "lower": [0.6, np.nan, np.nan]}
    )  # fmt: skip
    found = verdicts.on_ranking("default", auc).found
    assert found.endswith(
        "Not computed, events in too few periods: all periods within 12; out of time within 1."
    )
