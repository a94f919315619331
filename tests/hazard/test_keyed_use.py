"""What becomes of a fit with a feature that goes by a loan column: prediction, parts, projection, the saved model."""

from __future__ import annotations

import dataclasses
import json
import math
from typing import Any

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import DataError, TextError
from stresskit.core.values import AFTERWARDS, FeatureDefinition, FeatureTable, KeyedFeature, Portfolio
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.model_schema import model_schema
from stresskit.hazard.terms import KeyedMacro
from stresskit.loss.assess import assess
from stresskit.projection.project import check_origin, project
from stresskit.spec.study import Loss
from tests.hazard.hazard_cases import make_spec
from tests.hazard.keyed_cases import in_full, regional_panel
from tests.hazard.schema_checker import broken

TERMS: tuple[dict[str, Any], ...] = (
    {"age": "log"},
    {"loan": "ltv"},
    {"loan": "product", "as": "category", "reference": "fixed"},
    {"macro": "gap"},
    {"macro": "prices", "transform": "standardise", "expect": "positive"},
    {"interaction": ("product", "prices")},
    {"interaction": ("product", "gap")},
    {"interaction": ("ltv", "prices")},
)
START = 24_030


def _defined(features: FeatureTable) -> FeatureTable:
    made = {
        n: FeatureDefinition(f"{n}_of", "difference", 4, 1, "percent", "linear", "quarter")
        for n in features.names
    }
    return dataclasses.replace(features, definitions=made)


@pytest.fixture(scope="module", params=["cloglog", "logit"])
def fits(request: pytest.FixtureRequest) -> dict[str, sk.HazardFit]:
    risk_set, features = regional_panel(request.param)
    features = _defined(features)
    default = fit_hazard(make_spec(*TERMS, link=request.param), risk_set, features)
    payoff = fit_hazard(
        make_spec({"age": "linear"}, {"macro": "rate"}, link=request.param),
        risk_set,
        features,
        cause="payoff",
    )
    return {"default": default, "payoff": payoff}


def _book() -> tuple[Portfolio, FeatureTable]:
    """Every third loan as if it were on book at START - 1, and the features as the path."""
    risk_set, features = regional_panel()
    at = np.arange(0, risk_set.n_loans, 3)
    n = at.size
    return Portfolio(
        risk_set.frequency, START - 1, risk_set.loan_ids[at], np.arange(n) % 23, 1 + np.arange(n) % 17,
        np.full(n, 1000.0), np.full(n, 0.05), {k: v[at] for k, v in risk_set.static.items()},
    ), _defined(features)  # fmt: skip


def _plain_eta(fit: sk.HazardFit, loan: dict[str, Any], age: int, value: dict[str, float]) -> float:
    """The linear predictor of one loan and period by the names of the coefficients."""
    b = fit.params
    if fit.cause == "payoff":
        return float(
            b["intercept"] + b["age[linear]"] * min(age, fit.supported_age) + b["rate"] * value["rate"]
        )
    term = next(t for t in fit.design.terms if isinstance(t, KeyedMacro))
    prices = (value[f"prices[{loan['region']}]"] - term.centre) / term.scale
    eta = b["intercept"] + b["age[log]"] * math.log(min(age, fit.supported_age)) + b["ltv"] * loan["ltv"]
    eta += b["gap"] * value["gap"] + b["prices"] * prices + b["ltv:prices"] * loan["ltv"] * prices
    if loan["product"] != "fixed":
        name = f"product[{loan['product']}]"
        eta += b[name] + b[f"{name}:prices"] * prices + b[f"{name}:gap"] * value["gap"]
    return float(eta)


def test_the_projection_is_the_plain_loop(fits: dict[str, sk.HazardFit]) -> None:
    book, path = _book()
    result = project(book, fits, path)
    logit = fits["default"].spec.link == "logit"
    for i in range(book.n_loans):
        loan = {k: v[i] for k, v in book.static.items()}
        alive, defaulted = 1.0, 0.0
        for h in range(int(book.remaining[i])):
            row = path.values[START + h - path.start]
            value = dict(zip(path.names, row.tolist(), strict=True))
            odds = []
            for fit in fits.values():
                eta = _plain_eta(fit, loan, int(book.age[i]) + 1 + h, value)
                odds.append(math.exp(eta) if logit else math.expm1(math.exp(eta)))
            whole = 1.0 + sum(odds)
            assert result.flows["default"][i, h] == pytest.approx(alive * odds[0] / whole, rel=1e-10)
            defaulted += alive * odds[0] / whole
            alive /= whole
            assert result.survival[i, h] == pytest.approx(alive, rel=1e-12)
        assert result.pd_lifetime()[i] == pytest.approx(defaulted, rel=1e-11)


