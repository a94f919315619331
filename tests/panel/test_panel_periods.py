"""Periods as dates, labels and counters, in months and quarters, from text and from typed columns."""

from __future__ import annotations

import datetime as dt
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import Frequency, parse_period
from stresskit.panel.cells import make_labels
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from stresskit.panel.source import workspace
from tests.panel.worlds import background, finding, of_loan, run, spells_study, stays, study

REFERENCE = run([])


def _with(convert: Any) -> LoanData:
    frame = pd.DataFrame(background())
    for column in ("month", "opened", "matures"):
        frame[column] = convert(frame[column])
    return prepare_loans(study(), base=Path("."), frame=frame)


CONVERSIONS = {
    "dates as text": lambda s: s + "-28",
    "timestamps as text": lambda s: s + "-01T12:00:00",
    "compact": lambda s: s.str.replace("-", ""),
    "numbers": lambda s: s.str.replace("-", "").astype(int),
    "floats": lambda s: s.str.replace("-", "").astype(float),
    "datetime64": lambda s: pd.to_datetime(s + "-30", errors="coerce").fillna(pd.to_datetime(s + "-01")),
    "with zone": lambda s: pd.to_datetime(s + "-01").dt.tz_localize("Asia/Tokyo"),
    "arrow with zone": lambda s: (
        pd.to_datetime(s + "-01")
        .dt.tz_localize("Asia/Tokyo")
        .astype(pd.ArrowDtype(pa.timestamp("us", tz="Asia/Tokyo")))
    ),
    "period dtype": lambda s: pd.PeriodIndex(s, freq="M").to_series(index=s.index),
    "python dates": lambda s: s.map(lambda t: dt.date.fromisoformat(t + "-15")),
    "categorical": lambda s: s.astype("category"),
    "string dtype": lambda s: s.astype("string"),
}


@pytest.mark.parametrize("name", CONVERSIONS)
def test_the_same_month_however_written(name: str) -> None:
    data = _with(CONVERSIONS[name])
    assert stays(data.risk_set) == stays(REFERENCE.risk_set)
    assert data.portfolio.remaining.tolist() == REFERENCE.portfolio.remaining.tolist()
    assert data.findings == ()


def test_quarter_labels_and_months_in_a_quarterly_study() -> None:
    rows = [
        {
            "id": "a",
            "month": q,
            "state": s,
            "opened": "2019-02-11",
            "matures": "2021 Q3",
            "owed": 1,
            "interest": 0.05,
        }
        for q, s in (("2019Q1", "C"), ("2019 Q2", "C"), ("2019-08", "C"), ("2019-12-31", "D"))
    ]
    frame = pd.DataFrame(rows)
    data = prepare_loans(study(frequency="quarter", as_of="2020Q2"), base=Path("."), frame=frame)
    assert stays(data.risk_set) == [("a", 2019 * 4 - 1, 0, 4, 1)]


def test_a_term_in_months_in_a_quarterly_study() -> None:
    rows = [
        {
            "id": i,
            "opened": o,
            "term": t,
            "lent": 1.0,
            "interest": 0.05,
            "state": s,
            "failed": f,
            "repaid": None,
        }
        for i, o, t, s, f in (
            ("a", "2020-01-31", 7, "C", None),
            ("b", "2020-03-01", 7, "C", None),
            ("c", "2020Q1", 3, "D", "2020Q2"),
        )
    ]
    data = prepare_loans(
        spells_study(frequency="quarter", as_of="2020Q2"), base=Path("."), frame=pd.DataFrame(rows)
    )
    assert data.portfolio.remaining.tolist() == [1, 2]  # a ends 2020-08, b 2020-10


