"""Where the age baseline ends: supported ages, a spline's last knot, holding in fit and projection."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import NumericError
from stresskit.core.values import RiskSet
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.learn import learn_design, supported_age
from stresskit.hazard.terms import AgeSpline
from tests.hazard.hazard_cases import make_spec
from tests.hazard.test_tail import lifetimes


def _spells(*groups: tuple[int, int, int]) -> RiskSet:
    """Groups of (how many, last age, event)."""
    exits = np.repeat([g[1] for g in groups], [g[0] for g in groups])
    events = np.repeat([g[2] for g in groups], [g[0] for g in groups])
    rows = pd.DataFrame({"loan": np.arange(exits.size), "exit": exits, "event": events})
    long = rows.loc[rows.index.repeat(rows["exit"])].reset_index(drop=True)
    long["age"] = long.groupby("loan").cumcount() + 1
    long["event"] = long["event"].where(long["age"] == long["exit"], 0)
    return sk.risk_set_from_rows(long, loan="loan", age="age", event="event")


@pytest.mark.parametrize(
    ("support", "expected"),
    [(None, 20), (1, 40), (11, 30), (10, 40), (60, 20), (61, 10)],
)
def test_the_last_supported_age_is_the_last_with_enough_at_risk(support: int | None, expected: int) -> None:
    # At risk: 2,000 to age 10, then 60 to 20, 25 to 30, 10 to 40. A twentieth of 2,000 is 100, so 50 is needed by default.
    risk_set = _spells((1940, 10, 0), (35, 20, 1), (15, 30, 1), (10, 40, 0))
    term = make_spec({"age": "linear", "support": support}).age_term()
    assert supported_age(term, cause_rows(risk_set, "default")) == expected
    fit = fit_hazard(make_spec({"age": "linear", "support": support}), risk_set)
    assert (fit.supported_age, fit.largest_age) == (expected, 40)


def test_a_small_sample_needs_a_twentieth_of_its_peak() -> None:
    risk_set = _spells((180, 10, 1), (11, 20, 1), (9, 30, 1))  # peak 200, so 10 are needed
    assert supported_age(None, cause_rows(risk_set, "default")) == 20


def test_functions_and_steps_are_fitted_on_all_rows_and_held_past_the_supported_age() -> None:
    risk_set = lifetimes("weibull", 1.3, 30.0, n=600, end=60, rng=np.random.default_rng(1))
    for shape in ({"age": "linear"}, {"age": "quadratic"}, {"age": "steps", "bands": (10, 20, 45)}):
        short, whole = (fit_hazard(make_spec(shape | {"support": n}), risk_set) for n in (100, 1))
        np.testing.assert_array_equal(short.params, whole.params)
        last = short.supported_age
        assert last < 60 == whole.supported_age
        z = [f.cell_part(np.arange(1, 90), np.empty((89, 0)), ()).z for f in (short, whole)]
        np.testing.assert_array_equal(z[0][:last], z[1][:last])
        assert set(z[0][last - 1 :]) == {z[0][last - 1]}


def _last_knot(risk_set: RiskSet, **more: Any) -> float:
    spec = make_spec({"age": "spline", "knots": 1} | more)
    (term,) = learn_design(spec, cause_rows(risk_set, "default"), None).terms
    assert isinstance(term, AgeSpline)
    return term.knots[-1]


def test_the_last_knot_stands_where_enough_events_are_left() -> None:
    # 600 events: 20 are needed. 12 at 40 and 9 at 25 make 21, so 25; the thousands alive at 60 do not count.
    risk_set = _spells((579, 10, 1), (9, 25, 1), (12, 40, 1), (5000, 60, 0))
    assert _last_knot(risk_set) == 25
    assert _last_knot(risk_set, until=50) == 50
    # 300 events: a twentieth, 15.
    assert _last_knot(_spells((279, 10, 1), (9, 25, 1), (12, 40, 1), (5000, 60, 0))) == 25
    assert _last_knot(_spells((279, 10, 1), (6, 25, 1), (15, 40, 1), (5000, 60, 0))) == 40
    # Never past the last supported age.
    assert _last_knot(_spells((5000, 12, 0), (600, 10, 1), (25, 40, 1))) == 12


def test_knots_and_until_out_of_place_are_refused_with_the_remedy() -> None:
    risk_set = _spells((579, 10, 1), (9, 25, 1), (12, 40, 1), (5000, 60, 0))
    for term, words in (
        ({"knots": (8, 30)}, "set `until` to 60 at most"),
        ({"knots": (8, 30), "until": 30}, "out of place: \\[30.0\\]"),
        ({"until": 61}, "until is 61, expected an age above 1 and at most 60"),
    ):
        with pytest.raises(NumericError, match=words):
            _last_knot(risk_set, **term)
    assert _last_knot(risk_set, knots=(8, 30), until=50) == 50


def test_a_spline_is_constant_past_its_last_knot_in_the_fit_too() -> None:
    """The same fit as when every age past the last knot is recorded as that age."""
    risk_set = lifetimes("loglogistic", 1.8, 12.0, n=1500, end=60, rng=np.random.default_rng(2), effect=0.4)
    fit = fit_hazard(make_spec({"age": "spline", "knots": 3}, {"loan": "x"}), risk_set)
    (spline, _) = fit.design.terms
    assert isinstance(spline, AgeSpline)
    end = int(spline.knots[-1])
    assert end < fit.supported_age
    stay = np.repeat(np.arange(risk_set.stay_loan.size), risk_set.stay_exit - risk_set.stay_entry)
    age = np.concatenate(
        [np.arange(a + 1, b + 1) for a, b in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    event = (risk_set.stay_cause[stay] == 1) & (age == risk_set.stay_exit[stay])
    recorded = pd.DataFrame(
        {
            "row": np.arange(age.size),
            "age": np.minimum(age, end),
            "event": event.astype(int),
            "x": risk_set.static["x"][stay],
        }
    )
    single = sk.risk_set_from_rows(recorded, loan="row", age="age", event="event", static=["x"])
    again = fit_hazard(
        make_spec({"age": "spline", "knots": tuple(spline.knots[1:-1]), "until": end}, {"loan": "x"}), single
    )
    np.testing.assert_allclose(again.params, fit.params, rtol=1e-7)
    assert again.llf == pytest.approx(fit.llf, rel=1e-12)
    far = fit.cell_part(np.array([end, end + 1, 500]), np.empty((3, 0)), ()).z
    assert len(set(far)) == 1


def test_loans_without_events_far_out_do_not_steer_the_projection() -> None:
    """Whatever the knots, the level projected at high ages is what was seen past the last knot."""
    rng = np.random.default_rng(9)
    risk_set = lifetimes("loglogistic", 2.5, 14.0, n=3000, end=80, rng=rng)
    age = np.arange(1, 81)
    far = []
    for knots in (3, 4, 5, 6, 7):
        fit = fit_hazard(make_spec({"age": "spline", "knots": knots}), risk_set)
        far.append(fit.cell_part(age, np.empty((80, 0)), ()).z[-1])
    assert np.ptp(far) < 0.5
