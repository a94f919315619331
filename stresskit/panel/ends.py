"""What can be judged only when the risk set is complete: columns that look ahead, levels without defaults, no events."""

from __future__ import annotations

import duckdb

from stresskit.core.errors import Problem
from stresskit.panel.fetch import MISSING
from stresskit.panel.judge import Judge
from stresskit.panel.parse import Parsed
from stresskit.panel.plan import Carried, Plan
from stresskit.panel.rules.content import SEGMENT_WITHOUT_DEFAULTS
from stresskit.panel.rules.lookahead import LOOK_AHEAD, level_betrays, number_betrays


def judge_ends(connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, parsed: Parsed) -> None:
    """Files the findings of step "end" on the history, and problems where a hazard has nothing to work with."""
    looking = [c.name for c in plan.carried if _looks_ahead(connection, plan, parsed, c)]
    if looking:
        judge.file(LOOK_AHEAD, len(looking), looking)
    # fetched to its end: a frame for the book cannot be registered while a result is open
    ((stays, defaults, payoffs),) = connection.execute(
        "SELECT count(*), count(*) FILTER (WHERE cause = 1), count(*) FILTER (WHERE cause = 2) FROM stays"
    ).fetchall()
    if stays == 0:
        judge.problems.append(
            Problem("no_rows_at_risk", "no row is left in which a loan was at risk", 1, (),
                    "Rows by the reason they were left out for: " + _reasons(connection, judge)
                    + ". What follows says why." * bool(judge.taken))
        )  # fmt: skip
        judge.problems += judge.taken
        return
    for cause, found in (("default", defaults), ("payoff", payoffs)):
        if cause in plan.hazards and found == 0:
            judge.problems.append(
                Problem("no_events", f"no {cause} among the rows at risk, but the study has hazards.{cause}", 1, (),
                        _no_events(connection, plan, judge, parsed, cause))
            )  # fmt: skip
    if defaults:
        without = _levels_without_defaults(connection, plan, parsed)
        if without:
            judge.file(SEGMENT_WITHOUT_DEFAULTS, len(without), without)


def _no_events(
    connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, parsed: Parsed, cause: str
) -> str:
    """What the outcome's columns hold, where events of this cause were lost, and what to do."""
    held = [
        f"Column {c!r} holds {', '.join(map(repr, codes)) or 'nothing'}" for c, codes in parsed.codes.items()
    ]
    wanted = getattr(plan.outcome, cause, ())
    asked = f"; loans.outcome.{cause} names {', '.join(map(repr, wanted))}" if wanted else ""
    lost = _reasons(connection, judge, f"WHERE out = {1 + (cause == 'payoff')}")
    words = f"{', and '.join(held)}{asked}."
    if lost:
        words += f" Rows with a {cause} that were left out: {lost}."
    last = "; nothing can be estimated without a default." if cause == "default" else ", or drop the hazard."
    return f"{words} Check the codes and dates under loans.outcome{last}"


def _reasons(connection: duckdb.DuckDBPyConnection, judge: Judge, which: str = "") -> str:
    rows = connection.execute(
        f"SELECT reason, count(*) FROM verdict {which} GROUP BY reason ORDER BY 2 DESC, 1"
    ).fetchall()
    return ", ".join(f"{judge.reason_text(reason)} {count:,}" for reason, count in rows if reason is not None)


def _looks_ahead(connection: duckdb.DuckDBPyConnection, plan: Plan, parsed: Parsed, column: Carried) -> bool:
    """A lagged column over the loan's rows up to its exit, or a static number that a hazard uses over the loans."""
    number = column.name in parsed.columns.numbers
    counted = parsed.columns.count is not None
    if column.moves == "lagged":
        value = f"m{parsed.columns.moving[column.name]}"
        rows = "seen WHERE row_reason IS NULL AND NOT after_exit"
        if not number:
            test = f"SELECT {value} FROM {rows} GROUP BY {value} HAVING {level_betrays(event='out > 0', count='n' if counted else None)}"
            return connection.execute(test).fetchone() is not None
        tests = [
            f"SELECT {number_betrays(value=value, event=f'out = {k}', count='n' if counted else None)} FROM {rows} AND out IN (0, {k})"
            for k in range(1, len(plan.causes) + 1)
        ]
    elif column.moves == "no" and number and any(place.startswith("hazards.") for place in column.used):
        value = f"c{parsed.columns.static[column.name]}"
        count = f"c{parsed.columns.count}" if counted else None
        betrays = number_betrays(value=value, event="coalesce(exit_out, 0) = 1", emptied=False, count=count)
        tests = [f"SELECT {betrays} FROM facts WHERE reason IS NULL"]
    else:
        return False
    return any((connection.execute(test).fetchone() or (False,))[0] for test in tests)


def _levels_without_defaults(connection: duckdb.DuckDBPyConnection, plan: Plan, parsed: Parsed) -> list[str]:
    """ "column=level" of every segment or category of the default hazard that is at risk and never defaults."""
    found = []
    for name in dict.fromkeys([*plan.segments, *plan.hazard_categories]):
        if name in parsed.columns.static:
            code, cause = f"c{parsed.columns.static[name]}", "cause"
            rows = "stays JOIN facts USING (k)"
        else:
            code, cause = f"m{parsed.columns.moving[name]}", "out"
            rows = "verdict WHERE reason IS NULL"
        levels = (*parsed.levels[name], MISSING)
        codes = connection.execute(
            f"SELECT coalesce({code}, {len(levels) - 1}) AS code FROM {rows} GROUP BY 1 "
            f"HAVING count(*) FILTER (WHERE {cause} = 1) = 0 ORDER BY 1"
        ).fetchall()
        found += [f"{name}={levels[row[0]]}" for row in codes]
    return found
