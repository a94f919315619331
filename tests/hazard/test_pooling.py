"""Levels without events that a study lets the fit join: what is joined, what is kept, what is said."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import DataError, NumericError
from stresskit.core.values import RiskSet
from stresskit.hazard.fit import fit_hazard
from tests.hazard.hazard_cases import make_spec

GRADE: dict[str, Any] = {"loan": "grade", "as": "category", "reference": "a"}


def _frame(n: int = 800, seed: int = 0) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    return pd.DataFrame(
        {
            "loan": np.arange(n),
            "age": rng.integers(1, 9, n),
            "x": rng.normal(size=n),
            "grade": rng.choice(["a", "b", "c", "d"], n),
            "region": rng.choice(["north", "south"], n),
            "event": (rng.random(n) < 0.25).astype(int),
        }
    )


def _risk_set(frame: pd.DataFrame) -> RiskSet:
    return sk.risk_set_from_rows(
        frame, loan="loan", age="age", event="event", static=["x", "grade", "region"]
    )


def _quiet(frame: pd.DataFrame, grades: str = "", ages: tuple[int, ...] = ()) -> pd.DataFrame:
    out = frame.copy()
    out.loc[out["grade"].isin(list(grades)) | out["age"].isin(ages), "event"] = 0
    return out


def _counts(frame: pd.DataFrame, column: str, value: Any) -> str:
    part = frame[frame[column] == value]
    return f"{len(part):,} rows at risk, {part['event'].sum():,} events"


def _pool(frame: pd.DataFrame, *terms: dict[str, Any], **more: Any) -> sk.HazardFit:
    return fit_hazard(make_spec(*terms, when_separated="pool", **more), _risk_set(frame))


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_a_level_without_events_counts_as_the_reference(link: str) -> None:
    frame = _quiet(_frame(), "bd")
    fit = _pool(frame, {"loan": "x"}, GRADE, link=link)
    assert list(fit.params.index) == ["intercept", "x", "grade[c]"]
    recoded = frame.assign(grade=frame["grade"].replace({"b": "a", "d": "a"}))
    direct = fit_hazard(make_spec({"loan": "x"}, GRADE, link=link), _risk_set(recoded))
    np.testing.assert_array_equal(fit.params, direct.params)
    np.testing.assert_array_equal(fit.cov_params(), direct.cov_params())
    cases = pd.DataFrame({"x": 0.3, "grade": ["a", "b", "c", "d"]})
    p = fit.predict(cases).tolist()
    assert p[0] == p[1] == p[3] != p[2]


def test_it_is_said_and_saved() -> None:
    frame = _quiet(_frame(), "bd")
    fit = _pool(frame, {"loan": "x"}, GRADE)
    assert fit.estimation.pooled == tuple(
        f"grade[{g}] ({_counts(frame, 'grade', g)}) with grade[a]" for g in "bd"
    )
    assert fit.estimation.separated[0] == f"grade[b]: {(frame['grade'] == 'b').sum()} rows at risk, no events"
    text = " ".join(fit.summary().split())
    assert (
        f"Joined, because nothing tells them apart: grade[b] ({_counts(frame, 'grade', 'b')}) with grade[a]"
        in text
    )
    assert "grade: against 'a', with which 'b', 'd' count" in text
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.to_json() == fit.to_json()
    assert again.design == fit.design
    cases = pd.DataFrame({"x": 0.3, "grade": ["a", "b", "c", "d"]})
    np.testing.assert_array_equal(again.predict(cases), fit.predict(cases))


def test_a_level_never_seen_stays_an_error() -> None:
    fit = _pool(_quiet(_frame(), "b"), {"loan": "x"}, GRADE)
    with pytest.raises(
        DataError, match=r"levels not seen at estimation: 'e'.*Known levels: 'a', 'c', 'd', 'b'"
    ):
        fit.predict(pd.DataFrame({"x": [0.0, 0.0], "grade": ["b", "e"]}))


def test_a_level_of_nothing_but_events_is_joined_too() -> None:
    frame = _frame()
    frame.loc[frame["grade"] == "c", "event"] = 1
    fit = _pool(frame, GRADE)
    assert fit.estimation.pooled == (f"grade[c] ({_counts(frame, 'grade', 'c')}) with grade[a]",)


def test_a_reference_without_events_gives_way_to_the_largest_level_with_some() -> None:
    frame = _quiet(_frame(), "ad")
    fit = _pool(frame, GRADE)
    size = frame["grade"].value_counts()
    first = "b" if size["b"] >= size["c"] else "c"
    assert list(fit.params.index) == ["intercept", f"grade[{'c' if first == 'b' else 'b'}]"]
    assert fit.estimation.pooled[-1].endswith(
        f"with grade[{first}], the reference from now on in place of grade[a]"
    )


def test_nothing_is_joined_where_nothing_needs_to_be() -> None:
    frame = _frame()
    one = _pool(frame, GRADE, {"age": "steps"})
    other = fit_hazard(make_spec(GRADE, {"age": "steps"}), _risk_set(frame))
    np.testing.assert_array_equal(one.params, other.params)
    assert one.estimation.plain
    assert one.design == other.design


@pytest.mark.parametrize("grades", ["bcd", "abc"])
def test_a_category_with_one_level_left_is_refused(grades: str) -> None:
    with pytest.raises(
        NumericError, match=r"'grade': every level but '[ad]' is without events.*Leave the term out"
    ):
        _pool(_quiet(_frame(), grades), {"loan": "x"}, GRADE)


@pytest.mark.parametrize(
    ("ages", "labels"),
    [
        ((3,), ["age[1]", "age[2]", "age[3-4]", "age[5]", "age[6]", "age[7]", "age[8]"]),
        ((3, 4), ["age[1]", "age[2]", "age[3-5]", "age[6]", "age[7]", "age[8]"]),
        ((1, 8), ["age[1-2]", "age[3]", "age[4]", "age[5]", "age[6]", "age[7-8]"]),
        ((7, 8), ["age[1]", "age[2]", "age[3]", "age[4]", "age[5]", "age[6-8]"]),
    ],
)
def test_bands_without_events_join_the_next_older_one_and_the_last_the_one_before(
    ages: tuple[int, ...], labels: list[str]
) -> None:
    frame = _quiet(_frame(), ages=ages)
    fit = _pool(frame, {"age": "steps", "support": 1}, {"loan": "x"})
    (term,) = (t for t in fit.design.terms if t.name == "age")
    assert list(getattr(term, "labels")) == labels
    last = [int(label.rstrip("]").split("[")[1].split("-")[-1]) for label in labels]
    direct = fit_hazard(
        make_spec({"age": "steps", "bands": tuple(last[:-1]), "support": 1}, {"loan": "x"}), _risk_set(frame)
    )
    np.testing.assert_allclose(fit.params, direct.params, rtol=1e-12)
    assert sk.HazardFit.from_json(fit.to_json()).design == fit.design


def test_stated_bands_keep_their_open_end() -> None:
    fit = _pool(
        _quiet(_frame(), ages=(6, 7, 8)), {"age": "steps", "bands": (2, 5), "support": 1}, {"loan": "x"}
    )
    (term,) = (t for t in fit.design.terms if t.name == "age")
    assert getattr(term, "labels") == ("age[1-2]", "age[3+]")


def test_bands_that_all_go_are_refused() -> None:
    with pytest.raises(NumericError, match="leaves one band"):
        _pool(
            _quiet(_frame(), ages=(4, 5, 6, 7, 8)),
            {"age": "steps", "bands": (3,), "support": 1},
            {"loan": "x"},
        )


def test_a_pair_of_levels_is_not_pooled_but_refused() -> None:
    frame = _frame()
    frame.loc[(frame["grade"] == "b") & (frame["region"] == "south"), "event"] = 0
    terms = (GRADE, {"loan": "region", "as": "category"}, {"interaction": ("grade", "region")})
    with pytest.raises(NumericError, match=r"grade\[b\]:region\[south\]"):
        _pool(frame, *terms)


def test_a_column_that_moves_along_a_stay() -> None:
    rng = np.random.default_rng(3)
    length = rng.integers(1, 8, 300)
    rows = pd.DataFrame(
        {
            "loan": np.repeat(np.arange(300), length),
            "age": np.concatenate([np.arange(1, m + 1) for m in length]),
        }
    )
    rows["state"] = rng.choice(["calm", "late", "rare"], len(rows), p=[0.6, 0.3, 0.1])
    last = rows["age"].to_numpy() == length[rows["loan"]]
    rows["event"] = (last & (rng.random(len(rows)) < 0.5) & (rows["state"] != "rare")).astype(int)
    risk_set = sk.risk_set_from_rows(rows, loan="loan", age="age", event="event", moving=["state"])
    term = {"loan": "state", "as": "category"}
    with pytest.raises(NumericError, match=r"state\[rare\]"):
        fit_hazard(make_spec(term), risk_set)
    fit = fit_hazard(make_spec(term, when_separated="pool"), risk_set)
    assert fit.estimation.pooled == (
        f"state[rare] ({(rows['state'] == 'rare').sum()} rows at risk, 0 events) with state[calm]",
    )
    merged = rows.assign(state=rows["state"].replace({"rare": "calm"}))
    direct = fit_hazard(
        make_spec(term),
        sk.risk_set_from_rows(merged, loan="loan", age="age", event="event", moving=["state"]),
    )
    np.testing.assert_array_equal(fit.params, direct.params)


def test_order_of_loans_does_not_matter() -> None:
    risk_set = _risk_set(_quiet(_frame(), "b"))
    order = np.random.default_rng(0).permutation(risk_set.n_loans)
    back = np.argsort(order)
    other = dataclasses.replace(
        risk_set,
        loan_ids=risk_set.loan_ids[order],
        static={k: v[order] for k, v in risk_set.static.items()},
        stay_loan=back[risk_set.stay_loan],
    )
    spec = make_spec(GRADE, {"loan": "x"}, when_separated="pool")
    assert fit_hazard(spec, risk_set).to_json() == fit_hazard(spec, other).to_json()


def test_without_an_intercept() -> None:
    frame = _quiet(_frame(), "b")
    fit = _pool(frame, GRADE, intercept=False)
    assert list(fit.params.index) == ["grade[a]", "grade[c]", "grade[d]"]
