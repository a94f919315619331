"""2,101 real small-business loans as spells: every quirk of the file is found, and counted exactly.

The expected numbers are counted here with pandas from the file's own text, not with the code under test.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from tests.panel.worlds import assert_closes, codes, finding, left_out, not_projected, spells_study
from tests.shared_inputs import shared

FILE = "small_business_loans.csv"
pytestmark = pytest.mark.realdata

COLUMNS = {
    "loan": "loan",
    "origination": "disbursed",
    "term_months": "term_months",
    "amount": "gross_disbursed",
}
OUTCOME = {
    "column": "final_status", "default": ["CHGOFF"], "payoff": ["P I F"], "default_date": "charged_off",
    "payoff_date": None, "undated_payoff": "observed_to_maturity", "default_after_maturity": "date_at_maturity",
}  # fmt: skip


def prepare(outcome: dict[str, Any] | None = None, **loans: Any) -> LoanData:
    base = {
        "file": FILE,
        "columns": COLUMNS,
        "assume": {"rate": 0.07},
        "segments": ["revolving"],
        "observed_until": "2014-09",
    }
    study = spells_study(as_of="2014-12", outcome=OUTCOME | (outcome or {}), loans=base | loans)
    return prepare_loans(study, base=shared(f"data/{FILE}").parent)


@pytest.fixture(scope="module")
def raw() -> pd.DataFrame:
    return pd.read_csv(shared(f"data/{FILE}"), dtype=str, keep_default_na=False)


@pytest.fixture(scope="module")
def data() -> LoanData:
    return prepare()


def test_quirks_are_counted(data: LoanData, raw: pd.DataFrame) -> None:
    assert len(raw) == 2101
    assert left_out(data) == {
        "missing_origination": (raw["disbursed"] == "").sum(),  # 2
        "date_without_event": ((raw["final_status"] == "P I F") & (raw["charged_off"] != "")).sum(),  # 11
        "term_not_positive": (raw["term_months"] == "0").sum(),  # 3
        "undated_payoff": 0,
    }
    assert [int(n) for n in left_out(data).values()] == [2, 11, 3, 0]
    assert finding(data, "missing_origination").first == ("1256", "1692")
    assert finding(data, "term_not_positive").first == ("429", "728", "787")
    assert finding(data, "missing_category").count == (raw["revolving"] == "").sum() == 2
    assert codes(data) == {
        "missing_origination", "date_without_event", "term_not_positive", "undated_payoff", "default_after_maturity",
        "missing_category", "segment_without_defaults", "assumed_rate", "assumed_on_book",
    }  # fmt: skip
    failed = raw[raw["final_status"] == "CHGOFF"]
    without = sorted(set(raw["revolving"]) - set(failed["revolving"]))
    assert without == [""]
    assert finding(data, "segment_without_defaults").first == ("revolving=(missing)",)


def test_the_account(data: LoanData, raw: pd.DataFrame) -> None:
    assert_closes(data)
    table = data.reconciliation.set_index(["what", "reason"])
    total, used = table.loc[("in", "")], table.loc[("used", "")]
    assert total["rows"] == 2101
    assert total["events_default"] == (raw["final_status"] == "CHGOFF").sum() == 686
    assert total["events_payoff"] == 1415
    assert total["balance"] == pd.to_numeric(raw["gross_disbursed"]).sum()
    assert used["rows"] == 2085
    assert used["events_default"] == data.risk_set.events("default") == 683
    assert table.loc[("left out", "undated_payoff"), "events_payoff"] == 1415 - 2 - 11
    assert used["events_payoff"] == 0


def _months(raw: pd.DataFrame, column: str) -> np.ndarray:
    return raw[column].str[:4].replace("", "0").astype(int).to_numpy() * 12 + (
        raw[column].str[5:7].replace("", "1").astype(int).to_numpy() - 1
    )


def test_every_stay(data: LoanData, raw: pd.DataFrame) -> None:
    """Entry, exit and cause of each loan from the file's own dates."""
    opened, failed = _months(raw, "disbursed"), _months(raw, "charged_off")
    end = opened + raw["term_months"].astype(int).to_numpy()
    until = 2014 * 12 + 8
    default = (raw["final_status"] == "CHGOFF").to_numpy()
    odd = (raw["disbursed"] == "") | (raw["term_months"] == "0") | (~default & (raw["charged_off"] != ""))
    event = np.minimum(failed, end)
    last = np.where(default, np.minimum(event, until), np.minimum(end, until))
    expected = {
        name: (int(o) - 1, 0, int(t - o + 1), int(d and e <= until))
        for name, o, t, d, e, bad in zip(raw["loan"], opened, last, default, event, odd, strict=True)
        if not bad
    }
    risk = data.risk_set
    found = {
        str(risk.loan_ids[i]): (int(o), int(a), int(b), int(c))
        for i, o, a, b, c in zip(
            risk.stay_loan, risk.stay_origin, risk.stay_entry, risk.stay_exit, risk.stay_cause, strict=True
        )
    }
    assert found == expected


def test_default_after_the_contract_end(raw: pd.DataFrame) -> None:
    """220 charge-offs lie in a calendar month after that of the contract end, 3 of them on terms of 0."""
    end = _months(raw, "disbursed") + raw["term_months"].astype(int).to_numpy()
    known = (raw["disbursed"] != "") & (raw["final_status"] == "CHGOFF")
    late = int(((_months(raw, "charged_off") > end) & known).sum())
    dated = int(((_months(raw, "charged_off") > end) & known & (raw["term_months"] != "0")).sum())
    assert (late, dated) == (220, 217)
    left = prepare({"default_after_maturity": "leave_out"})
    assert left_out(left)["default_after_maturity"] == dated
    assert left.risk_set.events("default") == 683 - dated
    kept = prepare({"default_after_maturity": "keep"})
    assert kept.risk_set.events("default") == 683
    assert kept.risk_set.n_rows > prepare().risk_set.n_rows


def test_both_questions_are_asked_when_the_study_is_silent() -> None:
    with pytest.raises(DataError) as caught:
        prepare({"undated_payoff": "reject", "default_after_maturity": "reject"})
    assert {p.code: p.count for p in caught.value.problems} == {
        "undated_payoff": 1415 - 2 - 11,
        "default_after_maturity": 217,
    }


def test_odd_codes_survive_as_categories(data: LoanData, raw: pd.DataFrame) -> None:
    assert set(data.risk_set.static["revolving"]) == {"Y", "N", "0", "T", "(missing)"}


def test_every_loan_is_somewhere(data: LoanData, raw: pd.DataFrame) -> None:
    assert set(map(str, data.portfolio.loan_ids)) | set(not_projected(data)) == set(raw["loan"])
    reasons = pd.Series(not_projected(data)).value_counts().to_dict()
    assert reasons["defaulted"] == 683
    assert data.portfolio.n_loans == finding(data, "assumed_on_book").count
    assert (data.portfolio.balance > 0).all()
