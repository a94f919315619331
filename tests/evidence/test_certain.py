"""Loans that the fit is certain of in double precision: no variance, so no test, and that is said."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from stresskit.core.errors import NumericError
from stresskit.evidence import verdicts
from stresskit.evidence.actual import compare
from stresskit.evidence.collect import Evidence, Questions, evidence
from stresskit.evidence.groups import relative_variance
from tests.evidence.certain import OFFSET_TERMS, pushed
from tests.evidence.world import World

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
    assert "By pushed: left out for want of variance: yes" in verdict(certain, verdicts.MATCH).found
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
