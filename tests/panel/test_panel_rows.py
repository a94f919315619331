"""risk_set_from_rows: person-period rows of published data and of our own, and rows that cannot be a risk set."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, UsageError
from stresskit.core.values import RiskSet
from stresskit.panel.rows import risk_set_from_rows
from tests.panel.worlds import stays

FRAME = pd.DataFrame(
    {
        "id": [2, 1, 1, 2, 10, 1],
        "t": [1, 2, 1, 2, 4, 3],
        "y": [0, 0, 0, 1, 0, 2],
        "x": [5.0, 7.0, 7.0, 5.0, 1.0, 7.0],
        "kind": list("abbacb"),
        "dpd": [0, 1, 0, 3, 9, 2],
    }
)


def build(frame: pd.DataFrame = FRAME, **changes: Any) -> RiskSet:
    named: dict[str, Any] = {"loan": "id", "age": "t", "event": "y", "causes": ("default", "payoff")}
    return risk_set_from_rows(frame, **(named | changes))


def test_rows_become_stays_in_order_of_the_identifiers_text() -> None:
    risk = build(static=["x", "kind"], moving=["dpd"])
    assert list(risk.loan_ids) == ["1", "10", "2"]
    assert stays(risk) == [("1", 0, 0, 3, 2), ("10", 0, 3, 4, 0), ("2", 0, 0, 2, 1)]
    assert risk.static["x"].tolist() == [7.0, 1.0, 5.0]
    assert list(risk.static["kind"]) == ["b", "c", "a"]
    assert risk.moving["dpd"].tolist() == [0.0, 1.0, 2.0, 9.0, 0.0, 3.0]


def test_order_of_rows_does_not_matter() -> None:
    one, other = build(moving=["dpd"]), build(FRAME.sample(frac=1, random_state=3), moving=["dpd"])
    for name in ("stay_loan", "stay_entry", "stay_exit", "stay_cause"):
        np.testing.assert_array_equal(getattr(one, name), getattr(other, name))
    np.testing.assert_array_equal(one.moving["dpd"], other.moving["dpd"])


@pytest.mark.parametrize(
    "events",
    [
        ["", None, "0", "default", "", "payoff"],
        ["0", "0", "0", "1", "0", "2"],
        [0.0, 0.0, 0.0, 1.0, 0.0, 2.0],
    ],
)
def test_events_by_number_or_name(events: list[Any]) -> None:
    assert stays(build(FRAME.assign(y=events))) == stays(build())


def test_booleans_are_events() -> None:
    risk = build(FRAME.assign(y=[False, False, False, True, False, False]), causes=("default",))
    assert risk.events("default") == 1


def test_periods_give_origins() -> None:
    months = ["2020-01", "2020-02", "2020-01", "2020-02", "2020-04", "2020-03"]
    risk = build(FRAME.assign(p=months), period="p")
    assert set(risk.stay_origin) == {2019 * 12 + 11}
    by_number = build(FRAME.assign(p=[int(m[:4]) * 12 + int(m[5:]) - 1 for m in months]), period="p")
    np.testing.assert_array_equal(risk.stay_origin, by_number.stay_origin)
    quarters = build(
        FRAME.assign(p=["2020Q1", "2020Q2", "2020Q1", "2020Q2", "2020Q4", "2020Q3"]),
        period="p",
        frequency="quarter",
    )
    assert set(quarters.stay_origin) == {2019 * 4 + 3}


def test_holes_and_weights_split_stays() -> None:
    frame = pd.DataFrame({"id": ["a"] * 5, "t": [1, 2, 4, 5, 6], "y": [0] * 5, "w": [1, 1, 1, 1, 2.5]})
    risk = build(frame, weight="w")
    assert [s[2:4] for s in stays(risk)] == [(0, 2), (3, 5), (5, 6)]
    assert risk.weight.tolist() == [1.0, 1.0, 2.5]


BAD: dict[str, tuple[dict[str, Any], str]] = {
    "no loan": ({"id": [2, None, 1, 2, 10, 1]}, "missing_loan"),
    "age zero": ({"t": [0, 2, 1, 2, 4, 3]}, "age_not_whole"),
    "half an age": ({"t": [1, 2, 1.5, 2, 4, 3]}, "age_not_whole"),
    "text age": ({"t": ["1", "2", "x", "2", "4", "3"]}, "age_not_whole"),
    "age twice": ({"t": [1, 2, 2, 2, 4, 3]}, "age_twice"),
    "event 3": ({"y": [0, 0, 0, 3, 0, 2]}, "unknown_event"),
    "event missing": ({"y": [0, np.nan, 0, 1, 0, 2]}, "unknown_event"),
    "event name": ({"y": ["", "", "", "cured", "", ""]}, "unknown_event"),
    "after the exit": ({"y": [1, 0, 0, 1, 0, 2]}, "rows_after_exit"),
    "static moves": ({"x": [5.0, 7.0, 7.5, 5.0, 1.0, 7.0]}, "static_changes"),
    "static missing": ({"x": [5.0, 7.0, 7.0, 5.0, np.nan, 7.0]}, "missing_value"),
    "weight zero": ({"w": [1, 1, 1, 1, 0, 1]}, "weight_not_positive"),
    "weight missing": ({"w": [1, 1, 1, 1, np.nan, 1]}, "weight_not_positive"),
    "period text": (
        {"p": ["2020-01", "soon", "2020-01", "2020-02", "2020-04", "2020-03"]},
        "period_unreadable",
    ),
    "origin moves": (
        {"p": ["2020-01", "2020-05", "2020-01", "2020-02", "2020-04", "2020-03"]},
        "origin_moves",
    ),
}


@pytest.mark.parametrize("name", BAD)
def test_rows_that_cannot_be_a_risk_set(name: str) -> None:
    columns, code = BAD[name]
    frame = FRAME.assign(w=1.0, p=["2020-01", "2020-02", "2020-01", "2020-02", "2020-04", "2020-03"]).assign(
        **columns
    )
    with pytest.raises(DataError) as caught:
        build(frame, static=["x"], weight="w", period="p")
    found = {p.code: p for p in caught.value.problems}
    assert code in found
    assert found[code].first


def test_all_problems_at_once() -> None:
    with pytest.raises(DataError) as caught:
        build(FRAME.assign(y=[9, 0, 0, 1, 0, 2], x=[np.nan, 7.0, 7.5, 5.0, 1.0, 7.0]), static=["x"])
    assert {p.code for p in caught.value.problems} == {"unknown_event", "missing_value", "static_changes"}


def test_wrong_calls() -> None:
    with pytest.raises(UsageError, match="no column 'age'; the frame has id, t, y"):
        build(age="age")
    with pytest.raises(DataError, match="no rows"):
        build(FRAME.iloc[:0])


CURVES = Path(__file__).parents[1] / "data" / "curves"


def test_published_trial_as_rows() -> None:
    """6-MP trial (Freireich et al. 1963): 42 patients, 30 relapses, 541 patient-weeks."""
    trial = pd.read_csv(CURVES / "gehan.csv")
    rows = [
        {"id": i, "week": week, "relapse": int(week == time and event == 1), "arm": arm}
        for i, (time, event, arm) in enumerate(
            zip(trial["time"], trial["event"], trial["treat"], strict=True)
        )
        for week in range(1, time + 1)
    ]
    risk = risk_set_from_rows(pd.DataFrame(rows), loan="id", age="week", event="relapse", static=["arm"])
    assert (risk.n_loans, risk.events("default"), risk.n_rows) == (42, 30, 541)
    assert sorted(risk.static["arm"]).count("6-MP") == 21


def test_published_late_entry_as_rows() -> None:
    """Retirement house (Hyde 1980): at risk in (entry, exit], ages in months."""
    house = pd.read_csv(CURVES / "channing.csv").query("exit > ageentry")
    rows = [
        {"id": person.obs, "month": age, "death": int(age == person.exit and person.death == 1)}
        for person in house.itertuples()
        for age in range(person.ageentry + 1, person.exit + 1)
    ]
    risk = risk_set_from_rows(pd.DataFrame(rows), loan="id", age="month", event="death")
    found = {s[0]: s[2:] for s in stays(risk)}
    assert found == {str(p.obs): (p.ageentry, p.exit, p.death) for p in house.itertuples()}
    assert risk.events("default") == house["death"].sum() > 170
