"""Every quality rule on the smallest panel that shows it, with exact counts."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.panel.rules.registry import RULES
from tests.panel.worlds import (
    BACKGROUND_ROWS,
    PANEL_COLUMNS,
    assert_closes,
    codes,
    finding,
    left_out,
    loan,
    not_projected,
    of_loan,
    run,
    used_rows,
)

RATED = {"default": {"terms": [{"age": "linear"}, {"loan": "score"}]}}
KINDS = {"default": {"terms": [{"age": "linear"}, {"loan": "kind", "as": "category"}]}}


def test_clean_panel_has_no_findings() -> None:
    data = run([])
    assert data.findings == ()
    assert left_out(data) == {}
    assert used_rows(data) == BACKGROUND_ROWS
    assert of_loan(data, "bg-default") == [(0, 3, 1)]
    assert of_loan(data, "bg-alive") == [(0, 6, 0)]
    assert list(data.portfolio.loan_ids) == ["bg-alive"]
    assert not_projected(data) == {"bg-default": "defaulted"}
    assert_closes(data)


def test_missing_loan() -> None:
    data = run(loan(" ", "2020-02", "CC"))
    assert left_out(data) == {"missing_loan": 2}
    assert finding(data, "missing_loan").first == ("(no identifier) @ 2020-02", "(no identifier) @ 2020-03")
    assert data.reconciliation["loans"].tolist() == [2, 0, 2]
    assert_closes(data)


def test_unreadable_period_names_the_text() -> None:
    rows = loan("a", "2020-01", "CCC")
    rows[1]["month"] = "2020-13"
    data = run(rows)
    assert left_out(data) == {"unreadable_period": 1, "after_gap": 1}
    assert "'2020-13'" in finding(data, "unreadable_period").message
    assert finding(data, "unreadable_period").first == ("a",)
    assert of_loan(data, "a") == [(0, 1, 0)]


def test_after_as_of() -> None:
    data = run(loan("a", "2020-05", "CCCD"))
    assert left_out(data) == {"after_as_of": 2}
    assert of_loan(data, "a") == [(0, 2, 0)]
    assert "a" in data.portfolio.loan_ids
    assert data.reconciliation.set_index("reason").loc["after_as_of", "events_default"] == 1


def test_duplicate_exact_counts_once() -> None:
    rows = loan("a", "2020-01", "CCC")
    data = run([*rows, rows[1], rows[1]])
    assert left_out(data) == {"duplicate_exact": 2}
    assert finding(data, "duplicate_exact").first == ("a @ 2020-02", "a @ 2020-02")
    assert of_loan(data, "a") == [(0, 3, 0)]
    assert_closes(data)


def test_duplicate_conflicting_leaves_all_out_and_a_gap() -> None:
    rows = loan("a", "2020-01", "CCCC")
    data = run([*rows, rows[1] | {"owed": 99.0}, rows[1]])
    assert left_out(data) == {"duplicate_conflicting": 3, "after_gap": 1}
    assert of_loan(data, "a") == [(0, 1, 0), (3, 4, 0)]


def test_duplicates_with_missing_values_are_copies() -> None:
    rows = loan("a", "2020-01", "CC", owed=None)
    assert left_out(run([*rows, dict(rows[0])])) == {"duplicate_exact": 1}


def test_columns_nobody_reads_do_not_make_rows_differ() -> None:
    rows = loan("a", "2020-01", "CC")
    assert left_out(run([*rows, rows[0] | {"remark": "second copy"}])) == {"duplicate_exact": 1}


def test_missing_origination_and_unreadable_date() -> None:
    rows = [*loan("a", "2020-01", "CC", opened=" "), *loan("b", "2020-01", "CCC", opened="soon")]
    data = run(rows)
    assert left_out(data) == {"unreadable_date: opened": 3, "missing_origination": 2}
    assert "'soon'" in finding(data, "unreadable_date").message
    assert not_projected(data) == {
        "a": "missing_origination", "b": "unreadable_date: opened", "bg-default": "defaulted",
    }  # fmt: skip


def test_period_before_origination() -> None:
    data = run(loan("a", "2020-01", "CCCC", opened="2020-03"))
    assert left_out(data) == {"period_before_origination": 2}
    assert of_loan(data, "a") == [(0, 2, 0)]


def test_unknown_status_is_not_observed() -> None:
    outcome = {"column": "state", "default": ["D"], "payoff": ["P"], "performing": ["C"]}
    data = run(loan("a", "2020-01", "CXCC"), loans={"outcome": outcome})
    assert left_out(data) == {"unknown_status": 1, "after_gap": 1}
    assert "'X'" in finding(data, "unknown_status").message
    assert of_loan(data, "a") == [(0, 1, 0), (3, 4, 0)]


def test_without_declared_performing_codes_only_empty_is_unknown() -> None:
    data = run(loan("a", "2020-01", "CX C"))
    assert left_out(data) == {"unknown_status": 1, "after_gap": 1}


FLAGS = {"default_flag": "bad", "payoff_flag": "gone"}


def _flagged(values: list[tuple[Any, Any]]) -> list[dict[str, Any]]:
    rows = loan("a", "2020-01", "C" * len(values)) + loan("zz", "2020-01", "CC")
    for row, (bad, gone) in zip(rows, [*values, (0, 0), (1, 0)], strict=True):
        row |= {"bad": bad, "gone": gone}
    return rows


def test_flags_and_two_exits() -> None:
    rows = _flagged([(0, 0), (1, 1)])
    data = run(rows, False, loans={"outcome": FLAGS})
    assert finding(data, "two_exits").count == 1
    assert of_loan(data, "a") == [(0, 2, 1)]
    data = run(rows, False, loans={"outcome": FLAGS, "rules": {"two_exits": "leave_out"}})
    assert left_out(data) == {"two_exits": 1}
    assert of_loan(data, "a") == [(0, 1, 0)]


@pytest.mark.parametrize(("bad", "gone", "cause"), [("true", "0", 1), ("0", "True", 2), ("1.0", None, 1)])
def test_flag_words(bad: Any, gone: Any, cause: int) -> None:
    data = run(_flagged([("0", "false"), (bad, gone)]), False, loans={"outcome": FLAGS})
    assert of_loan(data, "a") == [(0, 2, cause)]


def test_flags_that_are_neither_are_unknown() -> None:
    data = run(_flagged([(0, 0), (2, 0), (None, 1), (None, 0), (0, None)]), False, loans={"outcome": FLAGS})
    assert left_out(data) == {"unknown_status": 4}


def test_unreadable_value_counts_as_missing() -> None:
    rows = loan("a", "2020-01", "CC")
    rows[0]["owed"], rows[1]["interest"] = "1,000", "five"
    data = run(rows)
    found = [f for f in data.findings if f.code == "unreadable_value"]
    assert [(f.count, f.first) for f in found] == [(1, ("a @ 2020-01",)), (1, ("a @ 2020-02",))]
    assert "'owed'" in found[0].message
    assert left_out(data) == {}
    assert finding(data, "missing_amount").count == 1
    left = run(rows, loans={"rules": {"unreadable_value": "leave_out"}})
    assert left_out(left) == {"unreadable_value: owed": 1, "unreadable_value: interest": 1}


@pytest.mark.parametrize("word", ["NA", "nan", "null", "None", ""])
def test_words_for_missing_numbers(word: str) -> None:
    rows = loan("a", "2020-05", "CC")
    rows[0]["owed"] = word
    data = run(rows)
    assert codes(data) == {"missing_amount"}


@pytest.mark.parametrize("word", ["inf", "1_000", "1e400", "1e18", "0x10"])
def test_odd_numbers_are_not_read(word: str) -> None:
    rows = loan("a", "2020-05", "CC")
    rows[0]["owed"] = word
    assert codes(run(rows)) == {"unreadable_value", "missing_amount"}


def test_term_not_positive() -> None:
    columns = {k: v for k, v in PANEL_COLUMNS.items() if k != "maturity"} | {"term_months": "term"}
    rows = [
        *loan("a", "2020-01", "CC", term=0),
        *loan("b", "2020-01", "CC", term=-3),
        *loan("c", "2020-05", "CC", term=2.5),
    ]
    rows += [*loan("d", "2020-05", "CC", term=2), *loan("e", "2020-01", "CD", term=60)]
    data = run(rows, False, loans={"columns": columns})
    assert finding(data, "term_not_positive").first == ("a", "b", "c")
    assert left_out(data) == {"term_not_positive": 6}
    assert not_projected(data) == dict.fromkeys("abc", "term_not_positive") | {"e": "defaulted"}
    assert data.portfolio.remaining.tolist() == [1]  # opened 2020-05 for two months: ends 2020-07
    kept = run(rows, False, loans={"columns": columns, "rules": {"term_not_positive": "keep"}})
    assert left_out(kept) == {}
    assert not_projected(kept)["c"] == "missing_maturity"


def test_maturity_before_origination() -> None:
    data = run(loan("a", "2020-01", "CC", matures="2019-12") + loan("b", "2020-01", "CC", matures="2020-01"))
    assert left_out(data) == {"term_not_positive": 2}
    assert finding(data, "period_after_maturity").first == ("b @ 2020-02",)


def test_origination_changes() -> None:
    rows = loan("a", "2020-01", "CCCC")
    rows[2]["opened"] = rows[3]["opened"] = "2020-03"
    data = run(rows)
    assert left_out(data) == {"origination_changes": 4}
    assert finding(data, "origination_changes").first == ("a",)
    kept = run(rows, loans={"rules": {"origination_changes": "keep"}})
    assert of_loan(kept, "a") == [(0, 4, 0)]


def test_period_after_maturity() -> None:
    rows = loan("a", "2020-01", "CCCC", matures="2020-02")
    data = run(rows)
    assert finding(data, "period_after_maturity").count == 2
    assert of_loan(data, "a") == [(0, 4, 0)]
    assert left_out(run(rows, loans={"rules": {"period_after_maturity": "leave_out"}})) == {
        "period_after_maturity": 2
    }


def test_after_observed_until() -> None:
    data = run(loan("a", "2020-03", "CCCD"), loans={"observed_until": "2020-05"})
    assert left_out(data) == {"after_observed_until": 2}  # one of a, one of bg-alive
    assert of_loan(data, "a") == [(0, 3, 0)]
    assert not_projected(data)["a"] == "defaulted"
    assert "bg-alive" in data.portfolio.loan_ids


def test_after_event() -> None:
    data = run(loan("a", "2020-01", "CDDCP"))
    assert left_out(data) == {"after_event": 3}
    assert of_loan(data, "a") == [(0, 2, 1)]
    line = data.reconciliation.set_index("reason").loc["after_event"]
    assert (line["events_default"], line["events_payoff"], line["loans"]) == (1, 1, 0)
    assert not_projected(data)["a"] == "defaulted"


def test_entry_row_and_event_in_first_row() -> None:
    rows = loan("a", "2020-03", "CCC", opened="2019-01") + loan("b", "2020-03", "DD", opened="2019-01")
    data = run(rows)
    assert left_out(data) == {"entry_row": 2, "after_event": 1}
    assert of_loan(data, "a") == [(15, 17, 0)]
    assert of_loan(data, "b") == []
    assert finding(data, "event_in_first_row").first == ("b @ 2020-03",)
    line = data.reconciliation.set_index("reason").loc["entry_row"]
    assert (line["events_default"], line["loans"]) == (1, 1)
    at_risk = run(rows, loans={"first_row": "at_risk"})
    assert left_out(at_risk) == {"after_event": 1}
    assert of_loan(at_risk, "a") == [(14, 17, 0)]
    assert of_loan(at_risk, "b") == [(14, 15, 1)]
    assert "event_in_first_row" not in codes(at_risk)


def test_first_row_at_age_one_is_at_risk() -> None:
    assert of_loan(run(loan("a", "2020-03", "D")), "a") == [(0, 1, 1)]


def test_gap_starts_a_new_stay() -> None:
    data = run(loan("a", "2020-01", "CC.CCD"))
    assert left_out(data) == {"after_gap": 1}
    assert of_loan(data, "a") == [(0, 2, 0), (4, 6, 1)]
    assert finding(data, "after_gap").first == ("a @ 2020-04",)


def test_event_after_gap_is_lost_and_told() -> None:
    data = run(loan("a", "2020-01", "C..D"))
    assert finding(data, "event_after_gap").first == ("a @ 2020-04",)
    assert left_out(data) == {"after_gap": 1}
    assert of_loan(data, "a") == [(0, 1, 0)]
    assert not_projected(data)["a"] == "defaulted"


def test_amounts_and_rates() -> None:
    rows = loan("a", "2020-01", "CCCC")
    rows[0]["owed"], rows[1]["owed"], rows[2]["interest"] = None, -5.0, 5.0
    data = run(rows)
    assert {f.code: f.count for f in data.findings} == {
        "missing_amount": 1,
        "negative_amount": 1,
        "rate_implausible": 1,
    }
    assert of_loan(data, "a") == [(0, 4, 0)]
    left = run(rows, loans={"rules": {"missing_amount": "leave_out", "negative_amount": "leave_out"}})
    assert left_out(left) == {"missing_amount": 1, "negative_amount": 1}
    assert of_loan(left, "a") == [(2, 4, 0)]  # the rows were still seen: no gap follows
    assert_closes(left)


def test_payoff_at_maturity() -> None:
    data = run(loan("a", "2020-01", "CCP", matures="2020-03") + loan("b", "2020-01", "CP", matures="2020-03"))
    assert finding(data, "payoff_at_maturity").first == ("a @ 2020-03",)


def test_static_changes_keeps_the_first() -> None:
    rows = loan("a", "2020-05", "CC", kind="x")
    rows[1]["kind"] = "y"
    data = run(
        rows + loan("b", "2020-01", "CD", kind="y") + loan("c", "2020-05", "CC", kind="x"),
        False,
        hazards=KINDS,
    )
    assert finding(data, "static_changes").first == ("a",)
    assert list(data.risk_set.static["kind"]) == ["x", "y", "x"]
    assert list(data.portfolio.static["kind"]) == ["x", "x"]


def test_missing_category() -> None:
    rows = (
        loan("a", "2020-05", "CC", kind=None)
        + loan("b", "2020-01", "CD", kind="y")
        + loan("c", "2020-06", "C", kind=" ")
    )
    data = run(rows, False, hazards=KINDS)
    assert list(data.risk_set.static["kind"]) == ["(missing)", "y", "(missing)"]
    assert finding(data, "missing_category").first == ("a", "c")
    left = run(rows, False, hazards=KINDS, loans={"rules": {"missing_category": "leave_out"}})
    assert left_out(left) == {"missing_category: kind": 3}
    assert not_projected(left)["c"] == "missing_category: kind"


def test_a_category_that_nobody_has() -> None:
    data = run(
        loan("a", "2020-05", "CC", kind=None) + loan("b", "2020-01", "CD", kind=""), False, hazards=KINDS
    )
    assert set(data.risk_set.static["kind"]) == {"(missing)"}


def test_a_category_filled_later_is_no_change() -> None:
    rows = loan("a", "2020-05", "CC", kind=None)
    rows[1]["kind"] = "x"
    data = run(rows + loan("b", "2020-01", "CD", kind="x"), False, hazards=KINDS)
    assert codes(data) == set()
    assert list(data.risk_set.static["kind"]) == ["x", "x"]


def test_missing_value() -> None:
    rows = loan("a", "2020-05", "CC", score=None) + loan("b", "2020-01", "CD", score=2)
    rows += loan("c", "2020-05", "CC", score="high") + loan("d", "2020-05", "CC", score=3)
    data = run(rows, False, hazards=RATED)
    assert left_out(data) == {"missing_value: score": 4}
    assert data.risk_set.static["score"].tolist() == [2.0, 3.0]
    assert finding(data, "unreadable_value").count == 2
    assert not_projected(data) == {"a": "missing_value: score", "b": "defaulted", "c": "missing_value: score"}


def test_columns_only_carried_along_do_not_cost_rows() -> None:
    rows = loan("a", "2020-05", "CC", note=None, size="") + loan("b", "2020-01", "CD", note="long", size="7")
    data = run(rows, False, loans={"static": ["note", "size"]})
    assert left_out(data) == {}
    assert list(data.risk_set.static["note"]) == ["(missing)", "long"]
    np.testing.assert_array_equal(data.risk_set.static["size"], [np.nan, 7.0])


def test_category_once_and_segment_without_defaults() -> None:
    rows = (
        loan("a", "2020-05", "CC", kind="rare")
        + loan("b", "2020-01", "CD", kind="x")
        + loan("c", "2020-05", "CC", kind="x")
    )
    data = run(rows, False, hazards=KINDS)
    assert finding(data, "category_once").first == ("a",)
    assert finding(data, "segment_without_defaults").first == ("kind=rare",)
    left = run(rows, False, hazards=KINDS, loans={"rules": {"category_once": "leave_out"}})
    assert left_out(left) == {"category_once: kind": 2}
    assert list(left.portfolio.loan_ids) == ["c"]
    with pytest.raises(DataError, match="segment_without_defaults"):
        run(rows, False, loans={"segments": ["kind"], "rules": {"segment_without_defaults": "reject"}})


def _moving(column: str, values: dict[str, list[Any]]) -> list[dict[str, Any]]:
    rows = []
    for name, series in values.items():
        states = "C" * (len(series) - 1) + ("D" if name.startswith("d") else "C")
        for row, value in zip(loan(name, "2020-01", states), series, strict=True):
            rows.append(row | {column: value})
    return rows


def test_varying_uses_the_row_before() -> None:
    rows = _moving("score", {"d1": [1, 2, 3], "e": [4, None, 6, 7]})
    data = run(rows, False, hazards=RATED, loans={"varying": ["score"]})
    assert left_out(data) == {"no_previous_row": 2, "missing_value_in_row: score": 1}
    assert of_loan(data, "d1") == [(1, 3, 1)]
    assert of_loan(data, "e") == [(1, 2, 0), (3, 4, 0)]
    assert data.risk_set.moving["score"].tolist() == [1.0, 2.0, 4.0, 6.0]


def test_varying_after_an_entry_row_uses_it() -> None:
    rows = _moving("score", {"d1": [1, 2, 3]})
    for row in rows:
        row["opened"] = "2019-01"
    data = run(rows, False, hazards=RATED, loans={"varying": ["score"]})
    assert left_out(data) == {"entry_row": 1}
    assert data.risk_set.moving["score"].tolist() == [1.0, 2.0]


def test_lagged_uses_its_own_row() -> None:
    rows = _moving("score", {"d1": [1, 2, 3], "e": [4, None, 6, 7]})
    data = run(rows, False, hazards=RATED, loans={"lagged": ["score"]})
    assert left_out(data) == {"missing_value_in_row: score": 1}
    assert of_loan(data, "e") == [(0, 1, 0), (2, 4, 0)]
    assert data.risk_set.moving["score"].tolist() == [1.0, 2.0, 3.0, 4.0, 6.0, 7.0]


def test_moving_category() -> None:
    rows = _moving("kind", {"d1": ["x", "y", "x"], "e": ["y", None, "y"]})
    data = run(rows, False, hazards=KINDS, loans={"varying": ["kind"]})
    assert finding(data, "missing_category_in_row").first == ("e @ 2020-03",)
    assert list(data.risk_set.moving["kind"]) == ["x", "y", "y", "(missing)"]


def _late_payment(event_value: float) -> list[dict[str, Any]]:
    """Six loans that default in their third month, six that do not: days past due as seen at the month's END."""
    values: dict[str, list[Any]] = {f"d{i}": [0, 30 + i, event_value + i] for i in range(6)}
    return _moving("score", values | {f"e{i}": [0, 5 * i, 10 * i] for i in range(6)})


