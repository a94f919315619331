"""A macro feature that goes by a loan column: the fit is that of the column filled row by row."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from stresskit.core.errors import DataError, NumericError, UsageError
from stresskit.core.values import FeatureTable, KeyedFeature, RiskSet
from stresskit.hazard.covariance import KINDS
from stresskit.hazard.diagnostics import actual_expected, hazard_by_age
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.usable import Gate
from tests.hazard.hazard_cases import feature_table, make_spec
from tests.hazard.keyed_cases import REGIONS, Panel, in_full, keyed_table, regional_panel

LINKS = pytest.mark.parametrize("link", ["cloglog", "logit"])
BACKENDS = pytest.mark.parametrize("backend", ["rows", "factored"])
TERMS: tuple[dict[str, Any], ...] = (
    {"age": "linear"},
    {"loan": "ltv"},
    {"loan": "product", "as": "category", "reference": "fixed"},
    {"macro": "gap"},
    {"macro": "prices", "transform": "standardise", "expect": "positive"},
    {"interaction": ("product", "prices")},
    {"interaction": ("age", "prices")},
)


def _filled(risk_set: RiskSet, features: FeatureTable) -> Panel:
    """The same rows with ``prices`` as a loan column that moves: what is fitted row by row without any key."""
    rows = in_full(risk_set, features)
    return dataclasses.replace(risk_set, moving={"prices": rows["prices"].to_numpy()}), features


def _as_loan_column(terms: tuple[dict[str, Any], ...]) -> list[dict[str, Any]]:
    return [
        {"loan": "prices", "transform": "standardise"} if t.get("macro") == "prices" else t for t in terms
    ]


def _close(a: pd.DataFrame, b: pd.DataFrame, rel: float = 1e-7) -> None:
    b = b.loc[a.index, a.columns]
    scale = np.sqrt(np.outer(np.diag(b), np.diag(b)))
    np.testing.assert_allclose(a / scale, b / scale, atol=rel)


@LINKS
@BACKENDS
@pytest.mark.parametrize("kind", ["period", "two_way", "period_jackknife"])
def test_the_fit_and_all_its_covariances_are_those_of_the_column_filled_row_by_row(
    link: str, backend: str, kind: str
) -> None:
    risk_set, features = regional_panel(link)
    fit = fit_hazard(make_spec(*TERMS, link=link, covariance=kind), risk_set, features, backend=backend)  # type: ignore[arg-type]
    again = fit_hazard(
        make_spec(*_as_loan_column(TERMS), link=link, covariance=kind), *_filled(risk_set, features)
    )
    assert fit.design.labels == again.design.labels
    assert fit.llf == pytest.approx(again.llf, rel=1e-12)
    error = fit.standard_errors("model_expected")
    assert (np.abs(fit.params - again.params) / error).max() < 1e-7
    for each in KINDS:
        if each in fit.covariances.matrices:
            _close(fit.cov_params(each), again.cov_params(each))
    assert kind in fit.covariances.matrices
    mine, other = fit.design.terms[4], again.design.terms[4]
    assert (mine.centre, mine.scale) == pytest.approx((other.centre, other.scale), rel=1e-12)  # type: ignore[union-attr]


@LINKS
def test_the_fit_is_that_of_statsmodels_on_the_rows_in_full(link: str) -> None:
    risk_set, features = regional_panel(link)
    terms = ({"age": "linear"}, {"loan": "ltv"}, {"macro": "prices"}, {"loan": "region", "as": "category", "reference": "north"})  # fmt: skip
    fit = fit_hazard(make_spec(*terms, link=link), risk_set, features)
    rows = in_full(risk_set, features)
    rows = rows[rows["cause"] != 2].reset_index(drop=True)
    x = pd.DataFrame(
        {
            "intercept": 1.0, "age[linear]": rows["age"], "ltv": rows["ltv"], "prices": rows["prices"],
            "region[south]": (rows["region"] == "south") * 1.0, "region[west]": (rows["region"] == "west") * 1.0,
        }
    )  # fmt: skip
    family = sm.families.Binomial(
        sm.families.links.CLogLog() if link == "cloglog" else sm.families.links.Logit()
    )
    model = sm.GLM((rows["cause"] == 1) * 1.0, x, family=family)
    plain = model.fit(tol=1e-13, maxiter=200)
    assert fit.llf == pytest.approx(plain.llf, rel=1e-11)
    error = fit.standard_errors("model_expected")
    assert (np.abs(fit.params - plain.params[fit.params.index]) / error).max() < 1e-6
    _close(fit.cov_params("model_expected"), plain.cov_params(), 1e-6)
    observed = np.linalg.inv(-model.hessian(plain.params, observed=True))
    _close(fit.cov_params("model_observed"), pd.DataFrame(observed, x.columns, x.columns), 1e-6)
    scores = pd.DataFrame(model.score_obs(plain.params), columns=x.columns)
    for kind, groups in (("loan", rows["loan"]), ("period", rows["period"])):
        s = scores.groupby(groups).sum().to_numpy()
        wanted = len(s) / (len(s) - 1) * observed @ s.T @ s @ observed
        _close(fit.cov_params(kind), pd.DataFrame(wanted, x.columns, x.columns), 1e-6)


@LINKS
def test_the_same_variable_for_all_levels_is_the_ordinary_feature(link: str) -> None:
    risk_set, features = regional_panel(link)
    rate = features.column("rate")
    alike = feature_table(
        features.start, gap=features.column("gap"), **{f"prices[{r}]": rate for r in REGIONS}, common=rate
    )
    alike = keyed_table(alike, "prices", "region", REGIONS)
    terms = [t | {"macro": "common"} if t.get("macro") == "prices" else t for t in TERMS[:5]]
    for backend in ("rows", "factored"):
        keyed = fit_hazard(make_spec(*TERMS[:5], link=link), risk_set, alike, backend=backend)  # type: ignore[arg-type]
        plain = fit_hazard(make_spec(*terms, link=link), risk_set, alike, backend=backend)  # type: ignore[arg-type]
        assert keyed.llf == pytest.approx(plain.llf, rel=1e-13)
        np.testing.assert_allclose(keyed.params, plain.params, rtol=1e-8)
        for kind in ("model_expected", "model_observed", "loan", "period", "period_hac"):
            np.testing.assert_allclose(keyed.cov_params(kind), plain.cov_params(kind), rtol=1e-7, atol=1e-14)
        assert {g.name: g.passed for g in keyed.gates} == {g.name: g.passed for g in plain.gates}
        # Each level's range is that of the periods in which its own loans were at risk.
        low, high = plain.feature_ranges["common"]
        assert min(keyed.feature_ranges[f"prices[{r}]"][0] for r in REGIONS) == low
        assert max(keyed.feature_ranges[f"prices[{r}]"][1] for r in REGIONS) == high


@LINKS
def test_weights_stand_for_rows(link: str) -> None:
    """Aggregated = expanded: weight 2 is the loan twice."""
    risk_set, features = regional_panel(link, loans=400)
    twice = dataclasses.replace(
        risk_set,
        loan_ids=np.array([f"{i}-{c}" for i in risk_set.loan_ids for c in "ab"], dtype=object),
        static={k: np.repeat(v, 2) for k, v in risk_set.static.items()},
        stay_loan=np.sort(np.concatenate([2 * risk_set.stay_loan, 2 * risk_set.stay_loan + 1])),
        **{
            n: np.repeat(getattr(risk_set, n), 2)
            for n in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    weighted = dataclasses.replace(risk_set, weight=2.0 * risk_set.weight)
    assert np.bincount(risk_set.stay_loan).max() == 1
    a = fit_hazard(make_spec(*TERMS, link=link), weighted, features, backend="factored")
    b = fit_hazard(make_spec(*TERMS, link=link), twice, features, backend="rows")
    assert a.llf == pytest.approx(b.llf, rel=1e-12)
    assert (np.abs(a.params - b.params) / a.standard_errors("model_expected")).max() < 1e-7
    _close(a.cov_params("period"), b.cov_params("period"))
    _close(a.cov_params("model_observed"), b.cov_params("model_observed"))


@BACKENDS
def test_order_of_loans_threads_and_names_of_levels_change_nothing(backend: str) -> None:
    risk_set, features = regional_panel()
    spec = make_spec(*TERMS)
    one = fit_hazard(spec, risk_set, features, backend=backend)  # type: ignore[arg-type]
    order = np.random.default_rng(2).permutation(risk_set.n_loans)
    place = np.argsort(order)
    stays = np.argsort(place[risk_set.stay_loan], kind="stable")
    mixed = dataclasses.replace(
        risk_set,
        loan_ids=risk_set.loan_ids[order],
        static={k: v[order] for k, v in risk_set.static.items()},
        stay_loan=place[risk_set.stay_loan][stays],
        **{
            n: getattr(risk_set, n)[stays]
            for n in ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
        },
    )
    assert fit_hazard(spec, mixed, features, threads=3, backend=backend).to_json() == one.to_json()  # type: ignore[arg-type]
    other = {"north": "zulu", "south": "alpha", "west": "mike"}
    renamed = dataclasses.replace(
        risk_set,
        static={
            **risk_set.static,
            "region": np.array([other[r] for r in risk_set.static["region"]], dtype=object),
        },
    )
    names = tuple(f"prices[{other[n[7:-1]]}]" if n.startswith("prices[") else n for n in features.names)
    table = dataclasses.replace(
        features, names=names, keyed={"prices": KeyedFeature("region", tuple(sorted(other.values())))}
    )
    again = fit_hazard(spec, renamed, table, backend=backend)  # type: ignore[arg-type]
    np.testing.assert_allclose(again.params, one.params, rtol=1e-9)
    assert again.llf == pytest.approx(one.llf, rel=1e-13)


def test_levels_held_as_numbers_are_known_by_their_text() -> None:
    risk_set, features = regional_panel()
    code = {"north": 1.0, "south": 2.0, "west": 3.0}
    numbered = dataclasses.replace(
        risk_set,
        static={**risk_set.static, "region": np.array([code[r] for r in risk_set.static["region"]])},
    )
    names = tuple(f"prices[{code[n[7:-1]]:g}]" if n.startswith("prices[") else n for n in features.names)
    table = dataclasses.replace(
        features, names=names, keyed={"prices": KeyedFeature("region", ("1", "2", "3"))}
    )
    a = fit_hazard(make_spec(*TERMS), risk_set, features)
    b = fit_hazard(make_spec(*TERMS), numbered, table)
    np.testing.assert_array_equal(a.params, b.params)


def test_two_loan_columns_and_products_of_features_that_go_by_them() -> None:
    """``prices`` by region and ``rent`` by product, and their product: a column of U and V for each pair of levels."""
    risk_set, features = regional_panel()
    rng = np.random.default_rng(4)
    rent = {f"rent[{p}]": rng.normal(size=features.n_periods) for p in ("fixed", "floating", "other")}
    table = feature_table(features.start, **{n: features.column(n) for n in features.names}, **rent)
    table = keyed_table(keyed_table(table, "prices", "region", REGIONS), "rent", "product", ("fixed", "floating", "other"))  # fmt: skip
    terms = ({"age": "linear"}, {"macro": "prices"}, {"macro": "rent"}, {"interaction": ("prices", "rent")}, {"interaction": ("age", "rent")})  # fmt: skip
    rows = in_full(risk_set, features)
    rent_of = [
        rent[f"rent[{p}]"][t - features.start] for p, t in zip(rows["product"], rows["period"], strict=True)
    ]
    filled = dataclasses.replace(
        risk_set, moving={"prices": rows["prices"].to_numpy(), "rent": np.array(rent_of)}
    )
    columns = [{"loan": t["macro"]} if "macro" in t else t for t in terms]
    for backend in ("rows", "factored"):
        fit = fit_hazard(make_spec(*terms), risk_set, table, backend=backend)  # type: ignore[arg-type]
        again = fit_hazard(make_spec(*columns), filled, table)
        assert fit.llf == pytest.approx(again.llf, rel=1e-12)
        assert (np.abs(fit.params - again.params) / fit.standard_errors("model_expected")).max() < 1e-7
        _close(fit.cov_params("loan"), again.cov_params("loan"))
    assert fit.design.keys.count == 9
    n = risk_set.n_loans
    loans = fit.loan_part(risk_set.static, n)
    values = np.column_stack([table.column(name)[:5] for name in fit.feature_names])
    cells = fit.cell_part(np.arange(1, 6), values, fit.feature_names)
    eta = loans.s[:, None] + cells.z + loans.U @ cells.V.T
    for i in (0, 7, 100):
        frame = pd.DataFrame({"age": np.arange(1, 6), "region": risk_set.static["region"][i], "product": risk_set.static["product"][i]})  # fmt: skip
        frame = frame.assign(**{name: values[:, j] for j, name in enumerate(fit.feature_names)})
        np.testing.assert_allclose(fit.link.probability(eta[i]), fit.predict(frame), rtol=1e-12)


@pytest.mark.parametrize("beyond", ["weibull", "loglogistic"])
def test_the_tail_sees_the_loans_own_column(beyond: str) -> None:
    risk_set, features = regional_panel(loans=900)
    age = {"age": "spline", "knots": 2, "beyond": beyond, "tail_from": 4}
    terms = (age, {"macro": "prices"}, {"loan": "ltv"})
    fit = fit_hazard(make_spec(*terms), risk_set, features)
    again = fit_hazard(make_spec(age, {"loan": "prices"}, {"loan": "ltv"}), *_filled(risk_set, features))
    assert fit.tail is not None
    assert again.tail is not None
    assert (fit.tail.shape, fit.tail.scale) == pytest.approx((again.tail.shape, again.tail.scale), rel=1e-6)
    assert fit.tail.step == pytest.approx(again.tail.step, abs=1e-8)


def test_what_is_known_of_each_level_counts_for_its_own_loans() -> None:
    """West's series starts 20 months later: only the rows of its loans are left out."""
    risk_set, features = regional_panel()
    values = np.array(features.values)
    values[:20, features.names.index("prices[west]")] = np.nan
    late = dataclasses.replace(features, values=values)
    terms = ({"age": "linear"}, {"macro": "prices"}, {"macro": "gap"})
    rows = in_full(risk_set, features)
    rows = rows[rows["cause"] != 2]
    known = (rows["region"] != "west") | (rows["period"] >= features.start + 20)
    for backend in ("rows", "factored"):
        fit = fit_hazard(make_spec(*terms), risk_set, late, backend=backend)  # type: ignore[arg-type]
        assert fit.nobs == known.sum()
        assert fit.rows_without_feature == (~known).sum() > 0
        assert fit.n_events == (rows["cause"][known] == 1).sum()
        x = pd.DataFrame({"intercept": 1.0, "age[linear]": rows["age"], "prices": rows["prices"], "gap": rows["gap"]})[known]  # fmt: skip
        family = sm.families.Binomial(sm.families.links.CLogLog())
        plain = sm.GLM((rows["cause"][known] == 1) * 1.0, x, family=family).fit(tol=1e-13, maxiter=200)
        assert fit.llf == pytest.approx(plain.llf, rel=1e-11)
        np.testing.assert_allclose(fit.params, plain.params, rtol=1e-6)
    mine = rows[known & (rows["region"] == "west")]["prices"]
    assert fit.feature_ranges["prices[west]"] == (mine.min(), mine.max())
    table = actual_expected(fit, risk_set, late)
    np.testing.assert_allclose(table["at_risk"], rows[known].groupby("period").size())
    np.testing.assert_allclose(table["expected"].sum(), np.asarray(plain.predict(x)).sum(), rtol=1e-7)
    assert hazard_by_age(fit, risk_set, late)["at_risk"].sum() == known.sum()


