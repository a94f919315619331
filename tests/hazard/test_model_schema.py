"""The published schema of a saved hazard, and what a saved hazard must not hold."""

from __future__ import annotations

import copy
import dataclasses
import importlib.util
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import stresskit as sk
from stresskit.core.errors import TextError
from stresskit.core.values import FeatureDefinition, FeatureTable, RiskSet
from stresskit.hazard.model_schema import model_schema
from tests.hazard.hazard_cases import make_spec, simulated_panel
from tests.hazard.schema_checker import broken

ROOT = Path(__file__).parent.parent.parent
GOLDEN = sorted((ROOT / "tests" / "data" / "golden").glob("hazard_*.json"))
SCHEMA = model_schema()
EVERYTHING: tuple[dict[str, Any], ...] = (
    {"age": "spline", "knots": 3}, {"loan": "ltv", "transform": "standardise", "expect": "positive"},
    {"loan": "product", "as": "category"}, {"macro": "rate", "transform": "standardise"}, {"macro": "gap"},
    {"interaction": ("product", "gap")}, {"interaction": ("age", "ltv")}, {"offset": "shift"},
)  # fmt: skip
SPECS: dict[str, tuple[tuple[dict[str, Any], ...], dict[str, Any]]] = {
    "everything": (EVERYTHING, {}),
    "logit": (EVERYTHING, {"link": "logit", "covariance": "loan"}),
    "steps without intercept": (({"age": "steps", "bands": (6, 12)}, {"macro": "gap"}), {"intercept": False}),
    "function and weibull": (({"age": "log", "beyond": "weibull", "tail_from": 3}, {"loan": "ltv"}), {}),
    "spline and loglogistic": (
        ({"age": "spline", "knots": 2, "beyond": "loglogistic", "tail_from": 2},),
        {"link": "logit"},
    ),
    "ridge": (({"age": "linear"}, {"loan": "ltv"}), {"ridge": 2.0}),
    "firth": (({"age": "linear"}, {"loan": "product", "as": "category"}), {"bias_reduction": "firth"}),
    "bound": (({"age": "linear"}, {"macro": "rate", "bound": "negative"}), {}),
}


def _panel(loans: int, seed: int = 3) -> tuple[RiskSet, FeatureTable]:
    risk_set, features = simulated_panel(loans=loans, seed=seed)
    rng = np.random.default_rng(seed)
    n = risk_set.n_loans
    ids = np.array([f"K{k:012d}" for k in np.sort(rng.choice(10**12, n, replace=False))], dtype=object)
    static = dict(risk_set.static) | {"shift": rng.normal(0.0, 0.1, n)}
    return (
        RiskSet(
            risk_set.frequency, risk_set.causes, ids, static, risk_set.stay_loan, risk_set.stay_origin, risk_set.stay_entry,
            risk_set.stay_exit, risk_set.stay_cause, risk_set.weight,
        ),
        features,
    )  # fmt: skip


def _saved(name: str, loans: int = 600) -> tuple[str, RiskSet]:
    risk_set, features = _panel(loans)
    terms, more = SPECS[name]
    return sk.fit_hazard(make_spec(*terms, **more), risk_set, features).to_json(), risk_set


def test_the_published_file_is_what_the_classes_give() -> None:
    place = ROOT / "docs" / "make_model_schema.py"
    module = importlib.util.module_from_spec(
        found := importlib.util.spec_from_file_location("make_model_schema", place)
    )  # type: ignore[arg-type]
    assert found is not None
    assert found.loader is not None
    found.loader.exec_module(module)
    assert (ROOT / "docs" / "model-schema.json").read_text(encoding="utf-8") == module.text()


@pytest.mark.parametrize("name", sorted(SPECS))
def test_what_is_saved_follows_the_schema(name: str) -> None:
    text, _ = _saved(name)
    assert broken(json.loads(text), SCHEMA) == []


@pytest.mark.parametrize("path", GOLDEN, ids=lambda p: p.name)
def test_saved_models_of_earlier_versions_follow_it_too(path: Path) -> None:
    assert broken(json.loads(path.read_text(encoding="utf-8")), SCHEMA) == []


def test_there_are_golden_files() -> None:
    assert len(GOLDEN) >= 4