def test_look_ahead_of_a_number() -> None:
    with pytest.raises(DataError, match=r"look_ahead.*loans.varying") as caught:
        run(_late_payment(90), False, hazards=RATED, loans={"lagged": ["score"]})
    assert caught.value.problems[0].first == ("score",)
    run(_late_payment(90), False, hazards=RATED, loans={"varying": ["score"]})
    run(_late_payment(35), False, hazards=RATED, loans={"lagged": ["score"]})  # the values overlap
    kept = run(
        _late_payment(90), False, hazards=RATED, loans={"lagged": ["score"], "rules": {"look_ahead": "keep"}}
    )
    assert finding(kept, "look_ahead").first == ("score",)


def test_look_ahead_of_a_balance_that_is_emptied() -> None:
    values: dict[str, list[Any]] = {f"d{i}": [90, 0, 0 if i % 2 else None] for i in range(6)}
    rows = _moving("score", values | {f"e{i}": [80, 70, 60] for i in range(6)})
    with pytest.raises(DataError, match="look_ahead"):
        run(rows, False, hazards=RATED, loans={"lagged": ["score"]})


def test_look_ahead_of_a_category() -> None:
    values: dict[str, list[Any]] = {f"d{i}": ["ok", "ok", "written off"] for i in range(6)}
    rows = _moving("kind", values | {f"e{i}": ["ok", "slow", "ok"] for i in range(6)})
    with pytest.raises(DataError, match="look_ahead"):
        run(rows, False, hazards=KINDS, loans={"lagged": ["kind"]})