def test_projected_loans_in_another_order_are_the_same_bits(fits: dict[str, sk.HazardFit]) -> None:
    book, path = _book()
    order = np.random.default_rng(1).permutation(book.n_loans)
    mixed = dataclasses.replace(
        book,
        static={k: v[order] for k, v in book.static.items()},
        **{n: getattr(book, n)[order] for n in ("loan_ids", "age", "remaining", "balance", "rate")},
    )
    a, b = project(book, fits, path), project(mixed, fits, path)
    np.testing.assert_array_equal(a.flows["default"][order], b.flows["default"])
    np.testing.assert_array_equal(a.survival[order], b.survival)


def test_a_shock_to_one_region_moves_its_loans_alone(fits: dict[str, sk.HazardFit]) -> None:
    book, path = _book()
    values = np.array(path.values)
    values[:, path.names.index("prices[south]")] += 1.0
    plain, shocked = project(book, fits, path), project(book, fits, dataclasses.replace(path, values=values))
    moved = (plain.flows["default"] != shocked.flows["default"]).any(axis=1)
    np.testing.assert_array_equal(moved, book.static["region"] == "south")


def test_predictions_are_those_of_the_rows_in_full(fits: dict[str, sk.HazardFit]) -> None:
    fit = fits["default"]
    risk_set, features = regional_panel(fit.spec.link)
    rows = in_full(risk_set, features).iloc[::7].reset_index(drop=True)
    for name in features.names:
        rows[name] = features.column(name)[rows["period"] - features.start]
    p = fit.predict(rows)
    eta = [_plain_eta(fit, r, int(r["age"]), r) for r in rows.to_dict("records")]
    np.testing.assert_allclose(p, fit.link.probability(np.array(eta)), rtol=1e-10)
    # A hole in a column that a row does not read is no hole of that row.
    holes = rows.assign(**{"prices[west]": rows["prices[west]"].where(rows["region"] == "west")})
    np.testing.assert_array_equal(fit.predict(holes), p)
    with pytest.raises(DataError, match=r"'prices\[west\]' has 1 values that are not finite"):
        at = rows.index[rows["region"] == "west"][0]
        fit.predict(rows.assign(**{"prices[west]": rows["prices[west]"].where(rows.index != at)}))
    with pytest.raises(DataError, match=r"needs the columns 'prices\[south\]'"):
        fit.predict(rows.drop(columns="prices[south]"))
    with pytest.raises(DataError, match=r"no variable for 1 loans of level 'isles' \(1\) \(first: 3\)"):
        fit.predict(rows.assign(region=rows["region"].where(rows.index != 3, "isles")))
    assert fit.loan_columns == ("ltv", "product", "region")
    assert fit.feature_names == ("gap", "prices[north]", "prices[south]", "prices[west]")
    assert fit.design.features == ("gap", "prices")


def test_a_loan_of_the_book_without_a_variable_is_named(fits: dict[str, sk.HazardFit]) -> None:
    book, path = _book()
    region = np.array(book.static["region"])
    region[4] = "isles"
    lost = dataclasses.replace(book, static={**book.static, "region": region})
    with pytest.raises(
        DataError, match=rf"'isles' \(1\) \(first: {book.loan_ids[4]}\)\. Levels with a variable: 'north'"
    ):
        project(lost, fits, path)


def test_what_rests_on_values_after_the_last_given_one_is_told_region_by_region(
    fits: dict[str, sk.HazardFit],
) -> None:
    """West's path is given for 5 months, the others' to the end."""
    book, path = _book()
    flags = np.array(path.flags)
    flags[START + 5 - path.start :, path.names.index("prices[west]")] = AFTERWARDS
    found = assess(
        book, fits, dataclasses.replace(path, flags=flags), Loss.model_validate({"lgd": {"constant": 0.4}}),
        cells=np.zeros(book.n_loans, dtype=np.int64), n_cells=1,
    )  # fmt: skip
    late = project(book, fits, path).flows["default"][:, 5:].sum(axis=1)
    west = book.static["region"] == "west"
    np.testing.assert_allclose(found.loans["beyond_path"], np.where(west, late, 0.0), rtol=1e-12)
    assert late[~west].max() > 0.0