def _change(document: dict[str, Any], place: tuple[Any, ...], value: Any) -> dict[str, Any]:
    out = copy.deepcopy(document)
    here: Any = out
    for key in place[:-1]:
        here = here[key]
    if value is KeyError:
        del here[place[-1]]
    else:
        here[place[-1]] = value
    return out


@pytest.mark.parametrize(
    ("place", "value"),
    [
        (("format",), "hazard"), (("version",), 99), (("loans",), []), (("labels",), KeyError), (("coefficients", 0), "1.0"),
        (("coefficients", 0), None), (("spec", "link"), "probit"), (("spec", "terms", 0, "age"), "cubic"),
        (("design", "intercept"), 1), (("design", "terms", 0, "kind"), "wave"), (("design", "terms", 0, "largest"), 1.5),
        (("design", "terms", 0, "rows"), []), (("facts", "n_loans"), KeyError), (("facts", "rows"), [1]),
        (("tail", "shape"), "steep"), (("tail", "join"), KeyError), (("covariances", "matrices", "period"), KeyError),
        (("covariances", "clusters", "loan"), "many"),
    ],
)  # fmt: skip
def test_a_damaged_model_breaks_the_schema_and_is_not_read(place: tuple[Any, ...], value: Any) -> None:
    text, _ = _saved("function and weibull")
    damaged = _change(json.loads(text), place, value)
    assert broken(damaged, SCHEMA) != []
    with pytest.raises(TextError):
        sk.HazardFit.from_json(json.dumps(damaged))


@pytest.mark.parametrize("name", sorted(SPECS))
def test_no_loan_is_in_a_saved_model(name: str) -> None:
    text, risk_set = _saved(name)
    assert [i for i in risk_set.loan_ids if i in text] == []
    for column in ("ltv", "shift"):
        values = risk_set.static[column]
        assert [v for v in values if repr(float(v)) in text] == [], column


def test_a_saved_model_does_not_grow_with_the_loans() -> None:
    def shape(value: Any) -> Any:
        if isinstance(value, dict):
            return {k: shape(v) for k, v in value.items()}
        return [shape(v) for v in value] if isinstance(value, list) else "value"

    few, many = (json.loads(_saved("everything", loans)[0]) for loans in (500, 1500))
    few.pop("gates")  # their number follows the levels and features, not the loans; texts are compared above
    many.pop("gates")
    assert shape(few) == shape(many)
    assert few["facts"]["n_loans"] < many["facts"]["n_loans"]


def _defined() -> sk.HazardFit:
    """A fit that reads one of two features whose making is known."""
    risk_set, features = _panel(300)
    made = {
        name: FeatureDefinition(f"{name}_of", "difference", 4, lag, "percent", "linear", "quarter")
        for lag, name in enumerate(features.names)
    }
    table = dataclasses.replace(features, definitions=made)
    return sk.fit_hazard(make_spec({"age": "linear"}, {"macro": "gap"}), risk_set, table)


def test_how_features_were_made_is_saved_of_those_that_are_read() -> None:
    fit = _defined()
    document = json.loads(fit.to_json())
    assert broken(document, SCHEMA) == []
    assert list(document["features"]) == ["gap"]
    assert document["features"]["gap"]["of"] == "gap_of"
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.definitions == fit.definitions
    assert again.to_json() == fit.to_json()


@pytest.mark.parametrize(
    ("place", "value"),
    [(("features",), []), (("features", "gap"), KeyError), (("features", "gap", "lag"), "1"), (("features", "gap", "lag"), KeyError),
     (("features", "gap", "source"), "x"), (("features", "rate"), {})],
)  # fmt: skip
def test_damaged_definitions_are_not_read(place: tuple[Any, ...], value: Any) -> None:
    document = json.loads(_defined().to_json())
    if place == ("features", "gap"):
        document["features"]["other"] = document["features"]["gap"]
    with pytest.raises(TextError, match="saved hazard: features: "):
        sk.HazardFit.from_json(json.dumps(_change(document, place, value)))


@pytest.mark.parametrize("path", [p for p in GOLDEN if "_v1_" in p.name], ids=lambda p: p.name)
def test_version_1_knows_of_no_definitions(path: Path) -> None:
    text = path.read_text(encoding="utf-8")
    fit = sk.HazardFit.from_json(text)
    assert fit.feature_names
    assert fit.definitions == {}
    with pytest.raises(TextError, match="unknown keys features"):
        sk.HazardFit.from_json(json.dumps(json.loads(text) | {"features": {}}))