def test_a_level_that_no_loan_had_takes_the_range_of_all() -> None:
    risk_set, features = regional_panel()
    table = feature_table(
        features.start,
        **{n: features.column(n) for n in features.names},
        **{"prices[isles]": features.column("gap")},
    )
    table = keyed_table(table, "prices", "region", (*REGIONS, "isles"))
    fit = fit_hazard(make_spec({"age": "linear"}, {"macro": "prices"}), risk_set, table)
    own = [fit.feature_ranges[f"prices[{r}]"] for r in REGIONS]
    assert fit.feature_ranges["prices[isles]"] == (min(a for a, _ in own), max(b for _, b in own))
    gate = next(g for g in fit.gates if g.name == "macro_range")
    assert "isles" not in gate.found


def test_a_level_without_a_variable_is_named_with_its_loans() -> None:
    risk_set, features = regional_panel()
    fewer = dataclasses.replace(features, keyed={"prices": KeyedFeature("region", ("north", "south"))})
    lost = np.flatnonzero(risk_set.static["region"] == "west")
    with pytest.raises(DataError) as caught:
        fit_hazard(make_spec({"macro": "prices"}), risk_set, fewer)
    first = ", ".join(risk_set.loan_ids[lost[:5]])
    assert str(caught.value) == (
        f"macro feature 'prices' goes by 'region' and has no variable for {lost.size} loans of level 'west' ({lost.size}) "
        f"(first: {first}). Levels with a variable: 'north', 'south'. Name a variable for each level under "
        "macro.features.prices.of, or leave these loans out."
    )
    absent = dataclasses.replace(risk_set, static={"ltv": risk_set.static["ltv"]})
    with pytest.raises(DataError, match=r"goes by the loan column 'region', which is not among .*: ltv$"):
        fit_hazard(make_spec({"macro": "prices"}), absent, features)
    with pytest.raises(UsageError, match="no macro feature 'price'; features: rate, gap, prices"):
        fit_hazard(make_spec({"macro": "price"}), risk_set, features)


