"""Rows that stand for the same thing: copies of each other, or contradictions."""

from __future__ import annotations

import duckdb


def mark_twins(connection: duckdb.DuckDBPyConnection, *, keys: str, prefix: str = "") -> None:
    """Makes table ``{prefix}twins`` (rid, kind): 1 a copy too many, 2 one of several that contradict each other.

    keys: "k, t" or "k". Rows are compared in every column of table rows, so two rows that differ only in columns
    that nobody reads are copies. Which of the copies stays does not matter, as they are equal.
    """
    given = " AND ".join(f"{key.strip()} IS NOT NULL" for key in keys.split(","))
    connection.execute(
        f"CREATE TABLE {prefix}twin_keys AS SELECT {keys} FROM {prefix}rows WHERE {given} GROUP BY {keys} "
        "HAVING count(*) > 1"
    )
    connection.execute(
        f"CREATE TABLE {prefix}twins AS WITH doubled AS ("
        f"SELECT r.rowid AS rid, r AS content, {_of('r', keys)} FROM {prefix}rows AS r SEMI JOIN {prefix}twin_keys "
        f"USING ({keys})), grouped AS ("
        f"SELECT {keys}, count(DISTINCT content) AS kinds, min(rid) AS stays FROM doubled GROUP BY {keys}) "
        "SELECT rid, CASE WHEN kinds > 1 THEN 2 ELSE 1 END AS kind FROM doubled JOIN grouped "
        f"USING ({keys}) WHERE kinds > 1 OR rid <> stays"
    )


def _of(table: str, keys: str) -> str:
    return ", ".join(f"{table}.{key.strip()} AS {key.strip()}" for key in keys.split(","))
