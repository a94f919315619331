"""What a fit refuses, and that the message names the culprit."""

from __future__ import annotations

import dataclasses
import re
from types import SimpleNamespace
from typing import Any, cast

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import DataError, NumericError, UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.fit import Backend, fit_hazard
from stresskit.hazard.learn import _moving_range
from tests.hazard.hazard_cases import feature_table, make_spec, simulated_panel

BACKENDS = pytest.mark.parametrize("backend", ["rows", "factored"])


def _rows(n: int = 600, seed: int = 0) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    return pd.DataFrame(
        {
            "loan": np.arange(n),
            "age": rng.integers(1, 7, n),
            "x": rng.normal(size=n),
            "grade": rng.choice(["a", "b", "c"], n),
            "region": rng.choice(["north", "south"], n),
            "event": (rng.random(n) < 0.2).astype(int),
        }
    )


def _risk_set(frame: pd.DataFrame) -> RiskSet:
    static = [c for c in frame.columns if c not in ("loan", "age", "event")]
    return sk.risk_set_from_rows(frame, loan="loan", age="age", event="event", static=static)


def _refusal(frame: pd.DataFrame, *terms: dict[str, Any], **more: Any) -> str:
    with pytest.raises(NumericError) as caught:
        fit_hazard(make_spec(*terms), _risk_set(frame), **more)
    return str(caught.value)


def test_no_events() -> None:
    frame = _rows().assign(event=0)
    assert "no events of 'default' among 600 rows" in _refusal(frame, {"loan": "x"})


def test_nothing_but_events() -> None:
    assert "every row" in _refusal(_rows().assign(event=1), {"loan": "x"})


def test_events_that_lie_where_features_are_not_known(panel: tuple[RiskSet, FeatureTable]) -> None:
    risk_set, features = panel
    rate = features.column("rate").copy()
    periods = risk_set.stay_origin + risk_set.stay_exit - features.start
    rate[np.unique(periods[risk_set.stay_cause == 1])] = np.nan
    with pytest.raises(
        NumericError, match=r"no events .*\(\d+ events lie in rows whose macro features are not known\)"
    ):
        fit_hazard(make_spec({"macro": "rate"}), risk_set, feature_table(features.start, rate=rate))


@pytest.mark.parametrize("reference", [None, "b"])
def test_a_level_without_events_is_named_before_fitting(reference: str | None) -> None:
    frame = _rows()
    frame.loc[frame["grade"] == "b", "event"] = 0
    message = _refusal(frame, {"loan": "grade", "as": "category", "reference": reference})
    assert f"grade[b]: {(frame['grade'] == 'b').sum()} rows at risk, no events" in message
    assert "Pool" in message


def test_a_level_of_nothing_but_events_is_named() -> None:
    frame = _rows()
    frame.loc[frame["grade"] == "c", "event"] = 1
    assert "grade[c]: all of" in _refusal(frame, {"loan": "grade", "as": "category"})


@pytest.mark.parametrize(("bands", "label"), [(None, "age[4]"), ((3, 4), "age[4]"), ((2, 3), None)])
def test_a_step_without_events_is_named(bands: tuple[int, ...] | None, label: str | None) -> None:
    frame = _rows()
    frame.loc[frame["age"] == 4, "event"] = 0
    terms = ({"age": "steps", "bands": bands},)
    if label is None:
        fit = fit_hazard(make_spec(*terms), _risk_set(frame))
        assert list(fit.design.terms[0].labels) == ["age[1-2]", "age[3]", "age[4+]"]
    else:
        assert f"{label}: " in _refusal(frame, *terms)


def test_a_band_without_rows_is_named() -> None:
    message = _refusal(_rows(), {"age": "steps", "bands": (3, 6, 12)})
    assert "no rows at risk in age[7-12], age[13+]" in message


@BACKENDS
def test_a_segment_of_two_categories_without_events_is_named(backend: str) -> None:
    frame = _rows().query("not (grade == 'b' and region == 'south' and event == 1)")
    terms = (
        {"loan": "grade", "as": "category", "reference": "a"},
        {"loan": "region", "as": "category", "reference": "north"},
        {"interaction": ("grade", "region")},
    )
    message = _refusal(frame, *terms, backend=backend)
    assert "grade[b]:region[south]: " in message
    assert "grade[c]" not in message


