"""The result object: predictions, parts for a projection, tables, summary, saved model, diagnostics."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import stresskit as sk
from stresskit.core.errors import DataError, TextError, UsageError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.diagnostics import actual_expected, hazard_by_age, jeffreys
from stresskit.hazard.fit import fit_hazard
from tests.hazard.hazard_cases import make_spec

Panel = tuple[RiskSet, FeatureTable]
GOLDEN = Path(__file__).parent.parent / "data" / "golden"
EVERYTHING = (
    {"age": "spline", "knots": 3},
    {"loan": "ltv", "transform": "standardise", "expect": "positive"},
    {"loan": "income", "transform": "log", "expect": "positive"},
    {"loan": "product", "as": "category"},
    {"macro": "rate", "transform": "standardise", "expect": "positive"},
    {"macro": "gap"},
    {"interaction": ("product", "gap")},
    {"interaction": ("age", "ltv")},
    {"interaction": ("ltv", "rate")},
    {"offset": "shift"},
)


def _with_more(panel: Panel) -> Panel:
    risk_set, features = panel
    rng = np.random.default_rng(9)
    n = risk_set.n_loans
    static = {**risk_set.static, "income": np.exp(rng.normal(size=n)), "shift": rng.normal(0, 0.2, n)}
    return dataclasses.replace(risk_set, static=static), features


@pytest.fixture(scope="module", params=["cloglog", "logit"])
def fitted(request: pytest.FixtureRequest, panel: Panel) -> tuple[sk.HazardFit, RiskSet, FeatureTable]:
    risk_set, features = _with_more(panel)
    return fit_hazard(make_spec(*EVERYTHING, link=request.param), risk_set, features), risk_set, features


def _some_rows(risk_set: RiskSet, features: FeatureTable, n: int = 200) -> pd.DataFrame:
    rng = np.random.default_rng(1)
    loan = rng.integers(0, risk_set.n_loans, n)
    values = features.values[rng.integers(0, features.n_periods, n)]
    return pd.DataFrame(
        {name: column[loan] for name, column in risk_set.static.items()}
        | {"age": rng.integers(1, 90, n)}
        | {name: values[:, j] for j, name in enumerate(features.names)},
        index=[f"case {i}" for i in range(n)],
    )


def test_the_parts_add_up_to_the_prediction(fitted: tuple[sk.HazardFit, RiskSet, FeatureTable]) -> None:
    fit, risk_set, features = fitted
    frame = _some_rows(risk_set, features)
    loans = fit.loan_part({name: frame[name].to_numpy() for name in fit.loan_columns}, len(frame))
    cells = fit.cell_part(frame["age"].to_numpy(), frame[["gap", "rate"]].to_numpy(), ("gap", "rate"))
    assert loans.s.shape == cells.z.shape == (200,)
    assert loans.U.shape == cells.V.shape == (200, 3)  # floating, other, ltv: one column per loan factor
    eta = loans.s + cells.z + (loans.U * cells.V).sum(axis=1)
    predicted = fit.predict(frame)
    np.testing.assert_allclose(fit.link.probability(eta), predicted, rtol=1e-12)
    assert list(predicted.index) == list(frame.index)
    assert fit.loan_columns == ("ltv", "income", "product", "shift")
    assert fit.feature_names == ("rate", "gap")
    assert fit.moving_columns == ()


def test_predictions_at_the_fitted_rows_add_up_to_the_events(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable],
) -> None:
    """Also that the fit's own tally and predict are the same numbers, by two routes."""
    fit, risk_set, features = fitted
    length = risk_set.stay_exit - risk_set.stay_entry
    stay = np.repeat(np.arange(length.size), length)
    age = np.concatenate(
        [np.arange(a + 1, b + 1) for a, b in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    period = risk_set.stay_origin[stay] + age
    rows = pd.DataFrame(
        {k: v[risk_set.stay_loan[stay]] for k, v in risk_set.static.items()} | {"age": age, "period": period}
    )
    for name in features.names:
        rows[name] = features.column(name)[period - features.start]
    rows = rows[~((age == risk_set.stay_exit[stay]) & (risk_set.stay_cause[stay] == 2))]
    rows["p"] = fit.predict(rows)
    table = actual_expected(fit, risk_set, features)
    np.testing.assert_allclose(table["expected"], rows.groupby("period")["p"].sum(), rtol=1e-10)
    by_age = hazard_by_age(fit, risk_set, features)
    np.testing.assert_allclose(by_age["fitted"], rows.groupby("age")["p"].mean(), rtol=1e-10)
    np.testing.assert_array_equal(by_age["at_risk"], rows.groupby("age").size())
    assert table["events"].sum() == by_age["events"].sum() == fit.n_events
    if fit.spec.link == "logit":
        assert table["expected"].sum() == pytest.approx(fit.n_events, rel=1e-8)
    assert list(table.columns) == ["cause", "period", "at_risk", "events", "expected"]
    assert table["period"].iloc[0] == "2000-02"


def test_bands_of_observed_hazards_are_jeffreys_intervals() -> None:
    events, trials = np.array([0.0, 3.0, 10.0]), np.array([20.0, 50.0, 10.0])
    lower, upper = jeffreys(events, trials)
    assert (lower[0], upper[2]) == (0.0, 1.0)
    assert (lower[1], upper[1]) == pytest.approx(tuple(stats.beta(3.5, 47.5).ppf([0.025, 0.975])))
    # Brown, Cai and DasGupta 2001, Table 5: n = 10, x = 1, 95 %
    low, high = jeffreys(np.array([1.0]), np.array([10.0]))
    assert (round(float(low[0]), 3), round(float(high[0]), 3)) == (0.011, 0.381)


@pytest.mark.parametrize("absent", ["ltv", "shift", "age", "rate"])
def test_what_a_prediction_needs_and_does_not_get_is_named(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable], absent: str
) -> None:
    fit, risk_set, features = fitted
    frame = _some_rows(risk_set, features)
    with pytest.raises(DataError, match=f"needs the columns '{absent}'"):
        fit.predict(frame.drop(columns=absent))
    if absent in ("ltv", "shift"):
        with pytest.raises(DataError, match=f"loan column '{absent}'"):
            fit.loan_part({k: v for k, v in risk_set.static.items() if k != absent}, risk_set.n_loans)
    if absent == "rate":
        with pytest.raises(DataError, match="macro feature 'rate'"):
            fit.cell_part(np.array([1]), np.array([[0.0]]), ("gap",))


def test_unseen_levels_and_holes_are_errors_at_prediction(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable],
) -> None:
    fit, risk_set, features = fitted
    frame = _some_rows(risk_set, features)
    with pytest.raises(DataError, match=r"'mystery'.*case 4.*Known levels: 'fixed', 'floating', 'other'"):
        fit.predict(frame.assign(product=frame["product"].where(frame.index != "case 4", "mystery")))
    with pytest.raises(DataError, match="'gap' has 1 values that are not finite"):
        fit.predict(frame.assign(gap=frame["gap"].where(frame.index != "case 4")))


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (np.nan, "column 'age' has 1 values that are not finite"),
        (np.inf, "column 'age' has 1 values that are not finite"),
        (0, "column 'age' has 1 values that are not whole numbers from 1 on"),
        (-3, "not whole numbers from 1 on"),
        (4.5, "not whole numbers from 1 on"),
        ("7", "column 'age' holds text, expected numbers"),
    ],
)
def test_ages_that_are_none_are_errors_at_prediction(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable], value: Any, words: str
) -> None:
    fit, risk_set, features = fitted
    frame = _some_rows(risk_set, features)
    ages = frame["age"].astype(object).where(frame.index != "case 4", value)
    with pytest.raises(DataError, match=words):
        fit.predict(frame.assign(age=ages if isinstance(value, str) else ages.astype(float)))
    with pytest.raises(DataError, match="macro feature 'gap' has 1 values"):
        fit.predict(frame.assign(gap=frame["gap"].where(frame.index != "case 4")))
    with pytest.raises(DataError, match="more than one column 'age'"):
        fit.predict(pd.concat([frame, frame[["age"]]], axis=1))
    np.testing.assert_array_equal(
        fit.predict(frame.assign(age=frame["age"].astype(float))), fit.predict(frame)
    )


