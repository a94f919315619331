"""Layout spells: one row per loan; rules, censoring, late entry; the same loans as a panel give the same risk set."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import Frequency, format_period
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from tests.panel.worlds import (
    SPELL_COLUMNS,
    assert_closes,
    codes,
    finding,
    left_out,
    loan,
    month,
    not_projected,
    of_loan,
    run,
    spells_study,
    stays,
    used_rows,
)


def spell(name: str, opened: str, state: str = "C", **fields: Any) -> dict[str, Any]:
    return {
        "id": name, "opened": opened, "term": 24, "lent": 1000.0, "interest": 0.06, "state": state,
        "failed": None, "repaid": None,
    } | fields  # fmt: skip


def run_spells(rows: list[dict[str, Any]], **changes: Any) -> LoanData:
    """With a clean defaulted loan beside the rows: opened 2020-01, failed 2020-02."""
    frame = pd.DataFrame([spell("bg", "2020-01", "D", failed="2020-02-29"), *rows])
    return prepare_loans(spells_study(**changes), base=Path("."), frame=frame)


def test_ages_and_censoring() -> None:
    rows = [
        spell("alive", "2020-03"),  # to as_of 2020-06: ages 1..4
        spell("ended", "2018-03", term=12),  # to its contract end 2019-03: ages 1..13
        spell("failed", "2020-03-05", "D", failed="2020-05-31"),
        spell("repaid", "2020-03", "P", repaid="2020-03"),
    ]
    data = run_spells(rows)
    assert of_loan(data, "alive") == [(0, 4, 0)]
    assert of_loan(data, "ended") == [(0, 13, 0)]
    assert of_loan(data, "failed") == [(0, 3, 1)]
    assert of_loan(data, "repaid") == [(0, 1, 2)]
    assert left_out(data) == {}
    assert used_rows(data) == 5
    assert list(data.portfolio.loan_ids) == ["alive"]
    assert not_projected(data) == {
        "bg": "defaulted",
        "ended": "matured",
        "failed": "defaulted",
        "repaid": "paid_off",
    }


def test_exits_after_the_window_are_censored_and_counted() -> None:
    rows = [spell("late", "2020-03", "D", failed="2020-09"), spell("soon", "2020-03", "P", repaid="2020-06")]
    data = run_spells(rows, loans={"observed_until": "2020-05"})
    assert of_loan(data, "late") == [(0, 3, 0)]
    assert of_loan(data, "soon") == [(0, 3, 0)]
    line = data.reconciliation.set_index("reason").loc["event_after_observation"]
    assert (line["rows"], line["events_default"], line["events_payoff"]) == (0, 1, 1)
    assert_closes(data)
    assert list(data.portfolio.loan_ids) == [
        "late"
    ]  # at as_of 2020-06 it had not failed yet; "soon" was repaid in it
    assert not_projected(data)["soon"] == "paid_off"


def test_originated_after_the_window() -> None:
    data = run_spells([spell("a", "2020-06"), spell("b", "2020-08")], loans={"observed_until": "2020-05"})
    assert left_out(data) == {"never_at_risk": 2}
    assert list(data.portfolio.loan_ids) == ["a"]
    assert data.portfolio.age.tolist() == [1]
    assert not_projected(data)["b"] == "not_yet_originated"


def test_late_entry() -> None:
    columns = SPELL_COLUMNS | {"entry": "joined", "last_seen": "seen"}
    rows = [
        spell("a", "2018-01", joined="2019-01", seen="2019-06", term=60),
        spell("b", "2018-01", joined="2017-05", seen="2018-03", term=60),
        spell("c", "2018-01", "D", joined="2019-01", failed="2018-06", term=60),
    ]
    data = run_spells(rows, loans={"columns": columns})
    assert of_loan(data, "a") == [(12, 18, 0)]
    assert of_loan(data, "b") == [(0, 3, 0)]
    assert left_out(data) == {"never_at_risk": 1}


def test_event_without_date_and_date_without_event() -> None:
    rows = [
        spell("a", "2020-01", "D"),
        spell("b", "2020-01", "C", failed="2020-03"),
        spell("c", "2020-01", "C", repaid="2020-03"),
    ]
    rows += [
        spell("d", "2020-01", "P", repaid="2020-04", failed="2020-03"),
        spell("e", "2020-01", "D", failed="2020-03", repaid="2020-06"),
    ]
    data = run_spells(rows)
    assert left_out(data) == {"event_without_date": 1, "date_without_event": 3}
    assert finding(data, "date_without_event").first == ("b", "c", "d")
    assert of_loan(data, "e") == [(0, 3, 1)]
    kept = run_spells(rows, loans={"rules": {"date_without_event": "keep"}})
    assert of_loan(kept, "b") == [(0, 6, 0)]
    assert of_loan(kept, "d") == [(0, 4, 2)]


def test_undated_payoff_policies() -> None:
    rows = [
        spell("a", "2018-01", "P", term=12),
        spell("b", "2020-01", "P"),
        spell("c", "2020-01", "P", term=None),
    ]
    with pytest.raises(DataError, match=r"undated_payoff.*\(3 found\).*observed_to_maturity"):
        run_spells(rows)
    assert left_out(run_spells(rows, outcome={"undated_payoff": "leave_out"})) == {"undated_payoff": 3}
    data = run_spells(rows, outcome={"undated_payoff": "observed_to_maturity"})
    assert of_loan(data, "a") == [(0, 13, 0)]
    assert of_loan(data, "b") == [(0, 6, 0)]
    assert left_out(data) == {"undated_payoff_without_end": 1, "undated_payoff": 0}
    line = data.reconciliation.query("reason == 'undated_payoff'").iloc[0]
    assert (line["rows"], line["events_payoff"]) == (0, 2)
    assert finding(data, "undated_payoff").policy == "observed_to_maturity"
    assert finding(data, "assumed_on_book").count == 1
    assert list(data.portfolio.loan_ids) == ["b"]
    assert_closes(data)


def test_default_after_maturity_policies() -> None:
    rows = [spell("a", "2018-01", "D", term=12, failed="2019-06")]
    with pytest.raises(DataError, match="default_after_maturity"):
        run_spells(rows)
    policy = "default_after_maturity"
    assert left_out(run_spells(rows, outcome={policy: "leave_out"})) == {policy: 1}
    assert of_loan(run_spells(rows, outcome={policy: "keep"}), "a") == [(0, 18, 1)]
    dated = run_spells(rows, outcome={policy: "date_at_maturity"})
    assert of_loan(dated, "a") == [(0, 13, 1)]
    assert finding(dated, policy).policy == "date_at_maturity"


def test_dates_that_cannot_be() -> None:
    rows = [
        spell("a", "2020-03", "D", failed="2020-02"),
        spell("b", None),
        spell("c", "2020-03", "D", failed="2020-02-30"),
        spell("d", "2020-03", term=0),
        spell("e", "2020-03", "?"),
    ]
    outcome = {"performing": ["C"]}
    data = run_spells(rows, outcome=outcome)
    assert left_out(data) == {
        "event_before_origination": 1, "missing_origination": 1, "unreadable_date: failed": 1,
        "term_not_positive": 1, "unknown_status": 1,
    }  # fmt: skip
    assert set(not_projected(data).values()) == {*left_out(data), "defaulted"}
    assert "'2020-02-30'" in finding(data, "unreadable_date").message


def test_duplicates() -> None:
    rows = [spell("a", "2020-03"), spell("a", "2020-03"), spell("b", "2020-03"), spell("b", "2020-04")]
    data = run_spells(rows)
    assert left_out(data) == {"duplicate_exact": 1, "duplicate_conflicting": 2}
    assert not_projected(data) == {"b": "duplicate_conflicting", "bg": "defaulted"}
    assert_closes(data)


def test_balance_is_rolled_down_from_the_amount() -> None:
    rows = [spell("a", "2019-12", lent=100000.0, interest=0.12, term=36), spell("b", "2020-06", lent=500.0)]
    data = run_spells(rows)
    i = list(data.portfolio.loan_ids).index("a")
    r, n, k = 0.01, 36, 6
    payment = 100000 * r / (1 - (1 + r) ** -n)
    assert data.portfolio.balance[i] == pytest.approx(
        100000 * (1 + r) ** k - payment * ((1 + r) ** k - 1) / r, rel=1e-12
    )
    assert data.portfolio.balance[1 - i] == 500.0
    assert data.portfolio.remaining.tolist() == [30, 24]
    failed = data.not_projected.set_index("loan").loc["bg", "balance"]
    assert failed == pytest.approx(1000.0)  # failed one month after opening: nothing repaid before
    flat = run_spells(rows, loss={"lgd": {"constant": 0.4}, "exposure": {"schedule": "bullet"}})
    assert flat.portfolio.balance.tolist() == [100000.0, 500.0]


def test_percent_and_assumed_rates() -> None:
    data = run_spells([spell("a", "2020-03", interest=6.0)], loans={"rate_unit": "percent"})
    assert data.portfolio.rate.tolist() == [0.06]
    columns = {k: v for k, v in SPELL_COLUMNS.items() if k != "rate"}
    loans = {"columns": columns, "assume": {"rate": 5.0}, "rate_unit": "percent"}
    data = run_spells([spell("a", "2020-03")], loans=loans)
    assert data.portfolio.rate.tolist() == [0.05]
    assert finding(data, "assumed_rate").severity == "note"


def test_what_is_missing_is_not_projected() -> None:
    rows = [
        spell("a", "2020-03", lent=None), spell("b", "2020-03", lent=-1.0), spell("c", "2020-03", interest=None),
        spell("d", "2020-03", term=None), spell("e", "2020-03"),
    ]  # fmt: skip
    data = run_spells(rows)
    assert not_projected(data) == {
        "a": "missing_balance", "b": "negative_balance", "c": "missing_rate", "d": "missing_maturity", "bg": "defaulted",
    }  # fmt: skip
    assert used_rows(data) == 6  # all of them tell something about survival
    assert codes(data) == {"missing_amount", "negative_amount", "assumed_on_book"}


def test_last_seen_book() -> None:
    columns = SPELL_COLUMNS | {"last_seen": "seen"}
    rows = [
        spell("a", "2019-01", seen="2020-06"), spell("b", "2019-01", seen="2020-05"),
        spell("c", "2017-01", seen="2019-01"), spell("d", "2017-01", seen="2020-06"),
    ]  # fmt: skip
    data = run_spells(rows, portfolio={"from": "last_seen"}, loans={"columns": columns})
    assert list(data.portfolio.loan_ids) == ["a"]
    assert not_projected(data) == {
        "b": "not_seen_at_as_of", "bg": "defaulted", "c": "matured", "d": "no_remaining_term",
    }  # fmt: skip


def test_blank_last_seen_is_decided_by_the_study() -> None:
    columns = SPELL_COLUMNS | {"last_seen": "seen"}
    rows = [
        spell("seen", "2020-01", seen="2020-06"), spell("blank", "2020-01", seen=None),
        spell("ended", "2018-01", term=12, seen=None), spell("paid", "2020-01", "P", repaid="2020-03", seen=None),
    ]  # fmt: skip

    def data(policy: str) -> LoanData:
        rules = {"last_seen_missing": policy}
        return run_spells(rows, portfolio={"from": "last_seen"}, loans={"columns": columns, "rules": rules})

    with pytest.raises(
        DataError, match=r"last_seen_missing.*\(2 found\).*First: blank, ended\..*leave_out \| keep"
    ):
        run_spells(rows, portfolio={"from": "last_seen"}, loans={"columns": columns})
    left = data("leave_out")
    assert left_out(left) == {"last_seen_missing": 2}
    assert not_projected(left)["blank"] == "last_seen_missing"
    assert of_loan(left, "paid") == [(0, 3, 2)]
    kept = data("keep")
    assert of_loan(kept, "blank") == [(0, 6, 0)]
    assert of_loan(kept, "ended") == [(0, 13, 0)]
    assert list(kept.portfolio.loan_ids) == ["blank", "seen"]
    assert not_projected(kept)["ended"] == "matured"


@pytest.mark.parametrize("seen", [None, "2020-05"])
def test_an_exit_after_as_of_shows_that_the_loan_was_there(seen: str | None) -> None:
    columns = SPELL_COLUMNS | {"last_seen": "seen"}
    rows = [
        spell("fails", "2020-01", "D", failed="2020-09", seen=seen),
        spell("repays", "2020-01", "P", repaid="2020-07", seen=seen),
    ]
    data = run_spells(rows, portfolio={"from": "last_seen"}, loans={"columns": columns})
    assert list(data.portfolio.loan_ids) == ["fails", "repays"]
    assert of_loan(data, "fails") == [(0, 6, 0)]


def test_books_that_cannot_be_had() -> None:
    with pytest.raises(TextError, match="last_seen"):
        run_spells([], portfolio={"from": "last_seen"})
    with pytest.raises(TextError, match="contract belongs to layout spells"):
        run([], portfolio={"from": "contract"})


def _lives(rng: np.random.Generator, n: int) -> list[dict[str, Any]]:
    """Loans with an opening, sometimes a late entry two months or more on, an end and its cause."""
    lives = []
    for i in range(n):
        opened = month("2018-01") + int(rng.integers(0, 24))
        entry = opened if rng.random() < 0.6 else opened + int(rng.integers(2, 9))
        last = min(entry + int(rng.integers(0, 12)), month("2020-06"))
        cause = str(rng.choice(["C", "D", "P"]))
        lives.append(
            {
                "id": f"n{i}",
                "opened": opened,
                "entry": entry,
                "last": last,
                "cause": cause,
                "kind": f"k{i % 3}",
            }
        )
    return [life for life in lives if life["last"] >= life["entry"]]


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_spells_and_panel_give_the_same_risk_set(seed: int) -> None:
    """entry in a spells file is the first period at risk; a panel shows that loan for the first time a period before."""
    lives = _lives(np.random.default_rng(seed), 80)

    def label(t: int) -> str:
        return format_period(t, Frequency.MONTH)

    panel, spells = [], []
    for life in lives:
        first = life["opened"] if life["entry"] == life["opened"] else life["entry"] - 1
        states = "C" * (life["last"] - first) + life["cause"]
        panel += loan(life["id"], label(first), states, opened=label(life["opened"]), kind=life["kind"])
        failed = label(life["last"]) if life["cause"] == "D" else None
        repaid = label(life["last"]) if life["cause"] == "P" else None
        spells.append(
            spell(life["id"], label(life["opened"]), life["cause"], failed=failed, repaid=repaid, term=200,
                  joined=label(life["entry"]), seen=label(life["last"]), kind=life["kind"])
        )  # fmt: skip
    columns = SPELL_COLUMNS | {"entry": "joined", "last_seen": "seen"}
    changes: dict[str, Any] = {
        "hazards": {"default": {"terms": [{"age": "linear"}, {"loan": "kind", "as": "category"}]}}
    }
    one = run(panel, False, **changes)
    study = spells_study(portfolio={"from": "last_seen"}, loans={"columns": columns}, **changes)
    other = prepare_loans(study, base=Path("."), frame=pd.DataFrame(spells))
    assert stays(one.risk_set) == stays(other.risk_set)
    assert list(one.risk_set.static["kind"]) == list(other.risk_set.static["kind"])
    assert list(one.portfolio.loan_ids) == list(other.portfolio.loan_ids)
    assert one.portfolio.age.tolist() == other.portfolio.age.tolist()
    assert len(one.risk_set.stay_loan) > 70
