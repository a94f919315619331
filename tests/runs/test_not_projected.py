"""Loans that are not projected, from the input to the tables of a run: each with its reason, none twice, none lost."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.panel.result import LoanData
from stresskit.runs.api import Prepared, fit, load_study, prepare, project
from stresskit.runs.folder import write_folder
from stresskit.runs.records import StudyResult
from tests.cli.small_study import write_small_study

#: Loan -> what is odd about it in the book's file, the reason, and what it owes.
ODD: dict[str, tuple[dict[str, Any], str, float]] = {
    "over": ({"matures": "2020-12"}, "no_remaining_term", 1000.0),
    "no end": ({"matures": None}, "missing_maturity", 1000.0),
    "no start": ({"opened": None}, "missing_origination", 1000.0),
    "no rate": ({"interest": None}, "missing_rate", 1000.0),
    "low rate": ({"interest": -1.5}, "rate_below_minus_100", 1000.0),
    "no balance": ({"owed": None}, "missing_balance", np.nan),
    "negative": ({"owed": -7.0}, "negative_balance", -7.0),
    "later": ({"opened": "2021-06"}, "not_yet_originated", 1000.0),
    "strange": ({"product": "barter"}, "category_not_in_history: product", 1000.0),
    "no product": ({"product": None}, "category_not_in_history: product", 1000.0),
    "no score": ({"score": None}, "missing_value: score", 1000.0),
    "far": ({"matures": "2290-01"}, "contract_end_far", 1000.0),
}
PLAIN = {
    "opened": "2019-06", "matures": "2023-06", "owed": 1000.0, "interest": 0.05, "product": "fixed", "place": "east", "score": 0.5,
}  # fmt: skip


def _score(study: Path) -> pd.DataFrame:
    """The history with a number of each loan, which the default hazard reads."""
    panel = pd.read_csv(study.parent / "loans.csv")
    panel["score"] = panel["id"].str[1:].astype(int) % 7 / 7.0
    panel.to_csv(study.parent / "loans.csv", index=False)
    text = study.read_text().replace("      - {age: log}\n", "      - {age: log}\n      - {loan: score}\n")
    study.write_text(text)
    return panel


def _run(study: Path) -> tuple[Prepared, StudyResult, Path]:
    file = load_study(study)
    data = prepare(file)
    fits = fit(file, data)
    result = project(file, data, fits, threads=2)
    out = study.parent / "run"
    write_folder(result, fits, out, command=())
    return data, result, out


@pytest.fixture(scope="module")
def book_run(tmp_path_factory: pytest.TempPathFactory) -> tuple[LoanData, StudyResult, Path]:
    """40 plain loans of the book's file and every odd one."""
    study = write_small_study(tmp_path_factory.mktemp("odd"), loans=250)
    _score(study)
    rows = [{"id": f"B{i:02d}", **PLAIN, "owed": 1000.0 + i} for i in range(40)]
    rows += [{"id": name, **PLAIN, **odd} for name, (odd, _, _) in ODD.items()]
    rows += [{"id": "twice", **PLAIN}, {"id": "twice", **PLAIN, "owed": 1001.0}]
    order = np.random.default_rng(3).permutation(len(rows))
    pd.DataFrame(rows).iloc[order].to_csv(study.parent / "book.csv", index=False)
    study.write_text(study.read_text() + "portfolio: {file: book.csv}\n")
    data, result, out = _run(study)
    return data.loans, result, out


def test_every_reason_reaches_the_result_and_its_file(
    book_run: tuple[LoanData, StudyResult, Path],
) -> None:
    _, result, out = book_run
    for table in (result.not_projected, pd.read_csv(out / "not_projected.csv")):
        found = table[table["loan"] != "twice"].set_index("loan")
        assert found["reason"].to_dict() == {name: reason for name, (_, reason, _) in ODD.items()}
        np.testing.assert_array_equal(found["balance"][list(ODD)], [owed for _, _, owed in ODD.values()])
        assert table[table["loan"] == "twice"]["reason"].tolist() == ["book_duplicate", "book_duplicate"]
    assert sum("not projected" in text for text in result.cautions) >= 1


def test_what_was_given_is_projected_or_listed(book_run: tuple[LoanData, StudyResult, Path]) -> None:
    """Loans and balances of the file = those of the tables + those not projected."""
    data, result, out = book_run
    given = pd.read_csv(out.parent / "book.csv")
    left = result.not_projected
    loans = pd.read_parquet(out / "loans.parquet")
    summary = pd.read_csv(out / "summary.csv")
    for scenario, rows in loans.groupby("scenario"):
        assert rows["loan"].is_unique
        assert sorted([*rows["loan"], *left["loan"]]) == sorted(given["id"])
        whole = summary[(summary["scenario"] == scenario) & summary["by"].isna()].iloc[0]
        assert whole["loans"] == len(rows) == data.portfolio.n_loans == 40
        assert whole["exposure"] == pytest.approx(rows["balance"].sum(), rel=1e-14)
        assert whole["exposure"] + left["balance"].sum() == pytest.approx(given["owed"].sum(), rel=1e-14)
        assert np.isfinite(rows[["pd_lifetime", "el_lifetime"]]).all(axis=None)
    assert set(loans["scenario"]) == {"baseline", "slump", "weighted"}


def test_the_history_closes_whatever_the_book_lacks(
    book_run: tuple[LoanData, StudyResult, Path],
) -> None:
    _, result, out = book_run
    for table in (result.reconciliation, pd.read_csv(out / "reconciliation.csv")):
        given, rest = table[table["what"] == "in"], table[table["what"] != "in"]
        assert given["rows"].sum() == rest["rows"].sum() == len(pd.read_csv(out.parent / "loans.csv"))


def test_loans_of_the_history_that_left_or_lack_a_value(tmp_path: Path) -> None:
    """Without a file of its own: whoever is in default, gone or without a value at as_of is listed, the rest is projected."""
    study = write_small_study(tmp_path, loans=250)
    panel = _score(study)
    last = panel.sort_values("month").groupby("id").tail(1).set_index("id")
    alive = last[(last["month"] == "2020-12") & (last["state"] == "C") & (last["matures"] > "2020-12")].index
    changes = {"missing_value: score": "score", "missing_rate": "interest", "missing_balance": "owed"}
    odd = dict(zip(alive, changes.items(), strict=False))
    for name, (_, column) in odd.items():
        panel.loc[panel["id"] == name, column] = np.nan
    gone = alive[3]
    panel = panel[(panel["id"] != gone) | (panel["month"] < "2020-12")]
    panel.to_csv(tmp_path / "loans.csv", index=False)
    data, result, out = _run(study)
    reasons = result.not_projected.set_index("loan")["reason"]
    assert {name: reasons[name] for name in odd} == {name: reason for name, (reason, _) in odd.items()}
    assert reasons[gone] == "not_seen_at_as_of"
    assert (reasons[last.index[last["state"] == "D"]] == "defaulted").all()
    assert (reasons[last.index[last["state"] == "P"]] == "paid_off").all()
    projected = pd.read_parquet(out / "loans.parquet", columns=["loan", "scenario"])
    rows = projected[projected["scenario"] == "slump"]["loan"]
    assert sorted([*rows, *reasons.index]) == sorted(panel["id"].unique())
    assert set(rows) == set(alive) - set(odd) - {gone}
    assert data.loans.portfolio.n_loans == len(rows)