@pytest.mark.parametrize("other", ["region", "age"])
def test_a_pair_of_levels_without_events_is_named_though_both_are_references(other: str) -> None:
    """No column stands for this pair, so only the table of pairs can tell."""
    frame = _rows().assign(band=lambda f: np.where(f["age"] <= 3, "early", "late"))
    here = (frame["region"] == "north") if other == "region" else (frame["age"] <= 3)
    frame.loc[(frame["grade"] == "a") & here, "event"] = 0
    terms = (
        {"loan": "grade", "as": "category", "reference": "a"},
        {"loan": "region", "as": "category", "reference": "north"}
        if other == "region"
        else {"age": "steps", "bands": (3,)},
        {"interaction": (other, "grade")},
    )
    label = "region[north]:grade[a]" if other == "region" else "grade[a]:age[1-3]"
    message = _refusal(frame, *terms)
    assert f"{label}: {((frame['grade'] == 'a') & here).sum()} rows at risk, no events" in message
    assert message.count("rows at risk") == 1


@BACKENDS
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_a_number_that_parts_events_exactly_is_named(link: str, backend: str) -> None:
    frame = _rows()
    frame["x"] = np.where(frame["event"] == 1, 1.0, -1.0) * (0.5 + np.abs(frame["x"]))
    with pytest.raises(NumericError, match="separation") as caught:
        fit_hazard(make_spec({"loan": "x"}, {"age": "linear"}, link=link), _risk_set(frame), backend=backend)
    assert re.search(r"[:;] (.*, )?x( \(now .*)? part|x \(now ", str(caught.value)), str(caught.value)
    assert "intercept" not in str(caught.value)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("spread", [0.01, 0.05, 0.1])
def test_the_column_is_named_and_not_the_intercept_that_runs_with_it(link: str, spread: float) -> None:
    """A moving column that is 1 where the event comes and 0 elsewhere, with some noise: the intercept is far out first."""
    risk_set, _ = simulated_panel(loans=300, seed=12)
    last = np.cumsum(risk_set.stay_exit - risk_set.stay_entry) - 1
    leak = np.random.default_rng(0).normal(0.0, spread, risk_set.n_rows)
    leak[last[risk_set.stay_cause == 1]] += 1.0
    data = dataclasses.replace(risk_set, moving={"leak": leak})
    with pytest.raises(NumericError, match="separation") as caught:
        fit_hazard(make_spec({"age": "log"}, {"loan": "leak"}, link=link), data)
    words = str(caught.value)
    assert "leak" in words
    assert "intercept" not in words


@BACKENDS
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_a_number_that_parts_some_events_runs_away_and_is_named(link: str, backend: str) -> None:
    """Quasi-separation: no events at all where x is 0, and nothing tells it before fitting (x is a number)."""
    frame = _rows()
    frame["x"] = np.where((frame["event"] == 0) & (frame["age"] > 3), -2.5, 0.0)
    with pytest.raises(NumericError, match=r"separation: still running away in iteration \d+.* x \(now"):
        fit_hazard(make_spec({"loan": "x"}, {"age": "linear"}, link=link), _risk_set(frame), backend=backend)


@pytest.mark.parametrize("backend", ["rows", "auto"])
@pytest.mark.parametrize("unit", [1e-3, 1.0, 1e6])
def test_units_of_a_moving_column_decide_nothing_about_separation(unit: float, backend: Backend) -> None:
    """A strong effect of a column of small numbers, such as a rate, is no separation; one that parts the events is, in any unit."""
    rng = np.random.default_rng(2)
    frame = pd.DataFrame({"loan": np.repeat(np.arange(3000), 8), "age": np.tile(np.arange(1, 9), 3000)})
    z = rng.normal(size=len(frame))
    frame["event"] = (rng.random(len(frame)) < -np.expm1(-np.exp(-7.0 + 3.0 * z))).astype(int)
    frame["z"] = unit * z
    frame = frame[frame.groupby("loan")["event"].cumsum() - frame["event"] == 0]
    told = {"loan": "loan", "age": "age", "event": "event", "moving": ["z"]}
    terms = ({"age": "linear"}, {"loan": "z"}, {"interaction": ("age", "z")})
    fit = fit_hazard(make_spec(*terms), sk.risk_set_from_rows(frame, **told), backend=backend)
    assert fit.params["z"] * unit == pytest.approx(3.0, abs=5 * fit.standard_errors("model")["z"] * unit)
    found = next(g for g in fit.gates if g.name == "separation").found
    assert float(found.split(": ")[1]) < 10.0
    parted = frame.assign(z=unit * (frame["event"] + 0.01 * rng.normal(size=len(frame))))
    with pytest.raises(NumericError, match=r"separation.*\bz\b"):
        fit_hazard(make_spec(*terms[:2]), sk.risk_set_from_rows(parted, **told), backend=backend)