def test_a_model_with_moving_columns_splits_into_loan_cell_and_moving_part(panel: Panel) -> None:
    risk_set, _ = panel
    moving = np.random.default_rng(0).normal(size=risk_set.n_rows)
    fit = fit_hazard(
        make_spec({"age": "linear"}, {"loan": "drawn"}),
        dataclasses.replace(risk_set, moving={"drawn": moving}),
    )
    p = fit.predict(pd.DataFrame({"age": [3, 4], "drawn": [0.1, 0.2]}))
    eta = (
        fit.params["intercept"]
        + fit.params["age[linear]"] * np.array([3, 4])
        + fit.params["drawn"] * np.array([0.1, 0.2])
    )
    np.testing.assert_allclose(p, -np.expm1(-np.exp(eta)), rtol=1e-12)
    drawn = np.array([[0.1, 0.2, -1.0], [0.3, 0.0, 2.0]])
    cell = fit.cell_part(np.array([3, 4, 5]), np.empty((3, 0)), ())
    loan = fit.loan_part({}, 2)
    parts = loan.s[:, None] + cell.z + fit.moving_part({"drawn": drawn})
    frame = pd.DataFrame({"age": np.tile([3, 4, 5], 2), "drawn": drawn.ravel()})
    np.testing.assert_allclose(-np.expm1(-np.exp(parts.ravel())), fit.predict(frame), rtol=1e-12)
    with pytest.raises(DataError, match="'drawn' has 1 values that are not finite"):
        fit.moving_part({"drawn": np.array([[0.1, np.nan]])})
    with pytest.raises(DataError, match="needs the loan column 'drawn'"):
        fit.moving_part({"other": drawn})


