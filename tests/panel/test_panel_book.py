"""The book: from the last rows of a panel, or from a file of its own; who is left out and why."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from tests.panel.worlds import PANEL_COLUMNS, background, codes, finding, loan, not_projected, run, study

KINDS: dict[str, Any] = {
    "hazards": {"default": {"terms": [{"age": "linear"}, {"loan": "kind", "as": "category"}]}}
}


def test_last_seen_takes_the_last_row() -> None:
    rows = loan("a", "2020-01", "CCCCCC", opened="2018-01", kind="x")
    for i, row in enumerate(rows):
        row |= {"owed": 500.0 - i, "interest": 0.01 * i, "matures": "2020-09" if i < 5 else "2021-06"}
    data = run(rows + loan("d", "2020-01", "CD", kind="x"), False, **KINDS)
    book = data.portfolio
    assert list(book.loan_ids) == ["a"]
    assert (book.age[0], book.remaining[0], book.balance[0], book.rate[0]) == (30, 12, 495.0, 0.05)
    assert list(book.static["kind"]) == ["x"]
    assert book.as_of == 2020 * 12 + 5


def test_every_reason_not_to_project() -> None:
    rows = loan("gone", "2020-01", "CCC") + loan("matured", "2020-01", "CCC", matures="2020-03")
    rows += loan("overdue", "2020-01", "CCCCCC", matures="2020-06") + loan("paid", "2020-01", "CP")
    rows += loan("no end", "2020-01", "CCCCCC", matures=None) + loan(
        "no rate", "2020-01", "CCCCCC", interest=None
    )
    rows += loan("no balance", "2020-01", "CCCCCC", owed=None) + loan(
        "negative", "2020-01", "CCCCCC", owed=-3.0
    )
    data = run(rows)
    assert not_projected(data) == {
        "bg-default": "defaulted", "gone": "not_seen_at_as_of", "matured": "matured", "overdue": "no_remaining_term",
        "paid": "paid_off", "no end": "missing_maturity", "no rate": "missing_rate",
        "no balance": "missing_balance", "negative": "negative_balance",
    }  # fmt: skip
    balance = data.not_projected.set_index("loan")["balance"]
    assert balance["bg-default"] == 100.0
    assert balance["gone"] == 100.0
    assert (balance[["matured", "paid"]] == 0.0).all()  # nothing is owed any more
    assert balance["overdue"] == 100.0
    assert balance["negative"] == -3.0
    assert pd.isna(balance["no balance"])


def test_moving_columns_stand_at_their_last_value() -> None:
    rows = loan("a", "2020-04", "CCC") + loan("d", "2020-01", "CDC")
    for i, row in enumerate(rows):
        row["score"] = i
    hazards = {"default": {"terms": [{"age": "linear"}, {"loan": "score"}]}}
    data = run(rows, False, hazards=hazards, loans={"varying": ["score"]})
    assert data.portfolio.static["score"].tolist() == [2.0]


def test_a_panel_without_balances_rolls_amounts() -> None:
    columns = {k: v for k, v in PANEL_COLUMNS.items() if k != "balance"} | {"amount": "lent"}
    rows = loan("a", "2020-01", "CCCCCC", lent=600.0, matures="2020-11", interest=0.0) + loan(
        "d", "2020-01", "CCD", lent=70.0
    )
    data = run(rows, False, loans={"columns": columns})
    assert data.portfolio.balance.tolist() == [300.0]  # 5 of 10 level payments made
    assert data.not_projected["balance"].iloc[0] == pytest.approx(70.0, rel=0.05)
    assert data.reconciliation.loc[0, "balance"] == 6 * 600.0 + 3 * 70.0


def book_row(name: str, **fields: Any) -> dict[str, Any]:
    return {
        "id": name,
        "opened": "2019-07",
        "matures": "2022-06",
        "owed": 50.0,
        "interest": 0.04,
        "kind": "x",
    } | fields


def with_book(rows: list[dict[str, Any]], rules: dict[str, str] | None = None) -> LoanData:
    history = pd.DataFrame(background(kind="x") + loan("other", "2020-01", "CC", kind="y"))
    return prepare_loans(
        study(loans={"rules": rules or {}}, **KINDS), base=Path("."), frame=history, book=pd.DataFrame(rows)
    )


def test_a_book_of_its_own() -> None:
    rows = [
        book_row("z"), book_row("new", opened="2020-07"), book_row("later", opened="2020-08"),
        book_row("over", matures="2020-06"), book_row("no opening", opened=None), book_row("bare", owed=None),
    ]  # fmt: skip
    data = with_book(rows)
    assert list(data.portfolio.loan_ids) == ["new", "z"]
    assert data.portfolio.age.tolist() == [0, 12]
    assert data.portfolio.remaining.tolist() == [24, 24]
    assert not_projected(data) == {
        "later": "not_yet_originated", "over": "no_remaining_term", "no opening": "missing_origination",
        "bare": "missing_balance",
    }  # fmt: skip
    assert data.risk_set.n_loans == 3


def test_duplicates_in_the_book() -> None:
    rows = [book_row("a"), book_row("a"), book_row("b"), book_row("b", owed=51.0), book_row("c")]
    data = with_book(rows)
    assert list(data.portfolio.loan_ids) == ["a", "c"]
    assert finding(data, "book_duplicate").count == 3
    assert sorted(data.not_projected["reason"]) == [
        "book_duplicate",
        "book_duplicate",
        "book_duplicate: copy",
    ]
    assert data.not_projected["balance"].sum() == 101.0  # the copy is no second loan
    with pytest.raises(DataError, match="book_duplicate"):
        with_book(rows, {"book_duplicate": "reject"})


def test_a_book_that_contradicts_the_history() -> None:
    rows = [book_row("bg-default"), book_row("bg-alive")]
    data = with_book(rows)
    assert finding(data, "book_contradicts_history").first == ("bg-default",)
    assert list(data.portfolio.loan_ids) == ["bg-alive", "bg-default"]
    left = with_book(rows, {"book_contradicts_history": "leave_out"})
    assert not_projected(left) == {"bg-default": "book_contradicts_history"}


def test_categories_that_no_hazard_can_know() -> None:
    rows = [book_row("a"), book_row("b", kind="unheard of"), book_row("c", kind=None)]
    data = with_book(rows)
    assert not_projected(data) == {"b": "category_not_in_history: kind", "c": "category_not_in_history: kind"}
    assert "unheard of" in finding(data, "category_not_in_history").message
    assert len(with_book(rows, {"category_not_in_history": "keep"}).portfolio.loan_ids) == 3


def test_book_file_and_its_digest(tmp_path: Path) -> None:
    pd.DataFrame(background()).to_csv(tmp_path / "loans.csv", index=False)
    pd.DataFrame([book_row("a"), book_row("b", interest="x")]).to_csv(tmp_path / "book.csv", index=False)
    data = prepare_loans(study(portfolio={"file": "book.csv"}), base=tmp_path)
    assert list(data.portfolio.loan_ids) == ["a"]
    assert set(data.digests) == {"loans.csv", "book.csv"}
    pd.DataFrame([{"id": "a"}]).to_csv(tmp_path / "book.csv", index=False)
    with pytest.raises(DataError, match=r"book\.csv lacks columns.*it has: id"):
        prepare_loans(study(portfolio={"file": "book.csv"}), base=tmp_path)


def test_an_empty_book_is_told() -> None:
    data = run(loan("d", "2020-01", "CD"), False)
    assert data.portfolio.n_loans == 0
    assert "empty_portfolio" in codes(data)


@pytest.mark.parametrize(
    ("columns", "words"),
    [
        ({"balance": None}, "balance, or amount"),
        ({"maturity": None}, "maturity or term_months"),
        ({"rate": None}, "name rate"),
    ],
)
def test_roles_the_book_needs(columns: dict[str, None], words: str) -> None:
    with pytest.raises(TextError, match=words):
        run([], loans={"columns": {k: v for k, v in PANEL_COLUMNS.items() if k not in columns}})


def test_a_column_cannot_be_category_and_number() -> None:
    hazards = {"default": {"terms": [{"age": "linear"}, {"loan": "score"}]}}
    with pytest.raises(
        TextError, match=r"'score' is a category in loans\.segments and a number in hazards\.default"
    ):
        run([], hazards=hazards, loans={"segments": ["score"]})


def test_a_column_moves_or_not() -> None:
    with pytest.raises(TextError, match="one or the other"):
        run([], loans={"varying": ["a"], "lagged": ["a"]})
    with pytest.raises(TextError, match=r"loans\.static names a"):
        run([], loans={"varying": ["a"], "static": ["a"]})


def test_a_payoff_hazard_needs_payoffs() -> None:
    hazards = {c: {"terms": [{"age": "linear"}]} for c in ("default", "payoff")}
    with pytest.raises(TextError, match=r"hazards\.payoff"):
        run([], hazards=hazards, loans={"outcome": {"column": "state", "default": ["D"]}})


def test_a_code_means_one_thing() -> None:
    with pytest.raises(TextError, match="code 'D' stands twice"):
        run([], loans={"outcome": {"column": "state", "default": ["D"], "payoff": ["P", "D"]}})


@pytest.mark.parametrize("matures", ["9999-12-31", "2080-07"])
def test_contract_ends_beyond_any_contract_are_not_projected(matures: str) -> None:
    rows = loan("far", "2020-01", "CCCCCC", matures=matures) + loan(
        "near", "2020-01", "CCCCCC", matures="2080-06"
    )
    data = run(rows)
    assert not_projected(data)["far"] == "contract_end_far"
    assert "near" in data.portfolio.loan_ids
    assert data.portfolio.remaining.max() == 720
    assert finding(data, "contract_end_far").first == ("far",)
    assert "far" in data.risk_set.loan_ids
    kept = run(rows, loans={"rules": {"contract_end_far": "keep"}})
    assert "far" in kept.portfolio.loan_ids
    with pytest.raises(DataError, match=r"contract_end_far.*First: far.*9999-12-31"):
        run(rows, loans={"rules": {"contract_end_far": "reject"}})


def test_contract_ends_beyond_any_contract_in_a_book() -> None:
    data = with_book([book_row("a"), book_row("far", matures="9999-12-31")])
    assert not_projected(data) == {"far": "contract_end_far"}


@pytest.mark.parametrize("rate", [-1.0, -12.0, -12.5, -100.0])
def test_rates_that_no_schedule_has_are_not_projected(rate: float) -> None:
    columns = {k: v for k, v in PANEL_COLUMNS.items() if k != "balance"} | {"amount": "owed"}
    for changes in ({}, {"columns": columns}):
        data = run(loan("a", "2020-01", "CCCCCC", interest=rate), loans=changes)
        assert not_projected(data)["a"] == "rate_below_minus_100"
        assert finding(data, "rate_implausible").count == 6
        assert list(data.portfolio.loan_ids) == ["bg-alive"]


def test_an_implausible_rate_that_the_study_assumes() -> None:
    columns = {k: v for k, v in PANEL_COLUMNS.items() if k != "rate"}
    data = run([], loans={"columns": columns, "assume": {"rate": 5.0}})
    assert finding(data, "rate_implausible").count == 9
    assert "loans.assume.rate is 5 (500 %) a year" in finding(data, "rate_implausible").message
    assert "rate_implausible" not in codes(run([], loans={"columns": columns, "assume": {"rate": 0.05}}))
    percent = {"columns": columns, "assume": {"rate": 5.0}, "rate_unit": "percent"}
    assert "rate_implausible" not in codes(run([], loans=percent))
    with pytest.raises(DataError, match=r"rate_implausible.*rate_unit"):
        run([], loans={"columns": columns, "assume": {"rate": 5.0}, "rules": {"rate_implausible": "reject"}})