@pytest.mark.parametrize(("frequency", "as_of", "starts", "origin"), [
    ("month", "2000-12", "2000-04", 2000 * 12 + 3 - 1 + 4),
    ("quarter", "2001Q4", "2000Q2", 2000 * 4 + 1 - 1 + 4),
    ("quarter", "2001Q4", "2000-05", 2000 * 4 + 1 - 1 + 4),
    ("month", "2000-12", "2000Q1", 2000 * 12 + 2 - 1 + 4),
])  # fmt: skip
def test_counters(frequency: str, as_of: str, starts: str, origin: int) -> None:
    """Counter 1 is the period of counter_starts; the loan opens in counter 5 and fails in counter 7."""
    rows = [
        {"id": "a", "month": t, "state": s, "opened": 5, "matures": 99, "owed": 1.0, "interest": 0.05}
        for t, s in ((5, "C"), (6, "C"), (7, "D"))
    ]
    rows += [row | {"id": "b", "month": str(row["month"]), "opened": "-2", "state": "C"} for row in rows]
    data = prepare_loans(
        study(frequency=frequency, as_of=as_of, loans={"counter_starts": starts}),
        base=Path("."),
        frame=pd.DataFrame(rows),
    )
    assert stays(data.risk_set) == [("a", origin, 0, 3, 1), ("b", origin - 7, 8, 10, 0)]


def test_counters_without_a_start_are_not_guessed() -> None:
    rows = [
        {"id": "a", "month": t, "state": s, "opened": 1, "matures": 99, "owed": 1.0, "interest": 0.05}
        for t, s in ((1, "C"), (2, "D"))
    ]
    data = run(rows)
    assert finding(data, "unreadable_period").count == 2
    assert of_loan(data, "a") == []
    assert "'1'" in finding(data, "unreadable_period").message


def test_study_periods_that_cannot_be_read() -> None:
    """A study checked by its text cannot hold these; one put together in Python can."""
    for place, changed in (
        ("as_of", study().model_copy(update={"as_of": "2020-13"})),
        ("loans.observed_until", study().model_copy(update={"loans": study().loans.model_copy(update={"observed_until": "soon"})})),
    ):  # fmt: skip
        with pytest.raises(TextError, match=f"^{place}: "):
            prepare_loans(changed, base=Path("."), frame=pd.DataFrame(background()))


@settings(deadline=None, max_examples=15)  # each example opens a database
@given(st.lists(st.dates(dt.date(1900, 1, 1), dt.date(2200, 12, 31)), min_size=1, max_size=60))
def test_text_and_typed_dates_agree(days: list[dt.date]) -> None:
    """The text route (a lookup made in Python) against numpy's own calendar."""
    labels = sorted({day.isoformat() for day in days})
    with workspace("200MB") as work:
        bad = make_labels(work.connection, "labels", labels, calendar=Frequency.MONTH, counter_month=None)
        found = dict(work.connection.execute("SELECT label, m FROM labels").fetchall())
        typed = dict(
            work.connection.execute(
                "SELECT label, year(label::DATE) * 12 + month(label::DATE) - 1 FROM labels"
            ).fetchall()
        )
    assert bad == frozenset()
    months = np.array(labels, dtype="datetime64[M]").astype(int) + 1970 * 12
    assert [found[label] for label in labels] == months.tolist()
    assert found == typed


ZONES = ["Asia/Tokyo", "America/New_York", "UTC", "+09:00", "-05:30"]


def _zoned(zone: str, hour: str) -> pd.DataFrame:
    """Every time lies within hours of a month's turn, so that another clock gives another month."""
    frame = pd.DataFrame(background())
    for column in ("month", "opened", "matures"):
        frame[column] = pd.to_datetime(frame[column] + "-01 " + hour).dt.tz_localize(zone)
    return frame


@pytest.mark.parametrize("zone", ZONES)
@pytest.mark.parametrize("route", ["frame", "csv", "parquet", "two parquet files"])
def test_times_with_a_zone_stand_on_their_own_clock(tmp_path: Path, zone: str, route: str) -> None:
    frame = _zoned(zone, "00:30")
    if route == "frame":
        data = prepare_loans(study(), base=Path("."), frame=frame)
    elif route == "csv":
        frame.to_csv(tmp_path / "l.csv", index=False)
        data = prepare_loans(study(loans={"file": "l.csv"}), base=tmp_path)
    else:
        cut = 4 if route.startswith("two") else len(frame)
        frame.iloc[:cut].to_parquet(tmp_path / "a.parquet")
        if cut < len(frame):
            _zoned("Pacific/Auckland", "00:30").iloc[cut:].to_parquet(tmp_path / "b.parquet")
        data = prepare_loans(study(loans={"file": "*.parquet"}), base=tmp_path)
    assert stays(data.risk_set) == stays(REFERENCE.risk_set)
    assert data.portfolio.remaining.tolist() == REFERENCE.portfolio.remaining.tolist()