@pytest.mark.parametrize("transform", ["none", "standardise", "log"])
def test_moving_parts_with_transforms_and_products_are_those_of_predict(panel: Panel, transform: str) -> None:
    risk_set, _ = panel
    rng = np.random.default_rng(1)
    moving = {"drawn": rng.uniform(0.5, 2.0, risk_set.n_rows), "due": rng.normal(size=risk_set.n_rows)}
    spec = make_spec(
        {"loan": "drawn", "transform": transform}, {"loan": "due"}, {"interaction": ("drawn", "due")}
    )
    fit = fit_hazard(spec, dataclasses.replace(risk_set, moving=moving))
    values = {"drawn": rng.uniform(0.5, 2.0, (4, 6)), "due": rng.normal(size=(4, 6))}
    eta = fit.loan_part({}, 4).s[:, None] + fit.moving_part(values)
    eta += fit.cell_part(np.arange(1, 7), np.empty((6, 0)), ()).z
    frame = pd.DataFrame({name: column.ravel() for name, column in values.items()})
    np.testing.assert_allclose(-np.expm1(-np.exp(eta.ravel())), fit.predict(frame), rtol=1e-12)


def test_a_moving_column_times_another_term_does_not_split(panel: Panel) -> None:
    risk_set, _ = panel
    moving = np.random.default_rng(0).normal(size=risk_set.n_rows)
    spec = make_spec({"age": "linear"}, {"loan": "drawn"}, {"interaction": ("age", "drawn")})
    fit = fit_hazard(spec, dataclasses.replace(risk_set, moving={"drawn": moving}))
    for call in (lambda: fit.loan_part({}, 2), lambda: fit.moving_part({"drawn": np.ones((2, 3))})):
        with pytest.raises(UsageError, match=r"multiplies a column that moves .*age\[linear\]:drawn"):
            call()


def test_the_coefficient_table(fitted: tuple[sk.HazardFit, RiskSet, FeatureTable]) -> None:
    fit, _, _ = fitted
    table = fit.coefficient_table()
    assert list(table.columns) == [
        "cause", "term", "coef", "se", "se_kind", "statistic", "p_value", "lower", "upper", "se_model", "se_loan",
        "se_period", "expect", "sign_ok", "at_bound", "coef_free",
    ]  # fmt: skip
    row = table.set_index("term").loc["rate"]
    assert row["se"] == row["se_period"] == fit.bse["rate"]
    assert row["expect"] == "positive"
    assert row["sign_ok"] is bool(fit.params["rate"] > 0)
    income = table.set_index("term").loc["income"]
    assert income["sign_ok"] is bool(fit.params["income"] > 0)
    assert table.set_index("term").loc["ltv:rate", "expect"] == ""
    assert fit.aic == pytest.approx(-2 * fit.llf + 2 * len(table))


def test_the_summary_fits_a_terminal_of_100_columns_and_says_what_it_must(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable],
) -> None:
    fit, _, _ = fitted
    text = fit.summary()
    assert max(len(line) for line in text.splitlines()) <= 100
    for words in (
        "Hazard of default", fit.spec.link, "clustered by period (48 periods, factor G/(G-1) = 1.0213)",
        "t quantiles, 47 degrees of freedom", "<= 1e-10", "<= 1e-08", "knots 1, ", "against 'fixed'", "natural logarithm",
        "offset(shift)", "pos ok",
    ):  # fmt: skip
        assert words in text, words
    if fit.params["income"] < 0:
        assert "Sign against expectation: income" in text


