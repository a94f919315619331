"""Fits that must be the same fit, known truth, and what happens around missing features."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.diagnostics import actual_expected, hazard_by_age
from stresskit.hazard.fit import fit_hazard
from tests.hazard.hazard_cases import feature_table, make_spec, simulated_panel

TERMS = (
    {"age": "spline", "knots": 3},
    {"loan": "ltv", "transform": "standardise"},
    {"loan": "product", "as": "category"},
    {"macro": "rate", "transform": "standardise"},
)
BACKENDS = pytest.mark.parametrize("backend", ["rows", "factored"])
Panel = tuple[RiskSet, FeatureTable]


def _agree(a: sk.HazardFit, b: sk.HazardFit, *kinds: str, rel: float = 1e-9) -> None:
    assert a.design.labels == b.design.labels
    assert a.llf == pytest.approx(b.llf, rel=1e-12)
    se = a.standard_errors("model_expected")
    assert (np.abs(a.params - b.params) / se).max() < 1e-8
    for kind in kinds:
        np.testing.assert_allclose(a.standard_errors(kind), b.standard_errors(kind), rtol=rel)


def _repeat_stays(risk_set: RiskSet, times: int) -> RiskSet:
    """Every loan ``times`` times under its own names."""
    ids = np.array([f"{name}-{c}" for name in risk_set.loan_ids for c in range(times)], dtype=object)
    loan = (risk_set.stay_loan[:, None] * times + np.arange(times)).ravel()
    stays = {
        name: np.repeat(getattr(risk_set, name), times)
        for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
    }
    order = np.argsort(loan, kind="stable")
    return dataclasses.replace(
        risk_set,
        loan_ids=ids,
        static={k: np.repeat(v, times) for k, v in risk_set.static.items()},
        stay_loan=loan[order],
        **{name: v[order] for name, v in stays.items()},
    )


@BACKENDS
@pytest.mark.parametrize("unit", [1e-12, 1e12])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_the_unit_of_counts_moves_no_coefficient(panel: Panel, backend: str, link: str, unit: float) -> None:
    risk_set, features = panel
    bounded = {"macro": "gap", "bound": "positive"}
    other = dataclasses.replace(risk_set, weight=unit * risk_set.weight)
    # no knots or last supported age: they go by how many are at risk
    terms = ({"age": "quadratic"}, *TERMS[1:])
    for spec in (make_spec(*terms, link=link), make_spec(*terms, bounded, link=link)):
        a, b = (fit_hazard(spec, r, features, backend=backend) for r in (risk_set, other))
        se = a.standard_errors("model_expected").fillna(1.0)
        assert (np.abs(a.params - b.params) / se).max() < 1e-7
        assert b.llf == pytest.approx(unit * a.llf, rel=1e-10)
        assert b.n_events == pytest.approx(unit * a.n_events, rel=1e-12)


@BACKENDS
def test_weight_two_is_the_row_twice(panel: Panel, backend: str) -> None:
    risk_set, features = panel
    doubled = dataclasses.replace(risk_set, weight=2.0 * risk_set.weight)
    twice = _repeat_stays(risk_set, 2)
    a = fit_hazard(make_spec(*TERMS), doubled, features, backend=backend)
    b = fit_hazard(make_spec(*TERMS), twice, features, backend=backend)
    _agree(a, b, "model_expected", "model_observed", "period")
    assert (a.nobs, a.n_events) == (b.nobs, b.n_events)
    one = fit_hazard(make_spec(*TERMS), risk_set, features, backend=backend)
    np.testing.assert_allclose(
        one.standard_errors("model_expected"), np.sqrt(2) * a.standard_errors("model_expected"), rtol=1e-9
    )


@BACKENDS
def test_a_stay_split_in_two_is_the_same_fit(panel: Panel, backend: str) -> None:
    risk_set, features = panel
    longer = risk_set.stay_exit - risk_set.stay_entry > 1
    middle = np.where(longer, (risk_set.stay_entry + risk_set.stay_exit) // 2, risk_set.stay_exit)
    again = np.repeat(np.arange(longer.size), 1 + longer)
    second = np.concatenate(([False], again[1:] == again[:-1]))
    first = np.append(second[1:], False)
    split = dataclasses.replace(
        risk_set,
        stay_loan=risk_set.stay_loan[again],
        stay_origin=risk_set.stay_origin[again],
        stay_entry=np.where(second, middle[again], risk_set.stay_entry[again]),
        stay_exit=np.where(first, middle[again], risk_set.stay_exit[again]),
        stay_cause=np.where(first, 0, risk_set.stay_cause[again]),
        weight=risk_set.weight[again],
    )
    assert split.stay_loan.size > risk_set.stay_loan.size
    a, b = (fit_hazard(make_spec(*TERMS), r, features, backend=backend) for r in (risk_set, split))
    _agree(a, b, "model_expected", "model_observed", "loan", "period")


@BACKENDS
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_aggregated_rows_give_the_fit_of_expanded_ones(panel: Panel, link: str, backend: str) -> None:
    """Loans that differ in nothing are one row per age with a count; the likelihood is that of the rows."""
    rng = np.random.default_rng(4)
    rows = pd.DataFrame(
        {"loan": np.arange(4000), "age": rng.integers(1, 9, 4000), "grade": rng.choice(["a", "b"], 4000)}
    )
    rows["event"] = (rng.random(4000) < np.where(rows["grade"] == "a", 0.05, 0.1) * rows["age"] / 4).astype(
        int
    )
    counts = rows.groupby(["age", "grade", "event"]).size().rename("count").reset_index()
    counts["loan"] = np.arange(len(counts))
    expanded = sk.risk_set_from_rows(rows, loan="loan", age="age", event="event", static=["grade"])
    aggregated = sk.risk_set_from_rows(
        counts, loan="loan", age="age", event="event", static=["grade"], weight="count"
    )
    spec = make_spec({"age": "log"}, {"loan": "grade", "as": "category"}, link=link)
    a, b = (fit_hazard(spec, r, backend=backend) for r in (expanded, aggregated))
    _agree(a, b, "model_expected", "model_observed", "period")
    assert a.nobs == b.nobs == 4000
    assert b.facts.n_rows == len(counts)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_both_backends_give_the_same_fit(panel: Panel, link: str) -> None:
    risk_set, features = panel
    a, b = (
        fit_hazard(make_spec(*TERMS, link=link), risk_set, features, backend=k) for k in ("rows", "factored")
    )
    _agree(a, b, "model_expected", "model_observed", "loan", "period")


def test_a_change_of_unit_changes_the_coefficient_and_nothing_else(panel: Panel) -> None:
    risk_set, features = panel
    scaled = feature_table(features.start, rate=100.0 * features.column("rate"), gap=features.column("gap"))
    terms = ({"age": "linear"}, {"macro": "rate"})
    a, b = fit_hazard(make_spec(*terms), risk_set, features), fit_hazard(make_spec(*terms), risk_set, scaled)
    assert b.params["rate"] == pytest.approx(a.params["rate"] / 100, rel=1e-8)
    assert a.llf == pytest.approx(b.llf, rel=1e-12)


@BACKENDS
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_known_truth_is_recovered(link: str, backend: str) -> None:
    """Truth of conftest.simulated_panel; with a competing exit, on the conditional hazard it was drawn from."""
    risk_set, features = simulated_panel(loans=4000, seed=11, link=link)
    terms = (
        {"age": "quadratic"}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"}, {"macro": "gap"},
        {"interaction": ("product", "gap")},
    )  # fmt: skip
    fit = fit_hazard(make_spec(*terms, link=link), risk_set, features, backend=backend)
    truth = {
        "intercept": -4.2 - 1.2, "age[linear]": 0.02, "age[square]": -0.0006, "ltv": 1.5, "product[floating]": 0.5,
        "product[other]": -0.4, "rate": 0.35, "gap": 0.0, "product[floating]:gap": 0.15, "product[other]:gap": -0.12,
    }  # fmt: skip
    distance = (fit.params - pd.Series(truth)) / fit.standard_errors("model_expected")
    assert distance.abs().max() < 3.5
    assert (distance**2).sum() < 25  # chi-square with 10 degrees of freedom: beyond 25 in 0.5 % of draws


def test_expected_events_equal_actual_ones_with_a_logit(panel: Panel) -> None:
    """The score equations of the intercept and of each level."""
    risk_set, features = panel
    fit = fit_hazard(
        make_spec({"age": "steps", "bands": (6, 12, 24)}, {"macro": "rate"}, link="logit"), risk_set, features
    )
    by_age = hazard_by_age(fit, risk_set, features)
    band = np.searchsorted([6, 12, 24], by_age["age"])
    expected = (by_age["fitted"] * by_age["at_risk"]).groupby(band).sum()
    np.testing.assert_allclose(expected, by_age["events"].groupby(band).sum(), rtol=1e-8)


def test_rows_without_a_feature_are_left_out_counted_and_cut_where_the_hole_is(panel: Panel) -> None:
    risk_set, features = panel
    rate = features.column("rate").copy()
    rate[:7] = np.nan
    rate[20:22] = np.nan
    holed = feature_table(features.start, rate=rate, gap=features.column("gap"))
    fit = fit_hazard(make_spec({"age": "linear"}, {"macro": "rate"}), risk_set, holed)
    count = events = 0
    for loan, origin, entry, last, cause in zip(
        risk_set.stay_loan,
        risk_set.stay_origin,
        risk_set.stay_entry,
        risk_set.stay_exit,
        risk_set.stay_cause,
        strict=True,
    ):
        assert loan >= 0
        for age in range(entry + 1, last + 1):
            if np.isnan(rate[origin + age - features.start]) and not (age == last and cause == 2):
                count += 1
                events += int(age == last and cause == 1)
    assert (fit.rows_without_feature, fit.facts.events_without_feature) == (count, events)
    assert count > 0
    assert fit.feature_ranges["rate"] == (np.nanmin(rate), np.nanmax(rate))
    whole = fit_hazard(make_spec({"age": "linear"}), risk_set)
    assert fit.nobs + count == whole.nobs
    assert "left out:" in fit.summary()


def test_rows_outside_the_feature_table_count_as_without_feature(panel: Panel) -> None:
    risk_set, features = panel
    short = feature_table(features.start + 5, rate=features.column("rate")[5:-4])
    fit = fit_hazard(make_spec({"macro": "rate"}), risk_set, short)
    at_risk = fit_hazard(make_spec({"age": "linear"}), risk_set)
    inside = actual_expected(at_risk, risk_set)["at_risk"].iloc[4:-4].sum()
    assert (fit.nobs, fit.nobs + fit.rows_without_feature) == (inside, at_risk.nobs)
    assert fit.n_periods == 40


def test_rows_that_end_in_another_cause_are_not_at_risk(panel: Panel) -> None:
    risk_set, _ = panel
    for cause, other in (("default", 2), ("payoff", 1)):
        fit = fit_hazard(make_spec({"age": "linear"}), risk_set, cause=cause)
        assert fit.nobs == risk_set.n_rows - (risk_set.stay_cause == other).sum()
        assert fit.n_events == risk_set.events(cause)


def test_columns_that_move_along_a_stay(panel: Panel) -> None:
    """A moving copy of what static and macro terms say gives the fit of those terms, row by row."""
    risk_set, features = panel
    length = risk_set.stay_exit - risk_set.stay_entry
    stay = np.repeat(np.arange(length.size), length)
    age = np.concatenate(
        [np.arange(a + 1, b + 1) for a, b in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    rate = features.column("rate")[risk_set.stay_origin[stay] + age - features.start]
    product = risk_set.static["product"][risk_set.stay_loan[stay]]
    moving = dataclasses.replace(
        risk_set, moving={"own_rate": rate, "own_product": product, "shift": 0.1 * age}
    )
    a = fit_hazard(
        make_spec({"age": "linear"}, {"loan": "product", "as": "category"}, {"macro": "rate"}, {"interaction": ("product", "rate")}),
        risk_set, features, cause="payoff",
    )  # fmt: skip
    b = fit_hazard(
        make_spec(
            {"age": "linear"}, {"loan": "own_product", "as": "category"}, {"loan": "own_rate"},
            {"interaction": ("own_product", "own_rate")}, {"offset": "shift"},
        ),
        moving, features, cause="payoff",
    )  # fmt: skip
    shift = np.where(np.array(a.params.index) == "age[linear]", 0.1, 0.0)
    np.testing.assert_allclose(b.params.to_numpy(), a.params.to_numpy() - shift, rtol=1e-7, atol=1e-9)
    assert a.llf == pytest.approx(b.llf, rel=1e-12)
    assert b.moving_columns == ("own_product", "own_rate", "shift")


@pytest.mark.parametrize("kind", ["period", "period_hac", "period_jackknife"])
@pytest.mark.parametrize("more", [{}, {"link": "logit"}, {"ridge": 2.0}, {"bias_reduction": "firth"}])
def test_a_weight_is_the_loan_repeated_in_every_error_by_period_and_every_gate(
    kind: str, more: dict[str, object]
) -> None:
    """Moving columns, a product with a macro feature and a competing exit included; expanded loans have names of their own."""
    risk_set, features = simulated_panel(loans=500, seed=1)
    rng = np.random.default_rng(8)
    moving = {"drawn": rng.normal(size=risk_set.n_rows)}
    count = rng.integers(1, 4, risk_set.n_loans)
    weighted = dataclasses.replace(risk_set, moving=moving, weight=count[risk_set.stay_loan].astype(float))
    again = np.repeat(np.arange(risk_set.n_loans), count)  # one stay each
    length = risk_set.stay_exit - risk_set.stay_entry
    begin = np.cumsum(length) - length
    expanded = dataclasses.replace(
        risk_set,
        loan_ids=np.array([f"{risk_set.loan_ids[i]}-{j:05d}" for j, i in enumerate(again)], dtype=object),
        static={k: v[again] for k, v in risk_set.static.items()},
        stay_loan=np.arange(again.size),
        moving={"drawn": np.concatenate([moving["drawn"][begin[i] : begin[i] + length[i]] for i in again])},
        **{n: getattr(risk_set, n)[again] for n in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")},
    )  # fmt: skip
    spec = make_spec(*TERMS, {"loan": "drawn"}, {"interaction": ("product", "rate")}, covariance=kind, **more)
    a, b = (fit_hazard(spec, r, features) for r in (weighted, expanded))
    _agree(a, b, "model_expected", "model_observed", kind, rel=1e-8)
    assert a.aic == pytest.approx(b.aic, rel=1e-12)
    assert [(g.name, g.passed, g.found.split(" after ")[0].split(" in ")[0]) for g in a.gates if g.name != "convergence"] == [
        (g.name, g.passed, g.found.split(" after ")[0].split(" in ")[0]) for g in b.gates if g.name != "convergence"
    ]  # fmt: skip
    assert (a.nobs, a.n_events, a.supported_age) == (b.nobs, b.n_events, b.supported_age)
    # An identifier is one cluster, so errors by loan are those of heavier loans; the summary says so.
    assert (a.standard_errors("loan") / b.standard_errors("loan")).max() > 1.2
    assert "rows as given, of which one counts as often as its weight says" in a.summary()
    assert "rows as given" not in b.summary()
    by_loan = fit_hazard(spec.model_copy(update={"covariance": "loan"}), weighted, features)
    assert "an identifier is one cluster, whatever its weight" in by_loan.summary()