NOWHERE = """
import sys
from pathlib import Path
from stresskit.panel.prepare import prepare_loans
from tests.panel.worlds import stays, study
print(stays(prepare_loans(study(loans={"file": "l.parquet"}), base=Path(sys.argv[1])).risk_set))
"""


@pytest.mark.parametrize("machine", ["America/New_York", "Asia/Tokyo"])
def test_parquet_that_names_no_zone_is_in_utc_on_every_machine(tmp_path: Path, machine: str) -> None:
    table = pa.Table.from_pandas(_zoned("UTC", "03:00"), preserve_index=False)
    pq.write_table(table, tmp_path / "l.parquet", store_schema=False)
    done = subprocess.run(
        [sys.executable, "-c", NOWHERE, str(tmp_path)], env=os.environ | {"TZ": machine}, capture_output=True,
        text=True, cwd=Path(__file__).parents[2], check=True,
    )  # fmt: skip
    assert done.stdout.strip() == str(stays(REFERENCE.risk_set))


@pytest.mark.parametrize("text", ["46022", "20251", "4602", "2025-1-", "2025--1", "20251231"])
def test_numbers_that_are_no_months(text: str) -> None:
    with pytest.raises(ValueError, match="is not a period"):
        parse_period(text, Frequency.MONTH)


@pytest.mark.parametrize(
    "text", ["2025-1", "2025/1", "2025 1", "2025M1", "2025-M1", "202501", "2025-01", "2025M01"]
)
def test_months_with_one_digit_and_a_separator(text: str) -> None:
    assert parse_period(text, Frequency.MONTH) == 2025 * 12


@pytest.mark.parametrize("write", ["01/2020", "2020/01/15", "01/15/2020", "20200115", "19.5"])
def test_shapes_that_are_no_periods_are_shown_when_nothing_is_left(write: str) -> None:
    frame = pd.DataFrame(background()).assign(month=write)
    with pytest.raises(DataError) as caught:
        prepare_loans(study(), base=Path("."), frame=frame)
    text = str(caught.value)
    assert [p.code for p in caught.value.problems] == ["no_rows_at_risk", "unreadable_period"]
    assert "no row is left" in text
    assert "unreadable_period 9" in text
    assert "above" not in text
    assert caught.value.problems[1].first == ("bg-alive",) * 5
    assert f"Not understood: {write!r}. Write periods as 2025-12, 2025Q4 or 2025-12-31" in text


def _quarterly(frame: pd.DataFrame, as_of: str = "2020Q2") -> LoanData:
    return prepare_loans(study(frequency="quarter", as_of=as_of), base=Path("."), frame=frame)


@pytest.mark.parametrize("typed", [False, True])
def test_a_monthly_panel_in_a_quarterly_study_is_told(typed: bool) -> None:
    frame = pd.DataFrame(background()).assign(owed=range(9))
    frame = frame.assign(month=pd.to_datetime(frame["month"])) if typed else frame
    with pytest.raises(DataError) as caught:
        _quarterly(frame)
    (problem,) = [p for p in caught.value.problems if p.code == "several_rows_per_quarter"]
    assert (problem.count, problem.first[0]) == (9, "bg-alive @ 2020Q1")
    assert "set frequency: month" in str(caught.value)


def test_loans_that_report_in_different_months_of_a_quarter_are_no_monthly_panel() -> None:
    rows = [
        {
            "id": i,
            "month": m,
            "state": s,
            "opened": "2020-01",
            "matures": "2025-01",
            "owed": 1.0,
            "interest": 0.05,
        }
        for i, m, s in (
            ("a", "2020-01", "C"),
            ("a", "2020-04", "D"),
            ("b", "2020-03", "C"),
            ("b", "2020-06", "C"),
        )
    ]
    assert len(stays(_quarterly(pd.DataFrame(rows)).risk_set)) == 2