def test_a_feature_table_holds_the_columns_that_it_says() -> None:
    _, features = regional_panel()
    assert features.features == ("rate", "gap", "prices")
    assert features.columns_of("prices") == ("prices[north]", "prices[south]", "prices[west]")
    assert features.columns_of("gap") == ("gap",)
    with pytest.raises(KeyError):
        features.columns_of("prices[north]x")
    with pytest.raises(ValueError, match=r"no column 'prices\[isles\]'"):
        dataclasses.replace(features, keyed={"prices": KeyedFeature("region", ("isles",))})


def test_one_level_with_several_episodes_passes_the_range_gate() -> None:
    """North's series is flat, south's has one slump, west's moves all the time."""
    risk_set, features = regional_panel()
    n = features.n_periods
    slump, wave = np.zeros(n), np.sin(np.arange(n) / 3.0)
    slump[20:24] = 5.0
    series = {"north": np.full(n, 1.0), "south": slump, "west": wave}

    def gate(*moving: str) -> Gate:
        columns = {f"prices[{r}]": series[r if r in moving else "south"] for r in REGIONS}
        table = keyed_table(feature_table(features.start, **columns), "prices", "region", REGIONS)
        fit = fit_hazard(make_spec({"age": "linear"}, {"macro": "prices"}), risk_set, table)
        return next(g for g in fit.gates if g.name == "macro_range")

    assert not gate().passed
    assert gate("west").passed
    assert "prices[west] -1 to 0.9954" in gate("west").found
    assert not gate("north").passed
    assert "prices[north] 1 throughout" in gate("north").found