def test_strong_but_finite_effects_are_not_taken_for_separation() -> None:
    """One event among 20,000 rows of a level, three in ten in the other: a true difference of about 9."""
    rng = np.random.default_rng(1)
    frame = pd.DataFrame(
        {"loan": np.arange(24_000), "age": 1, "grade": np.repeat(["rare", "often"], [20_000, 4_000])}
    )
    frame["event"] = (frame["grade"] == "often") & (rng.random(24_000) < 0.3)
    frame.loc[17, "event"] = True
    fit = fit_hazard(make_spec({"loan": "grade", "as": "category"}), _risk_set(frame))
    p = frame.groupby("grade")["event"].mean()
    truth = np.log(-np.log1p(-p["often"])) - np.log(-np.log1p(-p["rare"]))
    assert fit.params["grade[often]"] == pytest.approx(truth, rel=1e-8)


@BACKENDS
def test_columns_that_are_combinations_are_named(backend: str) -> None:
    frame = _rows()
    frame["twice"] = 2.0 * frame["x"] + 3.0
    message = _refusal(frame, {"loan": "x"}, {"loan": "twice"}, backend=backend)
    assert "cannot be told apart" in message
    assert "twice" in message
    assert "x" in message
    constant = _refusal(frame.assign(one=7.0), {"loan": "x"}, {"loan": "one"}, backend=backend)
    assert "'one' is a combination of 'intercept'" in constant
    assert "is 0 in every row" in _refusal(
        frame.assign(nil=0.0), {"loan": "x"}, {"loan": "nil"}, backend=backend
    )


@pytest.mark.parametrize("age", [{"age": "linear"}, {"age": "spline", "knots": 2}, {"age": "quadratic"}])
@BACKENDS
def test_age_period_and_cohort_together_are_refused_by_name(age: dict[str, Any], backend: str) -> None:
    risk_set, features = simulated_panel(loans=500)
    first = risk_set.stay_loan.searchsorted(np.arange(risk_set.n_loans))
    cohort = risk_set.stay_origin[first].astype(float)
    data = dataclasses.replace(risk_set, static={"opened": cohort})
    trend = feature_table(features.start, trend=np.arange(features.n_periods, dtype=float))
    terms = (age, {"loan": "opened"}, {"macro": "trend"})
    with pytest.raises(NumericError, match="period = origination \\+ age") as caught:
        fit_hazard(make_spec(*terms), data, trend, backend=backend)
    for name in ("age", "opened", "trend"):
        assert name in str(caught.value).split("cannot be told apart:")[1].split(".")[0]
    for pair in ((terms[0], terms[1]), (terms[0], terms[2]), (terms[1], terms[2])):
        fit_hazard(make_spec(*pair), data, trend, backend=backend)


@pytest.mark.parametrize("age", [{"age": "linear"}, {"age": "quadratic"}, {"age": "spline", "knots": 3}])
@pytest.mark.parametrize("shift", [0, 7])
def test_a_quarterly_trend_on_months_does_not_part_age_period_and_cohort(
    age: dict[str, Any], shift: int
) -> None:
    """Placed by steps it is a staircase: of full rank with age and origination, and parted from them by nothing else."""
    risk_set, features = simulated_panel(loans=500)
    risk_set = dataclasses.replace(risk_set, stay_origin=risk_set.stay_origin + shift)
    first = risk_set.stay_loan.searchsorted(np.arange(risk_set.n_loans))
    cohort = risk_set.stay_origin[first].astype(float)
    data = dataclasses.replace(risk_set, static={"opened": cohort})
    start = features.start + shift
    quarter = (start + np.arange(features.n_periods)) // 3
    other = np.random.default_rng(1).normal(size=features.n_periods)
    table = feature_table(start, trend=0.2 * quarter, other=other)
    terms = (age, {"loan": "opened"}, {"macro": "trend"}, {"macro": "other"})
    with pytest.raises(
        NumericError, match="Only the steps by which quarters were placed on months"
    ) as caught:
        fit_hazard(make_spec(*terms), data, table)
    named = str(caught.value).split("cannot be told apart:")[1].split(".")[0]
    assert [name in named for name in ("age", "opened", "trend", "other")] == [True, True, True, False]
    for kept in ((0, 1, 3), (0, 2, 3), (1, 2, 3)):
        fit_hazard(make_spec(*(terms[i] for i in kept)), data, table)
    # a straight line is not in the logarithm of age, and a driver that is no trend parts the three
    fit_hazard(make_spec({"age": "log"}, *terms[1:]), data, table)
    bent = feature_table(start, trend=0.2 * quarter + 0.1 * np.sin(quarter), other=other)
    fit_hazard(make_spec(*terms), data, bent)


