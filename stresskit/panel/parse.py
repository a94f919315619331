"""From a source to table ``rows``: one parsed row per input row, every text looked up once.

Column names of the table are those of :mod:`stresskit.panel.rules.base`, step "row", and c0, c1, .. for
static, v0, v1, .. for moving columns (categories as codes into their list of levels).
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping
from dataclasses import dataclass

import duckdb

from stresskit.core.errors import DataError, UsageError
from stresskit.core.period import Frequency
from stresskit.panel import cells
from stresskit.panel.plan import Carried, Plan, role_columns
from stresskit.panel.rules.base import Columns
from stresskit.panel.source import Source, literal, plain_errors
from stresskit.spec.study import FlagOutcome

#: Largest number of columns read as number or date: each has one bit of a 64-bit integer.
_MOST_COLUMNS = 62


@dataclass(frozen=True, slots=True)
class Parsed:
    """What parsing found out beside the table.

    columns     bits, dates and places of the carried columns
    levels      carried category -> its levels, sorted; codes 0.. point into it
    n_rows      rows of the source
    unreadable  up to five period texts that mean nothing, for messages
    unknown     up to five status codes that are not declared
    """

    columns: Columns
    levels: Mapping[str, tuple[str, ...]]
    n_rows: int
    unreadable: tuple[str, ...]
    unknown: tuple[str, ...]


def parse(
    connection: duckdb.DuckDBPyConnection, source: Source, plan: Plan, *, prefix: str = "", book: bool = False
) -> Parsed:
    """Creates tables ``{prefix}loans`` (loan, k) and ``{prefix}rows`` from ``source``.

    book: the source is the portfolio's own file, a row per loan without outcome. Raises DataError for missing
    columns, columns of the wrong type, no rows, and files that cannot be read.
    """
    _check_columns(source, role_columns(plan, book=book))
    dates, numbers = _date_roles(plan, book), _number_roles(plan)
    unsure = [c.name for c in plan.carried if c.kind == "undecided"]
    with plain_errors(source):
        found = _scan(connection, source, plan, list(dates.values()), unsure, book)
        if found.n_rows == 0:
            raise DataError(f"{source.name} has no rows")
        carried_numbers = frozenset(c.name for c in plan.carried if c.kind == "number") | found.numbers
        problems = cells.check_kinds(source, dict.fromkeys([*numbers.values(), *carried_numbers]))
        if problems:
            raise DataError(f"{source.name} cannot be read", problems)
        unreadable = cells.make_labels(
            connection,
            f"{prefix}labels",
            found.labels,
            calendar=plan.calendar,
            counter_month=plan.counter_month,
        )
        columns = _places(plan, dates, numbers, carried_numbers)
        levels = {}
        for carried in plan.carried:
            if carried.name not in carried_numbers:
                levels[carried.name] = _levels(connection, source, carried, prefix, plan)
        _loans(connection, source, plan, prefix)
        connection.execute(_rows_sql(source, plan, columns, dates, numbers, prefix=prefix, book=book))
    (made,) = connection.execute(f"SELECT count(*) FROM {prefix}rows").fetchone() or (0,)
    if made != found.n_rows:
        raise RuntimeError(f"{source.name}: {found.n_rows} rows read, {made} parsed")
    return Parsed(columns, levels, found.n_rows, tuple(sorted(unreadable)[:5]), found.unknown)


def _check_columns(source: Source, roles: Mapping[str, str]) -> None:
    lacking = {place: column for place, column in roles.items() if column not in source.types}
    if lacking:
        lower = {name.lower(): name for name in source.types}
        near = {}
        for column in lacking.values():
            close = difflib.get_close_matches(column.lower(), lower, n=1)
            near[column] = lower[close[0]] if close else None
        raise cells.missing_columns(source, lacking, near)


def _date_roles(plan: Plan, book: bool) -> dict[str, str]:
    """Name in table rows -> column, for everything that is a period or date."""
    c, o = plan.columns, plan.outcome
    roles = {"o": c.origination, "mat": c.maturity}
    if plan.layout == "panel" and not book:
        roles = {"t": c.period, **roles}
    if plan.layout == "spells" and not book:
        roles |= {"entry": c.entry, "seen": c.last_seen}
        roles |= {"dd": getattr(o, "default_date", None), "pd": getattr(o, "payoff_date", None)}
    return {role: column for role, column in roles.items() if column is not None}


def _number_roles(plan: Plan) -> dict[str, str]:
    c = plan.columns
    roles = {"term": c.term_months, "bal": c.balance, "amount": c.amount, "rate": c.rate}
    return {role: column for role, column in roles.items() if column is not None}


@dataclass(frozen=True, slots=True)
class _Scan:
    n_rows: int
    labels: tuple[str, ...]
    numbers: frozenset[str]
    unknown: tuple[str, ...]


def _scan(
    connection: duckdb.DuckDBPyConnection,
    source: Source,
    plan: Plan,
    dates: list[str],
    unsure: list[str],
    book: bool,
) -> _Scan:
    """One pass: rows, distinct period texts, distinct status codes, which undecided columns are numbers."""
    texts = [c for c in dict.fromkeys(dates) if not cells.is_date(source.types[c])]
    wanted = ["count(*)"]
    wanted += [f"list(DISTINCT {cells.text(c, source.types[c])})" for c in texts]
    wanted += [_only_numbers(c, source) for c in unsure]
    status = None if book or isinstance(plan.outcome, FlagOutcome) else plan.outcome.column
    if status is not None:
        wanted.append(f"list(DISTINCT {cells.text(status, source.types[status])})")
    row = connection.execute(f"SELECT {', '.join(wanted)} FROM {source.relation} AS s").fetchone()
    if row is None:
        raise RuntimeError("an aggregate gave no row")
    lists = row[1 : 1 + len(texts)]
    labels = sorted({label for values in lists for label in values or [] if label is not None})
    verdicts = row[1 + len(texts) : 1 + len(texts) + len(unsure)]
    unknown: tuple[str, ...] = ()
    if status is not None and not isinstance(plan.outcome, FlagOutcome):
        o = plan.outcome
        declared = {*o.default, *o.payoff, *o.performing}
        if o.performing:
            unknown = tuple(sorted(s for s in row[-1] or [] if s is not None and s not in declared)[:5])
    return _Scan(
        row[0], tuple(labels), frozenset(c for c, yes in zip(unsure, verdicts, strict=True) if yes), unknown
    )


def _only_numbers(column: str, source: Source) -> str:
    if cells.is_date(source.types[column]):
        return "false"
    return f"NOT coalesce(bool_or({cells.number(column, source.types[column])[1]}), false)"


def _places(
    plan: Plan, dates: Mapping[str, str], numbers: Mapping[str, str], carried_numbers: frozenset[str]
) -> Columns:
    """A bit for every column that can fail to be read, a number for every carried column."""
    read = dict.fromkeys(
        [*dates.values(), *numbers.values(), *(c.name for c in plan.carried if c.name in carried_numbers)]
    )
    if len(read) > _MOST_COLUMNS:
        raise UsageError(f"{len(read)} columns are read as numbers or dates, at most {_MOST_COLUMNS} can be")
    return Columns(
        bits={name: i for i, name in enumerate(read)},
        dates=tuple(dict.fromkeys(dates.values())),
        static={c.name: i for i, c in enumerate(plan.static)},
        moving={c.name: i for i, c in enumerate(plan.moving)},
        numbers=carried_numbers,
    )


def level_type(carried: Carried, plan: Plan, prefix: str) -> str:
    """Name of the database type that numbers a category's levels."""
    return f"{prefix}levels_{plan.carried.index(carried)}"