@pytest.mark.parametrize(
    ("term", "words"),
    [
        ({"age": "log", "support": 200}, "held below 1 and beyond {supported}"),
        ({"age": "steps", "bands": (12, 24), "support": 200}, "held below 1 and beyond {supported}"),
        ({"age": "spline", "knots": 2, "until": 20}, "held below 1 and beyond 20"),
        ({"age": "log", "support": 200, "beyond": "weibull", "tail_from": 2}, "held below 1, a tail beyond {supported}"),
    ],
)  # fmt: skip
def test_the_summary_says_from_which_age_predictions_leave_the_curve(
    panel: Panel, term: dict[str, Any], words: str
) -> None:
    """Not the largest age: few rows lie past the supported one, and predictions there are those at it."""
    fit = fit_hazard(make_spec(term), panel[0])
    assert fit.supported_age < fit.largest_age or "until" in term
    assert words.format(supported=fit.supported_age) in fit.summary()
    held = fit.predict(pd.DataFrame({"age": [fit.supported_age, fit.supported_age + 1, fit.largest_age]}))
    assert (held.nunique() == 1) is ("beyond" not in term)


def test_a_saved_model_comes_back_to_the_same_bits(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable],
) -> None:
    fit, risk_set, features = fitted
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.design == fit.design
    assert again.spec == fit.spec
    assert again.summary() == fit.summary()
    np.testing.assert_array_equal(again.params, fit.params)
    frame = _some_rows(risk_set, features)
    np.testing.assert_array_equal(again.predict(frame), fit.predict(frame))
    assert not any(loan in fit.to_json() for loan in risk_set.loan_ids[:50])


def _refusal(fit: sk.HazardFit, change: Any) -> str:
    """What is said of a saved fit that was changed."""
    document = json.loads(fit.to_json())
    change(document)
    with pytest.raises(TextError) as caught:
        sk.HazardFit.from_json(json.dumps(document))
    return str(caught.value)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda d: d.update(format="other"), "expected a JSON object with"),
        (lambda d: d.update(version=3), "version 3, this stresskit reads versions 1 and 2"),
        (lambda d: d.update(extra=1), "unknown keys extra"),
        (lambda d: d["coefficients"].pop(), "coefficients: shape"),
        (lambda d: d["coefficients"].__setitem__(0, "a"), "coefficients"),
        (lambda d: d["design"]["terms"][0].update(knots=5), "design: knots is 5, expected a list"),
        (lambda d: d["design"]["terms"][1].update(kind="magic"), "unknown kind of term 'magic'"),
        (lambda d: d["design"]["terms"][1].pop("scale"), "LoanNumber has keys"),
        (lambda d: d["design"]["terms"][3]["levels"].append("new"), "the file was changed"),
        (lambda d: d["facts"].pop("llf"), "facts: keys"),
        (lambda d: d["covariances"]["matrices"].pop("loan"), "covariances: no key 'loan'"),
        (lambda d: d["spec"].update(link="probit"), "spec: "),
    ],
)
def test_a_damaged_model_is_refused_with_its_place(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable], change: Any, words: str
) -> None:
    assert words in _refusal(fitted[0], change)


def _gate(document: dict[str, Any], name: str) -> dict[str, Any]:
    return next(g for g in document["gates"] if g["name"] == name)


