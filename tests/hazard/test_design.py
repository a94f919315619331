"""Terms and design: bases, knots, levels, holding beyond the data, frozen state."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pandas as pd
import pytest
from scipy.interpolate import CubicSpline

import stresskit as sk
from stresskit.core.errors import DataError, NumericError
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.design import Design
from stresskit.hazard.learn import learn_design
from stresskit.hazard.levels import coded
from stresskit.hazard.terms import AgeFunction, AgeSpline, AgeSteps, LoanCategory, LoanNumber, MacroNumber
from stresskit.kernels.splines import natural_basis
from tests.hazard.hazard_cases import feature_table, make_spec


def _frame() -> pd.DataFrame:
    """Ages 2 to 9 (7 not observed), three events at 3, one at 5, two at 9; loans of unequal length."""
    spells = [
        (1, 1, 3, 1),
        (2, 1, 3, 1),
        (3, 1, 3, 1),
        (4, 3, 5, 1),
        (5, 1, 6, 0),
        (6, 7, 9, 1),
        (7, 8, 9, 1),
    ]
    rows = [
        {"loan": i, "age": a, "event": int(e and a == last)}
        for i, entry, last, e in spells
        for a in range(entry + 1, last + 1)
    ]
    frame = pd.DataFrame(rows)
    size = {1: 10.0, 2: 20.0, 3: 30.0, 4: 40.0, 5: 100.0, 6: 60.0, 7: 70.0}
    kind = {1: "b", 2: "b", 3: "a", 4: "a", 5: "c", 6: "b", 7: "a"}
    return frame.assign(size=frame["loan"].map(size), kind=frame["loan"].map(kind), code=frame["loan"] % 2)


def _design(*terms: dict[str, Any], frame: pd.DataFrame | None = None, **more: Any) -> Design:
    risk_set = sk.risk_set_from_rows(
        _frame() if frame is None else frame, loan="loan", age="age", event="event", static=["size", "kind", "code"],
    )  # fmt: skip
    features = feature_table(1, m=[1.0, 2.0, 4.0, 7.0, 11.0, 16.0, 22.0, 29.0, 37.0])
    spec = make_spec(*terms, **more)
    rows = cause_rows(risk_set, "default", features, spec.macro_features())
    return learn_design(spec, rows, features)


def test_natural_basis_is_scipys_natural_spline_through_unit_values() -> None:
    knots = np.array([1.0, 4.0, 5.0, 11.0, 30.0])
    x = np.linspace(1.0, 30.0, 200)
    ours = natural_basis(knots, x)
    np.testing.assert_allclose(ours, CubicSpline(knots, np.eye(5), bc_type="natural")(x), atol=1e-12)
    np.testing.assert_allclose(ours.sum(axis=1), 1.0, rtol=1e-13)
    np.testing.assert_allclose(natural_basis(knots, knots), np.eye(5), atol=1e-15)
    np.testing.assert_allclose(natural_basis(np.array([1.0, 3.0]), np.array([2.5])), [[0.25, 0.75]])
    with pytest.raises(ValueError, match="outside"):
        natural_basis(knots, np.array([0.5]))


def test_knots_lie_at_quantiles_of_event_ages_and_at_both_ends() -> None:
    spline = _design({"age": "spline", "knots": 2}).terms[0]
    assert isinstance(spline, AgeSpline)
    assert spline.knots == (2.0, 3.0, 5.0, 9.0)  # events at 3, 3, 3, 5, 9, 9: thirds at the 2nd and 4th
    assert spline.main == (0, 1, 3)
    listed = _design({"age": "spline", "knots": (4.5,)}).terms[0]
    assert isinstance(listed, AgeSpline)
    assert listed.knots == (2.0, 4.5, 9.0)
    assert listed.labels == ("age[2]", "age[4.5]", "age[9]")


def test_event_ages_are_weighted_in_the_knots() -> None:
    frame = _frame().assign(weight=1.0)
    frame.loc[frame["loan"] >= 6, "weight"] = 50.0
    risk_set = sk.risk_set_from_rows(frame, loan="loan", age="age", event="event", weight="weight")
    rows = cause_rows(risk_set, "default")
    spec = make_spec({"age": "spline", "knots": 1})
    with pytest.raises(NumericError, match="fall on only 0 distinct ages"):
        learn_design(spec, rows, None)


@pytest.mark.parametrize(
    "term",
    [
        {"age": "spline", "knots": 2},
        {"age": "steps"},
        {"age": "linear"},
        {"age": "log"},
        {"age": "quadratic"},
    ],
)
def test_ages_beyond_the_observed_ones_are_held(term: dict[str, Any]) -> None:
    design = _design(term)
    held = design.age_matrix(np.array([1, 2, 9, 10, 400]))
    np.testing.assert_array_equal(held[0], held[1])
    np.testing.assert_array_equal(held[2], held[3])
    np.testing.assert_array_equal(held[2], held[4])


def test_every_observed_age_is_a_step_and_the_one_with_most_events_the_reference() -> None:
    steps = _design({"age": "steps"}).terms[0]
    assert isinstance(steps, AgeSteps)
    assert steps.labels == ("age[2]", "age[3]", "age[4]", "age[5]", "age[6]", "age[8]", "age[9]")
    assert steps.labels[steps.reference] == "age[3]"
    np.testing.assert_array_equal(
        steps.level(np.array([6, 7, 8])), [4, 5, 5]
    )  # an age not seen joins the next one seen
    bands = _design({"age": "steps", "bands": (4, 5)}).terms[0]
    assert isinstance(bands, AgeSteps)
    assert bands.labels == ("age[1-4]", "age[5]", "age[6+]")
    np.testing.assert_array_equal(bands.level(np.array([1, 4, 5, 6, 50])), [0, 0, 1, 2, 2])


def test_functions_of_age() -> None:
    for kind, expected in (("linear", [[3.0]]), ("log", [[np.log(3.0)]]), ("quadratic", [[3.0, 9.0]])):
        term = _design({"age": kind}).terms[0]
        assert isinstance(term, AgeFunction)
        np.testing.assert_array_equal(term.values(np.array([3])), expected)


def test_standardising_weighs_loans_by_their_rows_and_features_by_the_rows_at_risk() -> None:
    frame = _frame()
    design = _design({"loan": "size", "transform": "standardise"}, {"macro": "m", "transform": "standardise"})
    number, macro = design.terms
    assert isinstance(number, LoanNumber)
    assert number.centre == pytest.approx(frame["size"].mean(), rel=1e-14)
    assert number.scale == pytest.approx(frame["size"].std(ddof=0), rel=1e-14)
    m = frame["age"].map(dict(enumerate([1.0, 2.0, 4.0, 7.0, 11.0, 16.0, 22.0, 29.0, 37.0], 1)))
    assert isinstance(macro, MacroNumber)
    assert (macro.centre, macro.scale) == pytest.approx((m.mean(), m.std(ddof=0)), rel=1e-14)


def test_the_reference_is_the_level_with_most_rows_and_levels_are_text() -> None:
    kind, code = _design({"loan": "kind", "as": "category"}, {"loan": "code", "as": "category"}).terms
    assert isinstance(kind, LoanCategory)
    assert isinstance(code, LoanCategory)
    rows = _frame()["kind"].value_counts()
    assert kind.levels[kind.reference] == rows.index[0]
    assert code.levels == ("0", "1")
    np.testing.assert_array_equal(code.values(np.array([1.0, 0.0])), [[0.0, 1.0], [1.0, 0.0]])


def test_an_unseen_level_is_an_error_that_names_it_and_the_known_ones() -> None:
    kind = _design({"loan": "kind", "as": "category"}).terms[0]
    assert isinstance(kind, LoanCategory)
    with pytest.raises(DataError) as caught:
        kind.values(np.array(["a", "z", "z"], dtype=object), np.array(["L1", "L2", "L3"]))
    for words in ("'z'", "2 cases", "L2, L3", "Known levels: 'a', 'b', 'c'"):
        assert words in str(caught.value)


def test_labels_and_owners_of_every_kind_of_column() -> None:
    design = _design(
        {"age": "quadratic"}, {"loan": "size"}, {"loan": "kind", "as": "category", "reference": "a"}, {"macro": "m"},
        {"interaction": ("kind", "m")}, {"interaction": ("age", "size")}, {"interaction": ("kind:m", "size")},
        {"offset": "code"},
    )  # fmt: skip
    assert design.labels == (
        "intercept", "age[linear]", "age[square]", "size", "kind[b]", "kind[c]", "m", "kind[b]:m", "kind[c]:m",
        "age[linear]:size", "age[square]:size", "kind[b]:m:size", "kind[c]:m:size",
    )  # fmt: skip
    assert design.owner[7:] == ("kind:m", "kind:m", "age:size", "age:size", "kind:m:size", "kind:m:size")
    assert design.sources("loan") == ("size", "kind", "code")
    np.testing.assert_array_equal(
        design.indicators(), [label.startswith("kind") and ":" not in label for label in design.labels]
    )


def test_without_an_intercept_steps_or_else_the_first_category_keep_all_levels() -> None:
    a = _design({"loan": "kind", "as": "category"}, {"age": "steps", "bands": (4,)}, intercept=False)
    assert a.labels[2:] == ("age[1-4]", "age[5+]")
    assert len(a.labels) == 4
    b = _design({"loan": "kind", "as": "category"}, {"loan": "code", "as": "category"}, intercept=False)
    assert b.labels[:3] == ("kind[a]", "kind[b]", "kind[c]")
    assert len(b.labels) == 4
    for design in (a, b):
        constant = design.constant()
        assert constant is not None
        assert constant.sum() == len([x for x in design.owner if x == ("age" if design is a else "kind")])
    assert _design({"age": "linear"}, intercept=False).constant() is None


def test_the_design_is_frozen_to_the_bottom() -> None:
    design = _design({"age": "linear"}, {"loan": "size"})
    with pytest.raises(dataclasses.FrozenInstanceError):
        design.intercept = False  # type: ignore[misc]
    with pytest.raises(TypeError):
        design.index["age"] = design.index["loan"]  # type: ignore[index]
    with pytest.raises(ValueError, match="read-only"):
        design.index["age"][0] = 3


@pytest.mark.parametrize("missing", [[], [None, float("nan")]])
def test_levels_do_not_depend_on_shared_objects(missing: list[object]) -> None:
    rng = np.random.default_rng(5)
    shared = np.array(["bb", "aa", "cc", *missing], dtype=object)[rng.integers(0, 3 + len(missing), 3000)]
    apart = np.array([v if not isinstance(v, str) else "".join(list(v)) for v in shared], dtype=object)
    assert len({id(v) for v in shared}) <= 5
    assert len({id(v) for v in apart}) > 1000
    a, b = coded(shared), coded(apart)
    np.testing.assert_array_equal(a.code, b.code)
    assert [str(v) for v in a.text] == [str(v) for v in b.text]
    assert list(dict.fromkeys(map(str, a.text[a.code]))) == list(map(str, a.text))