def _levels(
    connection: duckdb.DuckDBPyConnection, source: Source, carried: Carried, prefix: str, plan: Plan
) -> tuple[str, ...]:
    """The levels of a category in text order, and a type whose codes are their positions."""
    words = cells.text(carried.name, source.types[carried.name])
    kind = level_type(carried, plan, prefix)
    connection.execute(
        f"CREATE TYPE {kind} AS ENUM (SELECT DISTINCT {words} AS level FROM {source.relation} AS s "
        f"WHERE {words} IS NOT NULL ORDER BY level)"
    )
    rows = connection.execute(f"SELECT unnest(enum_range(NULL::{kind}))").fetchall()
    return tuple(row[0] for row in rows)


def _loans(connection: duckdb.DuckDBPyConnection, source: Source, plan: Plan, prefix: str) -> None:
    """Numbers the loans 0.. in the order of their identifiers as text (by code point)."""
    words = cells.text(plan.columns.loan, source.types[plan.columns.loan])
    connection.execute(
        f"CREATE TABLE {prefix}loans AS SELECT loan, (row_number() OVER (ORDER BY loan) - 1)::INTEGER AS k "
        f"FROM (SELECT DISTINCT {words} AS loan FROM {source.relation} AS s WHERE {words} IS NOT NULL)"
    )


