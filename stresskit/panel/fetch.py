"""From the finished tables to arrays."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import duckdb
import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import RiskSet
from stresskit.panel.parse import Parsed
from stresskit.panel.plan import Plan

#: The category of loans whose category is not known.
MISSING = "(missing)"


def numbers(column: Any) -> NDArray[np.float64]:
    """A fetched column as float64, NULL as NaN."""
    return np.ma.filled(np.ma.asarray(column).astype(np.float64), np.nan)


def integers(column: Any, null: int = 0) -> NDArray[np.int64]:
    return np.ma.filled(np.ma.asarray(column).astype(np.int64), null)


def texts(column: Any) -> NDArray[Any]:
    """A fetched column of text; NULL becomes "(no identifier)"."""
    return np.ma.filled(np.ma.asarray(column).astype(object), "(no identifier)")


def carried(column: Any, levels: tuple[str, ...] | None) -> NDArray[Any]:
    """Values of a carried column: float64, or with ``levels`` the text behind the codes."""
    if levels is None:
        return numbers(column)
    names = np.array([*levels, MISSING], dtype=object)
    return names[integers(column, len(levels))]


def fetch(connection: duckdb.DuckDBPyConnection, sql: str) -> dict[str, Any]:
    found: dict[str, Any] = connection.execute(sql).fetchnumpy()
    return found


def fetch_risk_set(connection: duckdb.DuckDBPyConnection, plan: Plan, parsed: Parsed) -> RiskSet:
    """The risk set of tables stays, facts and verdict: loans in the order of their identifiers, stays by age."""
    columns, levels = parsed.columns, parsed.levels
    stays = fetch(connection, "SELECT k, origin, entry, exit, cause FROM stays ORDER BY k, entry")
    used, index = np.unique(integers(stays["k"]), return_inverse=True)
    static_sql = "".join(f", c{i}" for i in columns.static.values())
    loans = fetch(
        connection,
        f"SELECT loan{static_sql} FROM facts JOIN loans USING (k) WHERE k IN (SELECT k FROM stays) ORDER BY k",
    )
    moving: Mapping[str, NDArray[Any]] = {}
    along = {c.name: columns.moving[c.name] for c in plan.moving if c.rows}
    if along:
        wanted = ", ".join(f"m{i}" for i in along.values())
        rows = fetch(connection, f"SELECT {wanted} FROM verdict WHERE reason IS NULL ORDER BY k, t")
        moving = {name: carried(rows[f"m{i}"], levels.get(name)) for name, i in along.items()}
    if len(used) != len(loans["loan"]):
        raise RuntimeError(f"{len(used)} loans have stays, {len(loans['loan'])} have facts")
    return RiskSet(
        frequency=plan.calendar,
        causes=plan.causes,
        loan_ids=texts(loans["loan"]),
        static={
            name: carried(loans[f"c{i}"], levels.get(name))
            for name, i in columns.static.items()
            if name != plan.hidden
        },
        stay_loan=index.astype(np.int64),
        stay_origin=integers(stays["origin"]),
        stay_entry=integers(stays["entry"]),
        stay_exit=integers(stays["exit"]),
        stay_cause=integers(stays["cause"]),
        weight=np.ones(len(index)) if columns.count is None else numbers(loans[f"c{columns.count}"])[index],
        moving=moving,
        count=plan.columns.count or "",
    )