def _matrix(document: dict[str, Any], i: int, j: int, value: float) -> None:
    document["covariances"]["matrices"]["period"][i][j] = value


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda d: d["facts"].update(llf=float("nan")), "NaN is not a finite number"),
        (lambda d: _matrix(d, 0, 0, float("-inf")), "-Infinity is not a finite number"),
        (lambda d: _matrix(d, 0, 0, -1.0), "covariances: period has a variance below 0"),
        (lambda d: _matrix(d, 0, 1, 7.0), "covariances: period is not symmetric"),
        (lambda d: d["covariances"]["clusters"].update(period=3), "covariances: clusters"),
        (lambda d: d["covariances"].update(lag=-1), "covariances: lag -1"),
        (lambda d: d["facts"].update(supported_age=0), "facts: supported_age is 0"),
        (lambda d: d["facts"].update(supported_age=900), "facts: ages"),
        (lambda d: d["facts"].update(frequency="week"), "facts: frequency 'week'"),
        (lambda d: d["facts"].update(n_events=1e9), "facts: "),
        (lambda d: d["facts"]["feature_ranges"].pop("rate"), "facts: ranges of"),
        (lambda d: d["facts"]["feature_ranges"].update(rate=[2.0, 1.0]), "facts: ranges that end before they begin: rate"),
        (lambda d: d["coefficients"].__setitem__(0, 10**400), "coefficients: "),
        (lambda d: d["design"]["terms"][0]["knots"].reverse(), "the file was changed"),
        (lambda d: d["design"]["terms"][1].update(scale=0.0), "design: the term 'ltv': scale 0"),
        (lambda d: d["design"]["terms"][1].update(scale=-2.0), "design: the term 'ltv': scale -2"),
        (lambda d: d["design"]["terms"][2].update(centre=5.0), "design: the term 'income' is not what the spec states"),
        (lambda d: d["spec"]["terms"].pop(), "design: "),
        (lambda d: d["spec"].update(ridge=1.0), "estimation: method is 'maximum likelihood', the spec leads to ridge"),
        (lambda d: d["gates"].pop(), "gates: events, rank"),
        (lambda d: d["gates"].append(d["gates"][0]), "gates: events, rank"),
        (lambda d: d["gates"][0].update(name="mood"), "gates: mood"),
        (lambda d: _gate(d, "levels").update(passed=not _gate(d, "levels")["passed"]), "gates: levels is"),
    ],
)  # fmt: skip
def test_a_model_that_no_fit_can_have_written_is_refused(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable], change: Any, words: str
) -> None:
    assert words in _refusal(fitted[0], change)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('"version": 2', '"version": 1, "version": 2', "stated twice: version"),
        ('"intercept": true', '"intercept": 1e999', "1e999 is not a finite number"),
        ('"labels": [', '"labels": ' + "[" * 100_000, "nested too deeply"),
    ],
)
def test_json_that_other_readers_would_take_is_refused(
    fitted: tuple[sk.HazardFit, RiskSet, FeatureTable], old: str, new: str, words: str
) -> None:
    text = fitted[0].to_json()
    assert old in text
    with pytest.raises(TextError, match=words):
        sk.HazardFit.from_json(text.replace(old, new, 1))


def test_text_that_is_not_json_is_refused() -> None:
    with pytest.raises(TextError, match="not JSON"):
        sk.HazardFit.from_json("knots: 3")


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_models_saved_by_version_1_still_predict_the_same(link: str) -> None:
    """Golden files written when the format was version 1; every later version must read them."""
    fit = sk.HazardFit.from_json((GOLDEN / f"hazard_v1_{link}.json").read_text(encoding="utf-8"))
    cases = pd.read_csv(GOLDEN / "hazard_v1_predictions.csv")
    np.testing.assert_allclose(fit.predict(cases), cases[link], rtol=1e-12)
    # Later versions write further keys; those of the file keep their values.
    saved = json.loads((GOLDEN / f"hazard_v1_{link}.json").read_text(encoding="utf-8"))
    assert saved.pop("version") == 1
    assert _at_least(json.loads(fit.to_json()), saved)
    assert [(g.name, g.passed) for g in fit.gates] == [("recorded", False)]
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.gates == fit.gates


def _at_least(new: Any, old: Any) -> bool:
    if isinstance(old, dict):
        return isinstance(new, dict) and all(key in new and _at_least(new[key], old[key]) for key in old)
    if isinstance(old, list):
        return isinstance(new, list) and len(new) == len(old) and all(map(_at_least, new, old))
    return bool(new == old)


def test_the_fit_is_frozen(fitted: tuple[sk.HazardFit, RiskSet, FeatureTable]) -> None:
    fit, _, _ = fitted
    with pytest.raises(dataclasses.FrozenInstanceError):
        fit.coefficients = np.zeros(3)  # type: ignore[misc]
    with pytest.raises(ValueError, match="read-only"):
        fit.coefficients[0] = 1.0
    before = fit.to_json()
    params, covariance = fit.params, fit.cov_params()
    params.iloc[0] = 7.0
    covariance.iloc[0, 0] = 7.0
    assert fit.to_json() == before