def test_look_ahead_of_a_static_number() -> None:
    rows = [r for i in range(6) for r in loan(f"d{i}", "2020-01", "CD", score=100 + i)]
    rows += [r for i in range(6) for r in loan(f"e{i}", "2020-01", "CC", score=0)]
    with pytest.raises(DataError, match="look_ahead"):
        run(rows, False, hazards=RATED)
    rows[-1]["score"] = rows[-2]["score"] = 102
    run(rows, False, hazards=RATED)


def test_all_rejected_problems_come_together() -> None:
    rows = loan("a", "2020-01", "CC.C") + loan("b", "2020-01", "CD", owed=-1.0)
    rules = {"after_gap": "reject", "negative_amount": "reject", "unknown_status": "reject"}
    with pytest.raises(DataError) as caught:
        run(rows, loans={"rules": rules})
    problems = {p.code: p for p in caught.value.problems}
    assert set(problems) == {"after_gap", "negative_amount"}
    assert problems["negative_amount"].count == 2
    assert problems["after_gap"].first == ("a @ 2020-04",)
    assert "loans.rules" in problems["after_gap"].remedy


def test_unknown_rule_lists_the_rules() -> None:
    with pytest.raises(TextError, match="Did you mean 'after_gap'") as caught:
        run([], loans={"rules": {"aftergap": "reject"}})
    assert all(rule.code in str(caught.value) for rule in RULES)


