"""A column of counts: what it may hold, where it goes, and that the account closes."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from tests.panel.worlds import (
    PANEL_COLUMNS,
    SPELL_COLUMNS,
    assert_closes,
    background,
    codes,
    finding,
    left_out,
    loan,
    not_projected,
    spells_study,
    study,
    used_rows,
)

COLUMNS = PANEL_COLUMNS | {"count": "n"}


def run(rows: list[dict[str, Any]], book: pd.DataFrame | None = None, **loans: Any) -> LoanData:
    """prepare_loans on a background of lines of 2 and on some rows."""
    given = study(loans={"columns": COLUMNS} | loans)
    return prepare_loans(given, base=Path("."), frame=pd.DataFrame([*background(n=2), *rows]), book=book)


def test_a_count_is_the_weight_of_the_line_and_no_column_of_its_loans() -> None:
    data = run(loan("a", "2020-01", "CCCCCC", n=2.5) + loan("b", "2020-03", "CC.C", n=4))
    risk = data.risk_set
    assert dict(zip(risk.loan_ids[risk.stay_loan], risk.weight, strict=True)) == {
        "a": 2.5, "b": 4.0, "bg-alive": 2.0, "bg-default": 2.0,
    }  # fmt: skip
    assert risk.weight.size == 4  # b comes back in its last row, which is no row at risk
    assert (risk.count, risk.loans_alike, risk.weight_of("default")) == ("n", 10.5, 2.0)
    assert "n" not in risk.static
    book = data.portfolio
    assert book.count is not None
    assert dict(zip(book.loan_ids, book.count, strict=True)) == {"a": 2.5, "b": 4.0, "bg-alive": 2.0}
    assert "n" not in book.static
    assert data.not_projected.set_index("loan")["count"].to_dict() == {"bg-default": 2.0}
    assert data.defaulted is not None
    assert data.defaulted.loans.counts.tolist() == [2.0]
    told = finding(data, "loans_alike")
    assert (told.severity, told.policy) == ("note", "keep")
    assert "3 lines of the book stand for 8.5 loans, and 4 lines of the history for 10.5" in told.message
    assert_closes(data)


def test_without_the_column_a_line_is_a_loan() -> None:
    frame = pd.DataFrame(background(n=2))
    data = prepare_loans(study(), base=Path("."), frame=frame)
    assert data.risk_set.count == ""
    assert (data.risk_set.weight == 1.0).all()
    assert data.portfolio.count is None
    assert list(data.not_projected) == ["loan", "reason", "balance"]
    assert "loans_alike" not in codes(data)


@pytest.mark.parametrize("bad", [None, 0, -3, "many", float("inf")])
def test_a_count_that_is_none_stops_the_run_with_its_line(bad: object) -> None:
    rows = loan("a", "2020-01", "CCC", n=5)
    rows[1]["n"] = bad
    with pytest.raises(DataError) as caught:
        run(rows)
    told = {p.code: p for p in caught.value.problems}
    assert told.keys() == {"count_not_positive"}
    problem = told["count_not_positive"]
    assert (problem.count, problem.first) == (1, ("a",))
    assert "(column 'n')" in problem.message
    assert "loans.rules: {count_not_positive: leave_out}" in problem.remedy
    data = run(rows, rules={"count_not_positive": "leave_out"})
    assert left_out(data) == {"count_not_positive: n": 3}
    assert not_projected(data)["a"] == "count_not_positive: n"
    assert "a" not in data.risk_set.loan_ids
    assert ("unreadable_value" in codes(data)) == isinstance(bad, str | float)
    assert_closes(data)


def test_a_count_that_changes_along_a_line_stops_the_run() -> None:
    rows = loan("a", "2020-01", "CCC", n=5)
    rows[2]["n"] = 4
    with pytest.raises(DataError, match="changes between its rows") as caught:
        run(rows)
    (problem,) = caught.value.problems
    assert (problem.code, problem.count, problem.first) == ("count_changes", 1, ("a",))
    assert "a line of their own" in problem.remedy
    data = run(rows, rules={"count_changes": "leave_out"})
    assert left_out(data) == {"count_changes: n": 3}
    assert_closes(data)
    with pytest.raises(TextError, match="'keep' is not possible; expected reject or leave_out"):
        run(rows, rules={"count_changes": "keep"})


def test_a_count_is_not_a_column_that_moves() -> None:
    with pytest.raises(TextError, match=r"loans.columns.count: column 'n' is named under loans.lagged too"):
        run([], lagged=["n"])


def test_a_count_that_a_hazard_reads_stays_a_column() -> None:
    frame = pd.DataFrame([*background(n=2), *loan("a", "2020-01", "CCCCCC", n=3)])
    hazards = {"default": {"terms": [{"age": "linear"}, {"loan": "n"}]}}
    given = study(loans={"columns": COLUMNS}, hazards=hazards)
    data = prepare_loans(given, base=Path("."), frame=frame)
    assert data.risk_set.static["n"].tolist() == [3.0, 2.0, 2.0]
    assert data.portfolio.static["n"].tolist() == [3.0, 2.0]


def test_a_category_seen_in_one_line_of_many_loans_is_not_seen_once() -> None:
    hazards = {"default": {"terms": [{"age": "linear"}, {"loan": "kind", "as": "category"}]}}
    for n, rare in ((1, True), (2, False)):
        rows = background(n=2, kind="x") + loan("a", "2020-01", "CC", n=n, kind="y")
        given = study(loans={"columns": COLUMNS}, hazards=hazards)
        data = prepare_loans(given, base=Path("."), frame=pd.DataFrame(rows))
        assert ("category_once" in codes(data)) == rare


def test_events_that_agree_are_counted_by_loans() -> None:
    """Two lines with a status that occurs with the event only: 2 events by lines, 6 by loans."""
    rows = [
        row
        for i in range(2)
        for row in loan(f"d{i}", "2020-01", "CCD", n=3)
    ]  # fmt: skip
    for row in rows:
        row["flag"] = "late" if row["state"] == "D" else "fine"
    calm = [r | {"flag": "fine"} for r in loan("a", "2020-01", "CCCCCC", n=9)]
    hazards = {"default": {"terms": [{"age": "linear"}, {"loan": "flag", "as": "category"}]}}
    frame = pd.DataFrame([*rows, *calm])
    with pytest.raises(DataError, match="give the event away"):
        given = study(loans={"columns": COLUMNS, "lagged": ["flag"]}, hazards=hazards)
        prepare_loans(given, base=Path("."), frame=frame)
    given = study(loans={"lagged": ["flag"]}, hazards=hazards)
    assert "look_ahead" not in codes(prepare_loans(given, base=Path("."), frame=frame))


def test_a_book_of_its_own_has_counts_too() -> None:
    book = pd.DataFrame(
        {
            "id": ["x", "y"],
            "opened": "2020-01",
            "matures": "2025-01",
            "owed": 100.0,
            "interest": 0.05,
            "n": [7, 1],
        }
    )
    data = run([], book=book)
    assert data.portfolio.counts.tolist() == [7.0, 1.0]
    with pytest.raises(DataError, match=r"no column 'n' \(loans.columns.count\)"):
        run([], book=book.drop(columns="n"))
    book["n"] = [7, 0]
    with pytest.raises(DataError, match="count_not_positive"):
        run([], book=book)
    data = run([], book=book, rules={"count_not_positive": "leave_out"})
    assert not_projected(data) == {"y": "count_not_positive"}
    assert data.portfolio.counts.tolist() == [7.0]


def test_spells_have_counts() -> None:
    line = {"opened": "2019-01", "term": 36, "lent": 100.0, "interest": 0.05, "repaid": None}
    rows = [
        {"id": "a", "state": "C", "failed": None, "n": 4, **line},
        {"id": "b", "state": "D", "failed": "2020-02", "n": 1, **line},
        {"id": "c", "state": "C", "failed": None, "n": -1, **line},
    ]
    columns = {"columns": SPELL_COLUMNS | {"count": "n"}}
    with pytest.raises(DataError, match="count_not_positive"):
        prepare_loans(spells_study(loans=columns), base=Path("."), frame=pd.DataFrame(rows))
    kind = spells_study(loans=columns | {"rules": {"count_not_positive": "leave_out"}})
    data = prepare_loans(kind, base=Path("."), frame=pd.DataFrame(rows))
    assert data.risk_set.weight.tolist() == [4.0, 1.0]
    assert data.portfolio.counts.tolist() == [4.0]
    assert used_rows(data) == 2
    assert data.not_projected.set_index("loan")["count"].fillna(0.0).to_dict() == {"b": 1.0, "c": 0.0}
    assert_closes(data)


def test_a_line_without_a_usable_row_is_counted_as_what_it_stands_for() -> None:
    rows = [r | {"opened": None} for r in loan("a", "2020-01", "CC", n=3)]
    left = run(rows).not_projected.set_index("loan")
    assert (left.loc["a", "reason"], left.loc["a", "count"]) == ("missing_origination", 3.0)
    line = {"term": 36, "lent": 100.0, "interest": 0.05, "repaid": None}
    spells = [
        {"id": "a", "opened": "2019-01", "state": "C", "failed": None, "n": 4, **line},
        {"id": "b", "opened": "2019-01", "state": "D", "failed": "2020-02", "n": 2, **line},
        {"id": "c", "opened": None, "state": "C", "failed": None, "n": 5, **line},
    ]
    kind = spells_study(loans={"columns": SPELL_COLUMNS | {"count": "n"}})
    data = prepare_loans(kind, base=Path("."), frame=pd.DataFrame(spells))
    left = data.not_projected.set_index("loan")
    assert left["count"].to_dict() == {"b": 2.0, "c": 5.0}
    assert left.loc["c", "reason"] == "missing_origination"
    assert_closes(data)
