"""Random dirty panels: what SQL makes of them equals a plain loop; order and names of loans do not matter."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, format_period
from stresskit.panel.result import LoanData
from tests.panel.oracle import Loop, walk
from tests.panel.worlds import assert_closes, month, run, stays

AS_OF = month("2020-06")
OUTCOME = {"column": "state", "default": ["D"], "payoff": ["P"], "performing": ["C", "A"]}
RATED = {"default": {"terms": [{"age": "linear"}, {"loan": "score"}]}}


def dirty_rows(rng: np.random.Generator, loans: int) -> list[dict[str, Any]]:
    """Loans of up to 14 months with every kind of trouble that the default policies meet row by row."""
    rows: list[dict[str, Any]] = []
    for i in range(loans):
        start = AS_OF - int(rng.integers(0, 16))
        opened = start - int(rng.choice([0, 0, 0, 2, 30])) + int(rng.random() < 0.1)
        matures = AS_OF + int(rng.integers(-3, 20))
        for j in range(int(rng.integers(1, 15))):
            if rng.random() < 0.07:
                continue
            row = {
                "id": f"L{i}" if rng.random() < 0.98 else " ",
                "month": format_period(start + j, Frequency.MONTH),
                "state": str(rng.choice(["C", "A", "D", "P", "X"], p=[0.8, 0.08, 0.05, 0.05, 0.02])),
                "opened": format_period(opened, Frequency.MONTH),
                "matures": format_period(matures, Frequency.MONTH),
                "owed": str(round(float(rng.uniform(-5, 500)), 2)),
                "interest": "0.04",
                "score": str(int(rng.integers(0, 9))),
            }
            for column, value, chance in (
                ("month", "soon", 0.01), ("opened", None, 0.01), ("opened", "2017-03", 0.01), ("owed", None, 0.02),
                ("score", None, 0.08), ("interest", "NA", 0.02), ("matures", None, 0.02),
            ):  # fmt: skip
                if rng.random() < chance:
                    row[column] = value
            rows.append(row)
            if rng.random() < 0.03:
                rows.append(dict(row))
            if rng.random() < 0.02:
                rows.append(row | {"owed": "1.5"})
    return rows


def _loop(
    seed: int, first_row: str, until: str | None, moves: str | None
) -> tuple[Loop, list[dict[str, Any]]]:
    rows = dirty_rows(np.random.default_rng(seed), 60)
    loop = walk(
        rows,
        as_of=AS_OF,
        observed_until=None if until is None else month(until),
        at_risk_first=first_row == "at_risk",
        declared="CADP",
        varying="score" if moves == "varying" else None,
        lagged="score" if moves == "lagged" else None,
    )
    return loop, rows


CASES = [
    (seed, first_row, until, moves)
    for seed, (first_row, until, moves) in enumerate(
        [
            ("entry", None, None), ("at_risk", None, None), ("entry", "2020-04", None), ("entry", None, "varying"),
            ("entry", None, "lagged"), ("at_risk", None, "varying"), ("at_risk", "2020-05", "lagged"),
            ("entry", "2020-04", "varying"),
        ] * 3
    )
]  # fmt: skip


@pytest.mark.parametrize(("seed", "first_row", "until", "moves"), CASES)
def test_sql_equals_the_loop(seed: int, first_row: str, until: str | None, moves: str | None) -> None:
    loop, rows = _loop(seed, first_row, until, moves)
    loans: dict[str, Any] = {"outcome": OUTCOME, "first_row": first_row, "observed_until": until}
    if moves:
        loans[moves] = ["score"]
    data = run(rows, False, loans=loans, **({"hazards": RATED} if moves else {}))
    assert stays(data.risk_set) == loop.stays
    if moves:
        assert data.risk_set.moving["score"].tolist() == loop.moving
    table = data.reconciliation
    parts = table[table["what"] != "in"].assign(
        reason=lambda t: t["reason"].where(t["what"] != "used", "used")
    )
    found = parts.set_index("reason")
    assert dict(found["rows"].items()) == dict(loop.rows)
    assert {k: v for k, v in found["events_default"].items() if v} == {
        k: v for k, v in loop.defaults.items() if v
    }
    assert {k: v for k, v in found["events_payoff"].items() if v} == {
        k: v for k, v in loop.payoffs.items() if v
    }
    assert {k: v for k, v in found["loans"].items() if v} == dict(loop.loans)
    for reason, amounts in loop.money.items():
        assert found.loc[reason, "balance"] == pytest.approx(math.fsum(amounts), abs=1e-9)
    assert_closes(data)
    assert table.loc[0, "rows"] == len(rows)
    book = data.portfolio
    assert {
        str(n): (int(a), int(r), float(b))
        for n, a, r, b in zip(book.loan_ids, book.age, book.remaining, book.balance, strict=True)
    } == loop.on_book
    names = {str(row["id"]).strip() for row in rows} - {""}
    assert set(map(str, book.loan_ids)) | set(data.not_projected["loan"]) == names
    assert len(book.loan_ids) + len(data.not_projected) == len(names)


def test_the_random_panels_hold_every_reason() -> None:
    """A loop that never meets a case proves nothing about it."""
    reasons = set()
    for case in CASES:
        reasons |= set(_loop(*case)[0].rows)
    assert reasons == {
        "missing_loan", "unreadable_period", "after_as_of", "duplicate_exact", "duplicate_conflicting",
        "missing_origination", "period_before_origination", "unknown_status", "term_not_positive", "origination_changes",
        "after_observed_until", "after_event", "entry_row", "after_gap", "no_previous_row",
        "missing_value_in_row: score", "used",
    }  # fmt: skip


def _bits(data: LoanData) -> list[bytes | tuple[Any, ...]]:
    risk, book = data.risk_set, data.portfolio
    parts: list[Any] = [risk.stay_loan, risk.stay_origin, risk.stay_entry, risk.stay_exit, risk.stay_cause]
    parts += [risk.moving["score"], book.age, book.remaining, book.balance, book.rate]
    return [p.tobytes() for p in parts] + [tuple(risk.loan_ids), tuple(book.loan_ids)]


def _run(rows: Sequence[dict[str, Any]]) -> LoanData:
    return run(list(rows), False, hazards=RATED, loans={"outcome": OUTCOME, "varying": ["score"]})


@pytest.mark.parametrize("seed", [101, 102, 103])
def test_reordering_rows_changes_no_bit(seed: int) -> None:
    rng = np.random.default_rng(seed)
    rows = dirty_rows(rng, 60)
    one = _run(rows)
    other = _run([rows[i] for i in rng.permutation(len(rows))])
    assert _bits(one) == _bits(other)
    assert one.findings == other.findings
    assert one.reconciliation.equals(other.reconciliation)
    assert one.not_projected.equals(other.not_projected)


def test_relabelling_loans_changes_only_names() -> None:
    rng = np.random.default_rng(104)
    rows = dirty_rows(rng, 40)
    names = {f"L{i}": f"é{rng.integers(10**6):06d}-{i}" for i in range(40)}
    renamed = [row | {"id": names.get(row["id"], row["id"])} for row in rows]
    one, other = _run(rows), _run(renamed)
    assert {(names[s[0]], *s[1:]) for s in stays(one.risk_set)} == set(stays(other.risk_set))
    assert [str(n) for n in other.risk_set.loan_ids] == sorted(str(n) for n in other.risk_set.loan_ids)
    assert one.reconciliation.equals(other.reconciliation)


def test_one_loan_more_changes_nothing_for_the_others() -> None:
    rows = dirty_rows(np.random.default_rng(105), 30)
    extra = [row | {"id": "ZZ"} for row in rows if row["id"] == "L3"]
    one, more = _run(rows), _run(rows + extra)
    assert [s for s in stays(more.risk_set) if s[0] != "ZZ"] == stays(one.risk_set)


def test_a_panel_of_nothing_but_dirt_says_so() -> None:
    with pytest.raises(DataError, match="no row is left"):
        _run([row | {"month": "soon"} for row in dirty_rows(np.random.default_rng(106), 3)])