def test_impossible_policy() -> None:
    with pytest.raises(TextError, match="leave_out or reject"):
        run([], loans={"rules": {"missing_loan": "keep"}})


def test_policy_with_a_place_of_its_own() -> None:
    with pytest.raises(TextError, match=r"loans\.outcome\.undated_payoff"):
        run([], loans={"rules": {"undated_payoff": "keep"}})


def test_registry() -> None:
    assert len({rule.code for rule in RULES}) == len(RULES)
    for rule in RULES:
        assert rule.default in rule.allowed
        assert "reject" in rule.allowed, "every rule can stop the run"
        if "keep" in rule.allowed:
            assert rule.kept, f"{rule.code}: say what keep does"


def test_no_events() -> None:
    with pytest.raises(DataError, match="no default among the rows at risk"):
        run(loan("a", "2020-01", "CC"), False)
    hazards = {c: {"terms": [{"age": "linear"}]} for c in ("default", "payoff")}
    with pytest.raises(DataError, match="no payoff among the rows at risk"):
        run([], hazards=hazards)


def test_no_events_shows_the_codes_found() -> None:
    rows = [row | {"state": row["state"].lower()} for row in loan("a", "2020-01", "CD")]
    with pytest.raises(DataError) as caught:
        run(rows, False)
    text = str(caught.value)
    assert "Column 'state' holds 'c', 'd'; loans.outcome.default names 'D'." in text
    assert "drop the hazard" not in text
    with pytest.raises(DataError, match=r"Rows with a default that were left out: after_as_of 1\."):
        run(loan("a", "2020-06", "CD"), False)
    flags = {"default_flag": "bad", "payoff_flag": "gone"}
    rows = [row | {"bad": "no", "gone": 0} for row in loan("a", "2020-01", "CC")]
    with pytest.raises(DataError, match=r"unknown_status"):
        run(rows, False, loans={"outcome": flags})
    rows = [row | {"bad": 0, "gone": 0} for row in loan("a", "2020-01", "CC")]
    with pytest.raises(DataError, match=r"Column 'bad' holds '0', and Column 'gone' holds '0'\."):
        run(rows, False, loans={"outcome": flags})
    both = {c: {"terms": [{"age": "linear"}]} for c in ("default", "payoff")}
    with pytest.raises(DataError, match=r"loans\.outcome\.payoff names 'P'.*drop the hazard"):
        run([], hazards=both)


def test_no_rows_at_risk() -> None:
    with pytest.raises(DataError, match=r"no row is left .*after_as_of 2"):
        run(loan("a", "2021-01", "CD"), False)
