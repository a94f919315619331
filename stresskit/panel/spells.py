"""Layout spells: from one parsed row per loan to the stretch of its life in which it was observed at risk."""

from __future__ import annotations

import duckdb

from stresskit.panel.history import once_sql, rate_notes, row_notes
from stresskit.panel.judge import Judge
from stresskit.panel.parse import Parsed
from stresskit.panel.plan import Plan
from stresskit.panel.rules.base import Columns
from stresskit.panel.rules.counts import count_bad
from stresskit.panel.twins import mark_twins
from stresskit.spec.study import SpellOutcome

_ALL = ("entry", "seen", "dd", "pd")


def judge_spells(connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, parsed: Parsed) -> None:
    """Creates ``facts``, view ``verdict`` and ``stays`` as :func:`stresskit.panel.history.judge_panel` does.

    exit_t  period of the exit as the study dates it, NULL without one
    last_t  last period in which the loan's state counts as observed:
            the exit, or for loans without one last_seen, else the contract end; never after window_end
    cause   the exit if it lies in the window, else 0: the loan was censored there
    """
    columns = judge.columns
    present = {row[0] for row in connection.execute("DESCRIBE rows").fetchall()}
    absent = "".join(f", NULL::INTEGER AS {name}" for name in _ALL if name not in present)
    mark_twins(connection, keys="k")
    connection.execute(
        "CREATE VIEW judged AS SELECT *, "
        + judge.reason_sql("row")
        + f" AS reason FROM (SELECT r.*{absent}, "
        "coalesce(w.kind, 0) AS twin, r.rowid AS rid FROM rows AS r LEFT JOIN twins AS w ON w.rid = r.rowid)"
    )
    judge.survey("row", "judged", period=False, notes=row_notes(parsed))
    connection.execute(_facts_sql(plan, judge, columns))
    judge.survey("loan", "facts", period=False)
    connection.execute(_seen_sql(plan))
    connection.execute(
        "CREATE VIEW verdict AS SELECT *, "
        f"{'bal' if plan.columns.balance else 'amount'} AS money, "
        f"coalesce(row_reason, loan_reason, {judge.reason_sql('observed')}) AS reason FROM seen"
    )
    judge.survey("observed", "verdict", period=False, notes=rate_notes(plan))
    connection.execute(
        "CREATE TABLE stays AS SELECT k, o - 1 AS origin, entry_age AS entry, exit_age AS exit, cause FROM verdict "
        "WHERE reason IS NULL"
    )


def _facts_sql(plan: Plan, judge: Judge, columns: Columns) -> str:
    o = plan.outcome
    moved = isinstance(o, SpellOutcome) and o.default_after_maturity == "date_at_maturity"
    default = "least(dd, coalesce(mat, dd))" if moved else "dd"
    static = "".join(f", c{i}" for i in columns.static.values())
    if columns.count is not None:
        static += f", {count_bad(columns)} AS count_bad"
    inner = (
        "SELECT k, o, mat, term_bad, entry, seen, dd, pd, out, bal, amount, rate, "
        f"CASE out WHEN 1 THEN {default} WHEN 2 THEN pd END AS exit_t{static} FROM judged WHERE reason IS NULL"
    )
    return (
        f"CREATE TABLE facts AS SELECT *, out AS exit_out, {judge.reason_sql('loan')} AS reason "
        f"FROM (SELECT *{once_sql(columns)} FROM ({inner}))"
    )


def _seen_sql(plan: Plan) -> str:
    end = plan.window_end
    last = (
        f"CASE WHEN f.exit_t IS NOT NULL THEN least(f.exit_t, {end}) "
        f"WHEN f.out <> 2 AND f.seen IS NOT NULL THEN least(f.seen, {end}) "
        f"ELSE least(coalesce(f.mat, {end}), {end}) END"
    )
    return (
        "CREATE TABLE seen AS SELECT *, (last_t - o + 1)::INTEGER AS exit_age, "
        "(greatest(coalesce(entry, o), o) - o)::INTEGER AS entry_age, "
        f"(CASE WHEN exit_t <= {end} THEN out ELSE 0 END)::INTEGER AS cause "
        "FROM (SELECT j.k, NULL::INTEGER AS t, f.o, f.mat, f.entry, j.out, j.bal, j.amount, j.rate, f.exit_t, "
        f"{last} AS last_t, j.reason AS row_reason, f.reason AS loan_reason "
        "FROM judged AS j LEFT JOIN facts AS f ON f.k = j.k AND j.reason IS NULL)"
    )
