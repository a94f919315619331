"""Case and cash-flow tables: every rule strikes once and is counted, nothing is lost, amounts add up."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from pydantic import ValidationError

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import Frequency, parse_period
from stresskit.recovery.cases import CURE, FULL, KINDS, OPEN, SALE, WRITE_OFF
from stresskit.recovery.curves import recovery_curve
from stresskit.recovery.read import WorkoutData, read_workouts
from stresskit.recovery.rules import WORKOUT_RULES
from stresskit.spec.recovery import Recovery

AS_OF = parse_period("2025-12", Frequency.MONTH)

CASES = [
    ("a", "2024-01", "100", "2024-06", "R", "0.06", "north"),
    ("b", "2024-03-15", "200", "2024-10", "W", "0.06", "north"),
    ("c", "2025-02", "300", "", "", "0.12", "south"),
    ("d", "2024-05", "400", "2024-07", "C", "0.12", "south"),
    ("e", "2024-08", "500", "2025-01", "S", "0.00", "north"),
]
FLOWS = [
    ("a", "2024-02", "60", "1"), ("a", "2024-06", "45", ""), ("b", "2024-03", "20", "2"), ("b", "2024-09", "30", ""),
    ("c", "2025-06-30", "90", "3"), ("e", "2025-01", "250", "10"),
]  # fmt: skip


def study(**more: object) -> Recovery:
    return Recovery.model_validate(
        {
            "cases": "cases.csv",
            "columns": {
                "case": "id", "default": "bad_since", "amount": "owed", "closed": "shut", "kind": "how", "rate": "rate",
            },
            "kinds": {"full": ("R",), "write_off": ("W",), "cure": ("C",), "sale": ("S",)},
            "flows": {
                "file": "flows.csv",
                "columns": {"case": "id", "date": "day", "recovery": "got", "cost": "paid"},
            },
            "end": 24,
            "by": ("region",),
            **more,
        }
    )  # fmt: skip


def cases(*more: tuple[str, ...], base: list[tuple[str, ...]] | None = None) -> pd.DataFrame:
    columns = ["id", "bad_since", "owed", "shut", "how", "rate", "region"]
    return pd.DataFrame([*(CASES if base is None else base), *more], columns=columns, dtype=object)


def flows(*more: tuple[str, ...]) -> pd.DataFrame:
    return pd.DataFrame([*FLOWS, *more], columns=["id", "day", "got", "paid"], dtype=object)


def read(case_table: pd.DataFrame, flow_table: pd.DataFrame, **more: object) -> WorkoutData:
    return read_workouts(
        study(**more), base=Path(), frequency=Frequency.MONTH, as_of=AS_OF, cases=case_table, flows=flow_table
    )


def test_cases_and_flows_by_hand() -> None:
    data = read(cases(), flows())
    w = data.workouts
    assert list(w.case_ids) == ["a", "b", "c", "d", "e"]
    assert [KINDS[k] for k in w.kind] == ["full", "write_off", "open", "cure", "sale"]
    assert list(w.closed) == [5, 7, 0, 2, 5]
    assert list(w.observed) == [23, 21, 10, 19, 16]
    v = 1.0 / 1.005  # 6 % nominal, paid monthly
    # a: 60 after one month, 45 after five, which is more than was owed then: cut off at 100 in the money of default
    assert w.recovered[0, 0] == pytest.approx(60 * v, rel=1e-14)
    assert w.recovered[0, 4] == pytest.approx(min(45 * v**5, 100 - 60 * v), rel=1e-14)
    # b: what came in the month of default itself counts in the first workout month, not discounted
    assert w.recovered[1, 0] == 20.0
    assert w.recovered[1, 5] == pytest.approx(30 * v**6, rel=1e-14)
    assert w.costs[1, 0] == 2.0
    assert w.recovered[2, 3] == pytest.approx(90 / 1.01**4, rel=1e-14)
    assert w.recovered[4, 4] == 250.0
    assert list(w.static["region"]) == ["north", "north", "south", "south", "north"]
    assert (w.kind == np.array([FULL, WRITE_OFF, OPEN, CURE, SALE])).all()


def test_rates_and_discounting_other_ways() -> None:
    plain = read(cases(), flows(), discount="none").workouts
    assert plain.recovered[0, 4] == 40.0  # 45 paid, 40 still owed
    yearly = read(cases(), flows(), discount=0.12).workouts
    assert yearly.recovered[2, 3] == pytest.approx(90 * 1.12 ** (-4 / 12), rel=1e-14)


STRIKES = {
    "missing_case": (("", "2024-01", "10", "", "", "0", "north"), None),
    "case_copied": (CASES[2], None),
    "case_twice": (("c", "2025-02", "301", "", "", "0.12", "south"), None),
    "default_unreadable": (("x", "soon", "10", "", "", "0", "north"), None),
    "amount_not_positive": (("x", "2024-01", "0", "", "", "0", "north"), None),
    "kind_unknown": (("x", "2024-01", "10", "2024-02", "Q", "0", "north"), None),
    "kind_missing": (("x", "2024-01", "10", "2024-02", "", "0", "north"), None),
    "closing_missing": (("x", "2024-01", "10", "", "W", "0", "north"), None),
    "closed_before_default": (("x", "2024-03", "10", "2024-02", "W", "0", "north"), None),
    "rate_unreadable": (("x", "2024-03", "10", "", "", "six", "north"), None),
    "column_missing": (("x", "2024-03", "10", "", "", "0", ""), None),
    "not_observed": (("x", "2025-12", "10", "", "", "0", "north"), None),
    "closed_later": (("x", "2024-03", "10", "2026-02", "W", "0", "north"), None),
    "open_past_end": (("x", "2020-03", "10", "", "", "0", "north"), None),
    "flow_without_case": (None, ("zz", "2024-03", "1", "")),
    "flow_unreadable": (None, ("a", "2024-03", "one", "")),
    "flow_negative": (None, ("a", "2024-03", "-1", "")),
    "flow_before_default": (None, ("a", "2023-12", "1", "")),
    "flow_after_closing": (None, ("b", "2024-12", "1", "")),
    "flow_not_observed": (None, ("c", "2026-01", "1", "")),
    "flow_past_end": (("x", "2022-03", "10", "", "", "0", "north"), ("x", "2025-03", "1", "")),
    "recovered_above_amount": (None, ("c", "2025-03", "999", "")),
}
#: Cannot strike in these tables: they need columns of their own, see below.
ELSEWHERE = {"entry_unreadable", "closed_before_entry", "flow_before_entry", "loss_out_of_range"}


def test_every_rule_has_a_strike() -> None:
    assert set(STRIKES) | ELSEWHERE == set(WORKOUT_RULES)


@pytest.mark.parametrize("code", sorted(STRIKES))
def test_a_rule_strikes_is_counted_and_loses_nothing(code: str) -> None:
    case, flow = STRIKES[code]
    case_table, flow_table = cases(*([case] if case else [])), flows(*([flow] if flow else []))
    rule = WORKOUT_RULES[code]
    if rule.default == "reject":
        with pytest.raises(DataError, match=rf"\[{code}\].*found") as caught:
            read(case_table, flow_table)
        assert [p.code for p in caught.value.problems] == [code]
        softer = "leave_out"
    else:
        softer = rule.default
    data = read(case_table, flow_table, rules={code: softer})
    row = data.findings.set_index("code").loc[code]
    assert row["policy"] == softer
    assert row["count"] == (2 if code in ("case_twice", "recovered_above_amount") else 1)
    for name in ("cases", "flows"):
        part = data.reconciliation[data.reconciliation["table"] == name]
        total, parts = part[part["what"] == "in"], part[part["what"] != "in"]
        size = len(case_table) if name == "cases" else len(flow_table)
        assert int(total["count"].iloc[0]) == size == int(parts["count"].sum())
        assert total["amount"].iloc[0] == pytest.approx(parts["amount"].sum())
        assert total["recovered"].iloc[0] == pytest.approx(parts["recovered"].sum())


def test_all_problems_are_told_at_once() -> None:
    bad = cases(
        ("x", "2024-01", "10", "2024-02", "Q", "0", "north"),
        ("y", "2024-03", "10", "2024-02", "W", "0", "north"),
    )
    with pytest.raises(DataError) as caught:
        read(bad, flows(("a", "2024-03", "-1", "")))
    assert [p.code for p in caught.value.problems] == [
        "kind_unknown",
        "closed_before_default",
        "flow_negative",
    ]
    assert caught.value.problems[0].first == ("x",)
    assert "recovery.rules: {kind_unknown: leave_out}" in str(caught.value)


def test_unknown_rules_and_columns_are_named() -> None:
    with pytest.raises(TextError, match=r"no rule 'kind_unknwon'; did you mean 'kind_unknown'\?"):
        read(cases(), flows(), rules={"kind_unknwon": "leave_out"})
    with pytest.raises(TextError, match="not_observed: 'keep' is not possible; expected leave_out"):
        read(cases(), flows(), rules={"not_observed": "keep"})
    with pytest.raises(DataError, match="owed"):
        read(cases().rename(columns={"owed": "debt"}), flows())


def test_nothing_left_says_why() -> None:
    with pytest.raises(DataError, match=r"no workout is left[\s\S]*\[not_observed\]"):
        read(cases(base=[("x", "2025-12", "10", "", "", "0", "north")]), flows().iloc[:0])


def test_late_entry_counts_from_the_entry() -> None:
    """Owed 80 after two months; 20 more a month later: discounted to the entry, at risk from the third month."""
    case_table = cases(("x", "2024-01", "80", "", "", "0.12", "north")).assign(
        seen=["", "", "", "", "", "2024-03"]
    )
    columns = {**study().columns.model_dump(), "entry": "seen"}
    w = read(
        case_table, flows(("x", "2024-04", "20", ""), ("x", "2024-02", "5", "")), columns=columns
    ).workouts
    assert w.entered[-1] == 2
    assert w.recovered[-1, 2] == pytest.approx(20 / 1.01, rel=1e-14)
    assert w.recovered[-1, :2].sum() == 0.0
    more = recovery_curve(w).at_risk - recovery_curve(w.select(np.arange(5))).at_risk
    np.testing.assert_allclose(more[:4], [0.0, 0.0, 80.0, 80.0 - 20 / 1.01])
    late = case_table.assign(seen=["", "", "", "", "", "2023-03"])
    with pytest.raises(DataError, match="entry_unreadable"):
        read(late, flows(), columns=columns)
    shut = case_table.assign(
        shut=["2024-06", "2024-10", "", "2024-07", "2025-01", "2024-02"], how=["R", "W", "", "C", "S", "W"]
    )
    codes = read(shut, flows(), columns=columns).findings["code"]
    assert "closed_before_entry" in set(codes)


def test_final_losses_without_cash_flows() -> None:
    """A severity-only table: what was not lost came back at the closing, in the money of default."""
    frame = pd.DataFrame(
        {
            "id": ["a", "b", "c"], "bad": ["2024-01", "2024-01", "2025-01"], "owed": ["100", "50", "70"],
            "shut": ["2024-09", "2024-03", ""], "how": ["W", "R", ""], "lost": ["40", "0", ""],
        },
        dtype=object,
    )  # fmt: skip
    spec = Recovery.model_validate(
        {
            "cases": "x.csv", "end": 12, "discount": "none", "kinds": {"write_off": ("W",), "full": ("R",)},
            "columns": {"case": "id", "default": "bad", "amount": "owed", "closed": "shut", "kind": "how", "loss": "lost"},
        }
    )  # fmt: skip
    data = read_workouts(spec, base=Path(), frequency=Frequency.MONTH, as_of=AS_OF, cases=frame)
    w = data.workouts
    assert w.recovered[0, 7] == 60.0
    assert w.recovered[1, 1] == 50.0
    assert recovery_curve(w).lgd == pytest.approx((1 - 50 / 220) * (1 - 60 / 170))
    wrong = frame.assign(lost=["140", "0", ""])
    with pytest.raises(DataError, match="loss_out_of_range"):
        read_workouts(spec, base=Path(), frequency=Frequency.MONTH, as_of=AS_OF, cases=wrong)


def test_files_of_both_kinds_read_alike(tmp_path: Path) -> None:
    cases().to_csv(tmp_path / "cases.csv", index=False)
    flows().to_csv(tmp_path / "flows.csv", index=False)
    a = read_workouts(study(), base=tmp_path, frequency=Frequency.MONTH, as_of=AS_OF).workouts
    typed = cases().assign(owed=lambda f: f["owed"].astype(float), rate=lambda f: f["rate"].astype(float))
    typed.to_parquet(tmp_path / "cases.parquet")
    money = flows().assign(got=lambda f: f["got"].astype(float), paid=lambda f: pd.to_numeric(f["paid"]))
    money.to_parquet(tmp_path / "flows.parquet")
    spec = study(cases="cases.parquet", flows={**study().flows.model_dump(), "file": "flows.parquet"})  # type: ignore[union-attr]
    b = read_workouts(spec, base=tmp_path, frequency=Frequency.MONTH, as_of=AS_OF).workouts
    np.testing.assert_array_equal(a.recovered, b.recovered)
    np.testing.assert_array_equal(a.costs, b.costs)
    with pytest.raises(DataError, match="does not exist"):
        read_workouts(study(cases="gone.csv"), base=tmp_path, frequency=Frequency.MONTH, as_of=AS_OF)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"flows": None}, "without flows the case table needs columns.loss"),
        (
            {
                "discount": "rate",
                "columns": {"case": "id", "default": "d", "amount": "a", "closed": "c", "kind": "k"},
            },
            "discount: rate needs columns.rate",
        ),
        (
            {"columns": {"case": "id", "default": "d", "amount": "a", "closed": "c", "rate": "r"}},
            "closed and columns.kind belong together",
        ),
        ({"kinds": {"full": ("R",), "cure": ("R",)}}, "code 'R' stands under full too"),
        ({"by": ("region", "region")}, "column 'region' is stated twice"),
        ({"cure_hazard": {"terms": ()}}, "cure_hazard needs hazard beside it"),
    ],
)
def test_text_that_does_not_fit_together(change: dict, says: str) -> None:
    with pytest.raises(ValidationError, match=says):
        study(**change)