def test_a_feature_that_never_varies_is_refused_by_its_name() -> None:
    risk_set, features = regional_panel()
    flat = feature_table(features.start, **{f"prices[{r}]": np.ones(features.n_periods) for r in REGIONS})
    flat = keyed_table(flat, "prices", "region", REGIONS)
    with pytest.raises(NumericError, match="'prices' does not vary over the rows at risk"):
        fit_hazard(make_spec({"macro": "prices", "transform": "standardise"}), risk_set, flat)
    steps = feature_table(features.start, **{f"prices[{r}]": np.full(features.n_periods, k) for k, r in enumerate(REGIONS)})  # fmt: skip
    steps = keyed_table(steps, "prices", "region", REGIONS)
    with pytest.raises(NumericError, match="cannot be told apart: prices, region"):
        fit_hazard(make_spec({"macro": "prices"}, {"loan": "region", "as": "category"}), risk_set, steps)


@pytest.mark.parametrize(
    "more",
    [{"ridge": 3.0}, {"bias_reduction": "firth"}, {"ridge": 1.0, "link": "logit"}],
    ids=["ridge", "firth", "ridge logit"],
)
def test_penalties_see_the_column_as_it_is_row_by_row(more: dict[str, Any]) -> None:
    risk_set, features = regional_panel(more.get("link", "cloglog"), 400)
    fit = fit_hazard(make_spec(*TERMS, **more), risk_set, features)
    again = fit_hazard(make_spec(*_as_loan_column(TERMS), **more), *_filled(risk_set, features))
    assert fit.estimation.method == again.estimation.method != "maximum likelihood"
    assert (np.abs(fit.params - again.params) / fit.standard_errors("model_expected")).max() < 1e-6
    np.testing.assert_allclose(fit.estimation.weights, again.estimation.weights, rtol=1e-9)
    assert fit.estimation.penalty == pytest.approx(again.estimation.penalty, rel=1e-8)


def test_a_held_spline_does_not_part_age_from_a_trend_by_region_and_origination() -> None:
    """The trend is that of the calendar in every region, so period - origination is age as it is for one series."""
    risk_set, features = regional_panel()
    origin = np.zeros(risk_set.n_loans)
    origin[risk_set.stay_loan] = risk_set.stay_origin - features.start
    dated = dataclasses.replace(risk_set, static={**risk_set.static, "origin": origin})
    trend = np.arange(features.n_periods) / 12.0
    table = feature_table(features.start, **{f"prices[{r}]": trend for r in REGIONS})
    table = keyed_table(table, "prices", "region", REGIONS)
    terms = ({"age": "spline", "knots": 2, "until": 20}, {"loan": "origin"}, {"macro": "prices"})
    with pytest.raises(
        NumericError, match=r"cannot be told apart: age, origin, prices\. Only the age from which"
    ):
        fit_hazard(make_spec(*terms), dated, table)
    own = np.array(table.values)
    own[:, 1] += np.sin(np.arange(features.n_periods))
    assert fit_hazard(make_spec(*terms), dated, dataclasses.replace(table, values=own)).llf < 0.0
