"""Layout panel: from parsed rows to a verdict on every row, and one line of facts per loan."""

from __future__ import annotations

import duckdb

from stresskit.core.errors import Problem
from stresskit.core.period import format_period
from stresskit.panel.judge import Judge
from stresskit.panel.parse import Parsed
from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Columns
from stresskit.panel.rules.counts import count_bad
from stresskit.panel.twins import mark_twins


def judge_panel(connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, parsed: Parsed) -> None:
    """Creates ``facts`` (a row per loan), view ``verdict`` (a row per input row) and ``stays``.

    verdict  k, t, age, out, cause, money, reason (NULL: at risk), and what the rules of step "observed" read
    facts    k, o, and of the last row: last_t, mat, bal, amount, rate, w0.. (moving columns); exit_t and exit_out
             of the first exit; c0.. (static columns, value of the first row that has one); reason
    stays    k, origin, entry, exit, cause
    """
    mark_twins(connection, keys="k, t")
    connection.execute(
        "CREATE VIEW judged AS SELECT *, " + judge.reason_sql("row") + " AS reason FROM (SELECT r.*, "
        "coalesce(w.kind, 0) AS twin FROM rows AS r LEFT JOIN twins AS w ON w.rid = r.rowid)"
    )
    judge.survey("row", "judged", period=True, notes=row_notes(parsed))
    if parsed.per_quarter:
        _several_per_quarter(connection, judge, parsed.n_rows)
    connection.execute(_facts_sql(judge, judge.columns))
    judge.survey("loan", "facts", period=False)
    connection.execute(_seen_sql(plan, judge.columns))
    connection.execute(
        "CREATE VIEW verdict AS SELECT *, out AS cause, "
        f"{'bal' if plan.columns.balance else 'amount'} AS money, "
        f"coalesce(row_reason, loan_reason, {judge.reason_sql('observed')}) AS reason FROM seen"
    )
    judge.survey("observed", "verdict", period=True, notes=rate_notes(plan))
    connection.execute(
        "CREATE TABLE stays AS SELECT k, (min(t) - min(age))::INTEGER AS origin, (min(age) - 1)::INTEGER AS entry, "
        "max(age)::INTEGER AS exit, max(out)::INTEGER AS cause FROM (SELECT k, t, age, out, "
        "t - row_number() OVER (PARTITION BY k ORDER BY t) AS island FROM verdict WHERE reason IS NULL) "
        "GROUP BY k, island"
    )


def _several_per_quarter(connection: duckdb.DuckDBPyConnection, judge: Judge, n_rows: int) -> None:
    """A problem when most rows share loan and quarter with another and months differ: a monthly panel."""
    (shared,) = connection.execute("SELECT count(*) FROM twins").fetchone() or (0,)
    if 2 * shared <= n_rows:
        return
    first = connection.execute(
        "SELECT DISTINCT loan, t FROM twin_keys JOIN loans USING (k) ORDER BY loan, t LIMIT 5"
    ).fetchall()
    judge.problems.append(
        Problem("several_rows_per_quarter", f"loans have several rows in a quarter, in different months: most of the "
                f"{n_rows:,} rows could not be used", shared,
                tuple(f"{loan} @ {format_period(t, judge.plan.calendar)}" for loan, t in first),
                "The panel looks monthly: set frequency: month, or keep one row per loan and quarter.")
    )  # fmt: skip


def rate_notes(plan: Plan) -> dict[str, str]:
    """Names the place of a rate that no column holds."""
    if plan.columns.rate is not None or plan.assumed_rate is None:
        return {}
    return {
        "rate_implausible": f"loans.assume.rate is {plan.assumed_rate:.6g} ({plan.assumed_rate * 100:.6g} %) a year."
    }


def row_notes(parsed: Parsed) -> dict[str, str]:
    """Texts that could not be understood, to stand in the findings about them."""
    notes: dict[str, str] = {}
    if parsed.unreadable:
        words = "Not understood: " + ", ".join(map(repr, parsed.unreadable)) + "."
        notes |= {"unreadable_period": words, "unreadable_date": words}
    if parsed.unknown:
        notes["unknown_status"] = "Not declared: " + ", ".join(map(repr, parsed.unknown)) + "."
    return notes


def once_sql(columns: Columns) -> str:
    """Columns once_i: the loan is the only one with its category."""
    alone = "" if columns.count is None else f" AND c{columns.count} <= 1"
    parts = [
        f", c{i} IS NOT NULL AND count(*) OVER (PARTITION BY c{i}) = 1{alone} AS once{i}"
        for name, i in columns.static.items()
        if name not in columns.numbers
    ]
    return "".join(parts)


def _facts_sql(judge: Judge, columns: Columns) -> str:
    """First, last and exit of every loan over the rows that no row rule left out (loan and period are unique there)."""
    static = "".join(
        f", arg_min(c{i}, t) AS c{i}, coalesce(min(c{i}) <> max(c{i}), false) AS moved{i}"
        for i in columns.static.values()
    )
    moving = "".join(f", arg_max_null(v{i}, t) AS w{i}" for i in columns.moving.values())
    if columns.count is not None:
        moving += f", bool_or({count_bad(columns)}) AS count_bad"
    inner = (
        "SELECT k, arg_min(o, t) AS o, min(o) <> max(o) AS o_moves, bool_or(term_bad) AS term_bad, max(t) AS last_t, "
        "arg_max(mat, t) AS mat, arg_max_null(bal, t) AS bal, arg_max(amount, t) AS amount, "
        "arg_max_null(rate, t) AS rate, min(t) FILTER (WHERE out > 0) AS exit_t, "
        f"arg_min(out, t) FILTER (WHERE out > 0) AS exit_out{static}{moving} FROM judged WHERE reason IS NULL GROUP BY k"
    )
    return (
        f"CREATE TABLE facts AS SELECT *, {judge.reason_sql('loan')} AS reason "
        f"FROM (SELECT *{once_sql(columns)} FROM ({inner}))"
    )


def _seen_sql(plan: Plan, columns: Columns) -> str:
    """Every row with its predecessor. Rows that a row rule left out are nobody's predecessor."""
    moving = []
    for carried in plan.moving:
        i = columns.moving[carried.name]
        moving.append(f", lag(v{i}) OVER before AS m{i}" if carried.moves == "varying" else f", v{i} AS m{i}")
    names = "".join(f", w.m{i}" for i in columns.moving.values())
    if plan.contract_rows:
        moving.append(", lag(bal) OVER before AS bal_before, lag(rate) OVER before AS rate_before")
        names += ", w.bal_before, w.rate_before"
    if columns.count is not None:
        names += f", f.c{columns.count} AS n"
    return (
        "CREATE TABLE seen AS SELECT w.k, w.t, (w.t - f.o + 1)::INTEGER AS age, w.out, w.bal, w.amount, w.rate, w.mat, "
        "w.t_before, w.t_before IS NULL AS is_first, coalesce(w.t > f.exit_t, false) AS after_exit, w.row_reason, "
        f"f.reason AS loan_reason{names} FROM (SELECT k, t, out, bal, amount, rate, mat, reason AS row_reason, "
        f"lag(t) OVER before AS t_before{''.join(moving)} FROM judged "
        "WINDOW before AS (PARTITION BY k, reason IS NULL ORDER BY t)) AS w LEFT JOIN facts AS f ON f.k = w.k"
    )