def test_raw_calendar_numbers_are_not_taken_for_dependent() -> None:
    """An uncentred column of 24,000 + a few dozen is nearly constant, but it is not the intercept."""
    rng = np.random.default_rng(3)
    frame = _rows(4000).assign(opened=lambda f: 24_000.0 + rng.integers(0, 60, len(f)))
    a = fit_hazard(make_spec({"loan": "opened"}), _risk_set(frame))
    b = fit_hazard(make_spec({"loan": "opened"}), _risk_set(frame.assign(opened=frame["opened"] - 24_030)))
    assert a.params["opened"] == pytest.approx(b.params["opened"], rel=1e-6)
    assert a.llf == pytest.approx(b.llf, rel=1e-12)


def test_a_category_of_one_level_and_a_flat_feature() -> None:
    frame = _rows().assign(grade="a")
    assert "one level at risk, 'a'" in _refusal(frame, {"loan": "grade", "as": "category"})
    assert "does not vary" in _refusal(frame.assign(x=4.0), {"loan": "x", "transform": "standardise"})


@pytest.mark.parametrize(
    ("term", "error", "words"),
    [
        ({"loan": "incme"}, DataError, "no loan column 'incme' in the risk set; there are: x, grade, region"),
        ({"loan": "grade"}, DataError, "holds text, expected numbers. Write `as: category`"),
        ({"loan": "x", "transform": "log"}, DataError, "values <= 0, which have no logarithm"),
        (
            {"loan": "grade", "as": "category", "reference": "z"},
            DataError,
            "reference 'z' is not among the levels",
        ),
        ({"macro": "rate"}, UsageError, "no macro feature 'rate'"),
        ({"age": "spline", "knots": 9}, NumericError, "9 knots at quantiles of the event ages fall on only"),
        ({"age": "spline", "knots": (2.0, 40.0)}, NumericError, "observed ages 1 to 6"),
    ],
)
def test_terms_that_the_data_cannot_carry(term: dict[str, Any], error: type[Exception], words: str) -> None:
    with pytest.raises(error) as caught:
        fit_hazard(make_spec(term), _risk_set(_rows()))
    assert words in str(caught.value)


def test_missing_numbers_name_the_loans() -> None:
    risk_set = _risk_set(_rows())
    x = risk_set.static["x"].copy()
    x[[3, 5]] = np.nan
    with pytest.raises(
        DataError, match=f"2 values that are not finite numbers \\(first: {risk_set.loan_ids[3]}"
    ):
        fit_hazard(make_spec({"loan": "x"}), dataclasses.replace(risk_set, static={"x": x}))


def test_features_on_another_calendar_are_refused(panel: tuple[RiskSet, FeatureTable]) -> None:
    risk_set, features = panel
    quarterly = dataclasses.replace(features, frequency=Frequency.QUARTER)
    with pytest.raises(UsageError, match="features are on quarters and the risk set on months"):
        fit_hazard(make_spec({"macro": "rate"}), risk_set, quarterly)


def test_an_unknown_cause_and_an_interaction_with_an_offset() -> None:
    risk_set = _risk_set(_rows())
    with pytest.raises(UsageError, match="no cause 'payoff' in the risk set; it knows default"):
        fit_hazard(make_spec({"loan": "x"}), risk_set, cause="payoff")
    with pytest.raises(UsageError, match="offset"):
        fit_hazard(
            make_spec({"offset": "x"}, {"age": "linear"}, {"interaction": ("age", "offset(x)")}), risk_set
        )
    with pytest.raises(UsageError, match="nothing to fit"):
        fit_hazard(make_spec(intercept=False), risk_set)


def test_the_range_of_a_moving_column_is_that_of_its_rows_at_risk() -> None:
    """Rows between stays, and after the last one, do not count; stays come in any order."""
    rng = np.random.default_rng(0)
    for _ in range(100):
        n = int(rng.integers(1, 12))
        length, gap, entry = rng.integers(1, 6, n), rng.integers(0, 3, n), rng.integers(0, 4, n)
        first = np.cumsum(gap + np.concatenate(([0], length[:-1])))
        values = rng.normal(size=first[-1] + length[-1] + int(rng.integers(0, 2)))
        at = rng.permutation(n)
        rows = SimpleNamespace(first_row=first[at], entry=entry, exit=entry + length[at])
        at_risk = np.concatenate([values[a : a + m] for a, m in zip(first, length, strict=True)])
        assert _moving_range(values, cast("CauseRows", rows)) == (at_risk.min(), at_risk.max())
