"""The reconciliation: rows, loans, events and balance in = used + left out by reason, checked before it is handed on."""

from __future__ import annotations

from decimal import Decimal
from typing import Any

import duckdb
import pandas as pd

from stresskit.panel.judge import Judge
from stresskit.panel.plan import Plan

#: Exits recorded on rows that are used, which the risk set does not see.
AFTER_OBSERVATION = "event_after_observation"
UNDATED = "undated_payoff"

_COUNTS = ("rows", "loans", "events_default", "events_payoff")
_MONEY = "coalesce(TRY_CAST({} AS DECIMAL(38, 4)), 0)"


def reconcile(connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge) -> pd.DataFrame:
    """One line "in", one per reason for what was left out, one "used"; also makes table ``loan_reasons``.

    A row has one reason, the first that applies. A loan is used if one of its rows is, else it stands under
    the reason of its earliest row. balance is the sum of the balance column (or amount) over the rows, added in
    exact decimals of four places. Layout spells: a loan can be used while its exit is not (dated after the
    observed window, or a payoff without a date); such exits have lines of their own with no rows.
    Raises RuntimeError if a column does not close: that would be our bug.
    """
    connection.execute(
        "CREATE TABLE loan_reasons AS SELECT k, CASE WHEN bool_or(reason IS NULL) THEN 0 ELSE "
        "(min(coalesce(t, 1000000)::BIGINT * 10000 + reason) % 10000) END::INTEGER AS reason "
        "FROM verdict WHERE k IS NOT NULL GROUP BY k"
    )
    by_loan = dict(connection.execute("SELECT reason, count(*) FROM loan_reasons GROUP BY reason").fetchall())
    total = _total(connection, plan)
    lines, used = _lines(connection, plan, judge, by_loan)
    table = [("in", "", total), *(("left out", reason, line) for reason, line in lines), ("used", "", used)]
    for i, name in enumerate((*_COUNTS, "balance")):
        parts = sum((line[i] for what, _, line in table if what != "in"), start=0)
        if parts != total[i]:
            raise RuntimeError(
                f"the reconciliation does not close: {name} in {total[i]}, used and left out {parts}"
            )
    records = [
        {
            "what": what,
            "reason": reason,
            **dict(zip(_COUNTS, line[:4], strict=True)),
            "balance": float(line[4]),
        }
        for what, reason, line in table
    ]
    return pd.DataFrame.from_records(records)


Line = tuple[int, int, int, int, Decimal]


def _total(connection: duckdb.DuckDBPyConnection, plan: Plan) -> Line:
    """Counted over the parsed rows, before any rule."""
    money = "bal" if plan.columns.balance else "amount"
    row = connection.execute(
        "SELECT count(*), (SELECT count(*) FROM loans), count(*) FILTER (WHERE out = 1), "
        f"count(*) FILTER (WHERE out = 2), coalesce(sum({_MONEY.format(money)}), 0) FROM rows"
    ).fetchone()
    return _line(row or (0, 0, 0, 0, 0))


def _lines(
    connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, by_loan: dict[int, int]
) -> tuple[list[tuple[str, Line]], Line]:
    undated = "exit_t IS NULL" if plan.layout == "spells" else "false"
    rows = connection.execute(
        "SELECT reason, count(*), count(*) FILTER (WHERE out = 1), count(*) FILTER (WHERE out = 2), "
        f"sum({_MONEY.format('money')}), count(*) FILTER (WHERE cause = 1), count(*) FILTER (WHERE cause = 2), "
        f"count(*) FILTER (WHERE out = 2 AND cause = 0 AND {undated}) FROM verdict GROUP BY reason ORDER BY reason"
    ).fetchall()
    lines: list[tuple[str, Line]] = []
    later: list[tuple[str, Line]] = []
    used: Line = (0, 0, 0, 0, Decimal(0))
    for reason, n, defaults, payoffs, balance, default_used, payoff_used, payoff_undated in rows:
        if reason is not None:
            lines.append(
                (judge.reason_text(reason), _line((n, by_loan.get(reason, 0), defaults, payoffs, balance)))
            )
            continue
        used = _line((n, by_loan.get(0, 0), default_used, payoff_used, balance))
        beyond = (0, 0, defaults - default_used, payoffs - payoff_used - payoff_undated, 0)
        later = [(AFTER_OBSERVATION, _line(beyond)), (UNDATED, _line((0, 0, 0, payoff_undated, 0)))]
    return lines + [(reason, line) for reason, line in later if any(line)], used


def _line(values: tuple[Any, ...]) -> Line:
    n, loans, defaults, payoffs, balance = values
    return int(n), int(loans), int(defaults), int(payoffs), Decimal(balance)