def _rows_sql(
    source: Source,
    plan: Plan,
    columns: Columns,
    dates: Mapping[str, str],
    numbers: Mapping[str, str],
    *,
    prefix: str,
    book: bool,
) -> str:
    """CREATE TABLE rows: inner query with the text to look up, joins to loans and labels, conversions outside."""
    types = source.types
    inner, joins, months, bad = (
        [f"{cells.text(plan.columns.loan, types[plan.columns.loan])} AS __loan"],
        [],
        {},
        {},
    )
    for i, (role, column) in enumerate(dates.items()):
        if cells.is_date(types[column]):
            months[role] = cells.month_of_date(column)
            continue
        inner.append(f"{cells.text(column, types[column])} AS __date{i}")
        joins.append(f"LEFT JOIN {prefix}labels AS l{i} ON l{i}.label = s.__date{i}")
        months[role] = f"l{i}.m"
        bad[column] = (
            f"(s.__date{i} IS NOT NULL AND lower(s.__date{i}) NOT IN {cells.MISSING_WORDS} AND l{i}.m IS NULL)"
        )
    values = {}
    for role, column in numbers.items():
        values[role], bad[column] = cells.number(column, types[column])
    outputs = ["l.k AS k"]
    per = 1 if plan.calendar is Frequency.MONTH else 3
    outputs += [f"({m}) // {per} AS {role}" for role, m in months.items() if role != "mat"]
    outputs += _maturity(months, values, per)
    outputs += [f"{values.get(role, 'NULL::DOUBLE')} AS {role}" for role in ("bal", "amount")]
    rate = f"({values['rate']}) * {plan.rate_scale!r}" if "rate" in values else "NULL::DOUBLE"
    outputs.append(f"{rate} AS rate")
    outputs += [] if book else _outcome(source, plan)
    for carried in plan.carried:
        place = (
            f"c{columns.static[carried.name]}"
            if carried.moves == "no"
            else f"v{columns.moving[carried.name]}"
        )
        if carried.name in columns.numbers:
            value, bad[carried.name] = cells.number(carried.name, types[carried.name])
        else:
            words = cells.text(carried.name, types[carried.name])
            value = f"enum_code(({words})::{level_type(carried, plan, prefix)})::INTEGER"
        outputs.append(f"{value} AS {place}")
    flags = [f"CASE WHEN {sql} THEN {1 << columns.bits[c]}::BIGINT ELSE 0 END" for c, sql in bad.items()]
    outputs.append(f"({' + '.join(flags) or '0'})::BIGINT AS bad")
    return (
        f"CREATE TABLE {prefix}rows AS SELECT {', '.join(outputs)} "
        f"FROM (SELECT *, {', '.join(inner)} FROM {source.relation} AS s) AS s "
        f"LEFT JOIN {prefix}loans AS l ON l.loan = s.__loan {' '.join(joins)}"
    )


def _maturity(months: Mapping[str, str], values: Mapping[str, str], per: int) -> list[str]:
    """mat and term_bad. A term counts calendar months from origination: opened 2001-04 for 36 ends 2004-04."""
    if "term" in values:
        term, start = values["term"], months["o"]
        wrong = f"({term}) <= 0 OR ({term}) <> floor({term}) OR ({term}) > 12000"
        end = f"({start}) + TRY_CAST(({term}) AS INTEGER)"
    elif "mat" in months:
        end = f"({months['mat']})"
        wrong = f"({months['mat']}) // {per} < ({months['o']}) // {per}"
    else:
        return ["NULL::INTEGER AS mat", "false AS term_bad"]
    return [
        f"CASE WHEN NOT coalesce({wrong}, false) THEN ({end}) // {per} END AS mat",
        f"coalesce({wrong}, false) AS term_bad",
    ]


def _outcome(source: Source, plan: Plan) -> list[str]:
    """out: 0 none, 1 default, 2 payoff, NULL unknown; two_exits for flag columns."""
    o = plan.outcome
    if isinstance(o, FlagOutcome):
        default = _flag(o.default_flag, source)
        payoff = _flag(o.payoff_flag, source) if o.payoff_flag else "0"
        return [
            f"(CASE WHEN {default} = 1 THEN 1 WHEN {payoff} = 1 THEN CASE WHEN {default} = 0 THEN 2 END "
            f"WHEN {default} = 0 AND {payoff} = 0 THEN 0 END)::TINYINT AS out",
            f"coalesce({default} = 1 AND {payoff} = 1, false) AS two_exits",
        ]
    words = cells.text(o.column, source.types[o.column])
    rest = f"{words} IS NOT NULL" if not o.performing else f"{words} IN ({_listed(o.performing)})"
    payoffs = f"WHEN {words} IN ({_listed(o.payoff)}) THEN 2 " if o.payoff else ""
    return [
        f"(CASE WHEN {words} IN ({_listed(o.default)}) THEN 1 {payoffs}WHEN {rest} THEN 0 END)::TINYINT AS out"
    ]


def _flag(column: str, source: Source) -> str:
    words = f"lower({cells.text(column, source.types[column])})"
    return (
        f"(CASE WHEN {words} IN ('1', '1.0', 'true') THEN 1 WHEN {words} IN ('0', '0.0', 'false') THEN 0 END)"
    )


def _listed(codes: tuple[str, ...]) -> str:
    return ", ".join(literal(code) for code in codes)