def test_a_saved_model_comes_back_to_the_same_bits(fits: dict[str, sk.HazardFit]) -> None:
    fit = fits["default"]
    document = json.loads(fit.to_json())
    assert document["version"] == 2
    assert broken(document, model_schema()) == []
    term = document["design"]["terms"][4]
    assert (term["kind"], term["source"], term["by"]) == ("keyed", "prices", "region")
    assert term["levels"] == ["north", "south", "west"]
    assert set(document["features"]) == {"gap", "prices[north]", "prices[south]", "prices[west]"}
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.design == fit.design
    assert again.summary() == fit.summary()
    book, path = _book()
    a, b = (project(book, fits | {"default": f}, path) for f in (fit, again))
    np.testing.assert_array_equal(a.flows["default"], b.flows["default"])


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda d: d["design"]["terms"][4].pop("by"), "KeyedMacro has keys"),
        (lambda d: d["design"]["terms"][4].update(levels="north"), "levels is 'north', expected a list"),
        (lambda d: d["design"]["terms"][4]["levels"].append("isles"), "features: keys"),
        (lambda d: d["features"].pop("prices[west]"), "features: keys"),
    ],
)
def test_a_damaged_key_is_not_read(fits: dict[str, sk.HazardFit], change: Any, words: str) -> None:
    document = json.loads(fits["default"].to_json())
    change(document)
    with pytest.raises(TextError) as caught:
        sk.HazardFit.from_json(json.dumps(document))
    assert words in str(caught.value)


def test_a_study_with_other_keys_is_refused(fits: dict[str, sk.HazardFit]) -> None:
    _, path = _book()
    check_origin(fits, path)
    moved = dataclasses.replace(path, keyed={"prices": KeyedFeature("place", ("north", "south", "west"))})
    with pytest.raises(
        TextError, match="macro feature 'prices' by loan column 'region', the study has it by 'place'"
    ):
        check_origin(fits, moved)
    fewer = dataclasses.replace(path, keyed={"prices": KeyedFeature("region", ("north", "west"))})
    with pytest.raises(TextError, match="'prices' for region 'south', for which the study names no variable"):
        check_origin(fits, fewer)
    names = tuple("prices" if n == "prices[north]" else n for n in path.names)
    plain = dataclasses.replace(path, names=names, keyed={}, definitions={})
    with pytest.raises(
        TextError, match="'prices' by loan column 'region', the study has it the same for all loans"
    ):
        check_origin(fits, plain)
    ordinary = {"default": fit_hazard(make_spec({"macro": "prices"}), regional_panel()[0], plain)}
    with pytest.raises(TextError, match="'prices' the same for all loans, the study has it by 'region'"):
        check_origin(ordinary, path)
    other = {**path.definitions, "prices[south]": dataclasses.replace(path.definitions["gap"], lag=3)}
    with pytest.raises(TextError, match=r"another macro feature 'prices\[south\]' \(of: "):
        check_origin(fits, dataclasses.replace(path, definitions=other))
    # A level more is no other feature: its loans read a variable of their own.
    more = dataclasses.replace(
        path, keyed={"prices": KeyedFeature("region", ("isles", "north", "south", "west"))},
        names=(*path.names, "prices[isles]"), values=np.column_stack([path.values, path.values[:, 0]]),
        flags=np.column_stack([path.flags, path.flags[:, 0]]), definitions={},
    )  # fmt: skip
    check_origin(fits, more)


def test_tables_and_summary_speak_of_the_one_coefficient(fits: dict[str, sk.HazardFit]) -> None:
    fit = fits["default"]
    table = fit.coefficient_table().set_index("term")
    assert table.loc["prices", "expect"] == "positive"
    assert table.loc["prices", "sign_ok"] is bool(fit.params["prices"] > 0)
    assert "prices: by region, 3 levels, (x - " in fit.summary()
    assert max(len(line) for line in fit.summary().splitlines()) <= 100
    assert set(fit.feature_ranges) == {"gap", "prices[north]", "prices[south]", "prices[west]"}
    few = fit_hazard(make_spec({"macro": "prices", "bound": "negative"}), *regional_panel())
    assert few.at_bound == ("prices",)
    assert isinstance(pd.Series(few.params)["prices"], float)
