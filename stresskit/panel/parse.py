"""From a source to table ``rows``: one parsed row per input row, every text looked up once.

Column names of the table are those of :mod:`stresskit.panel.rules.base`, step "row", and c0, c1, .. for
static, v0, v1, .. for moving columns (categories as codes into their list of levels).
"""

from __future__ import annotations

import difflib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import duckdb

from stresskit.core.errors import DataError, Problem, UsageError
from stresskit.core.period import Frequency
from stresskit.panel import cells
from stresskit.panel.cells import holds_numbers
from stresskit.panel.plan import Carried, Plan, role_columns
from stresskit.panel.rules.base import Columns
from stresskit.panel.source import Source, Workspace, literal, reading, staged
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
    codes       column of status or flag -> up to eight of the texts it holds
    per_quarter a panel in quarters: its rows lie in several months of a quarter
    """

    columns: Columns
    levels: Mapping[str, tuple[str, ...]]
    n_rows: int
    unreadable: tuple[str, ...]
    unknown: tuple[str, ...]
    codes: Mapping[str, tuple[str, ...]]
    per_quarter: bool


def parse(work: Workspace, source: Source, plan: Plan, *, prefix: str = "", book: bool = False) -> Parsed:
    """Creates tables ``{prefix}loans`` (loan, k) and ``{prefix}rows`` from ``source``.

    book: the source is the portfolio's own file, a row per loan without outcome. Raises DataError for missing
    columns, columns of the wrong type, no rows, and files that cannot be read.
    """
    connection = work.connection
    roles = role_columns(plan, book=book)
    _check_columns(source, roles)
    source = staged(work, source, [column for _, column in roles], f"{prefix}staged")
    dates, numbers = _date_roles(plan, book), _number_roles(plan)
    dated = {c.name for c in plan.carried if c.kind == "date"}
    with reading(source):
        found = _scan(connection, source, plan, list(dates.values()), book)
        if found.n_rows == 0:
            raise DataError(f"{source.name} has no rows")
        carried_numbers = frozenset(c.name for c in plan.carried if c.name not in found.levels)
        problems = cells.check_kinds(source, dict.fromkeys([*numbers.values(), *(carried_numbers - dated)]))
        if problems:
            raise DataError(f"{source.name} cannot be read", problems)
        unreadable = cells.make_labels(
            connection,
            f"{prefix}labels",
            found.labels,
            calendar=plan.calendar,
            counter_month=plan.counter_month,
        )
        for carried in plan.carried:
            if carried.name in found.levels:
                connection.execute(
                    f"CREATE TYPE {level_type(carried, plan, prefix)} AS ENUM "
                    "(SELECT level FROM (SELECT unnest(?::VARCHAR[]) AS level) ORDER BY level)",
                    [list(found.levels[carried.name])],
                )
        columns = _places(plan, dates, numbers, carried_numbers)
        _loans(connection, source, plan, prefix)
        connection.execute(_rows_sql(source, plan, columns, dates, numbers, prefix=prefix, book=book))
        months = (
            "t" in dates
            and plan.calendar is Frequency.QUARTER
            and _months(connection, source, dates["t"], prefix)
        )
    (made,) = connection.execute(f"SELECT count(*) FROM {prefix}rows").fetchone() or (0,)
    if made != found.n_rows:
        raise RuntimeError(f"{source.name}: {found.n_rows} rows read, {made} parsed")
    unread = tuple(sorted(unreadable)[:5])
    return Parsed(columns, found.levels, found.n_rows, unread, found.unknown, found.codes, bool(months))


def _check_columns(source: Source, roles: Sequence[tuple[str, str]]) -> None:
    """Raises DataError naming every column that is not there, the nearest that is, and all there are."""
    lower = {name.lower(): name for name in source.types}
    problems = []
    for place, column in roles:
        if column not in source.types:
            near = difflib.get_close_matches(column.lower(), lower, n=1)
            remedy = f"Did you mean {lower[near[0]]!r}?" if near else ""
            problems.append(Problem("missing_column", f"no column {column!r} ({place})", 1, (), remedy))
    if problems:
        there = ", ".join(source.types)
        raise DataError(f"{source.name} lacks columns that the study names; it has: {there}", problems)


def _date_roles(plan: Plan, book: bool) -> dict[str, str]:
    """Name in table rows -> column, for everything that is a period or date."""
    c, o = plan.columns, plan.outcome
    roles = {"o": c.origination, "mat": c.maturity}
    if plan.layout == "panel" and not book:
        roles = {"t": c.period, **roles}
    if plan.layout == "spells" and not book:
        roles |= {"entry": c.entry, "seen": c.last_seen}
        roles |= {"dd": getattr(o, "default_date", None), "pd": getattr(o, "payoff_date", None)}
    for i, carried in enumerate(plan.static):
        if carried.kind == "date":
            roles[f"c{i}"] = carried.name
    for i, carried in enumerate(plan.moving):
        if carried.kind == "date":
            roles[f"v{i}"] = carried.name
    return {role: column for role, column in roles.items() if column is not None}


def _number_roles(plan: Plan) -> dict[str, str]:
    c = plan.columns
    roles = {"term": c.term_months, "bal": c.balance, "amount": c.amount, "rate": c.rate}
    return {role: column for role, column in roles.items() if column is not None}


@dataclass(frozen=True, slots=True)
class _Scan:
    """labels: every period text; levels: of the carried categories; unknown, codes: of the status."""

    n_rows: int
    labels: tuple[str, ...]
    levels: Mapping[str, tuple[str, ...]]
    unknown: tuple[str, ...]
    codes: Mapping[str, tuple[str, ...]]


def _scan(
    connection: duckdb.DuckDBPyConnection, source: Source, plan: Plan, dates: list[str], book: bool
) -> _Scan:
    """One pass: number of rows, and the distinct texts of periods, categories and status."""
    status = None if book or isinstance(plan.outcome, FlagOutcome) else plan.outcome.column
    told = [] if book else [status] if status else _flags(plan)
    texts = {c for c in dates if not cells.is_date(source.types[c])} | set(told)
    texts |= {c.name for c in plan.carried if c.kind == "category"}
    unsure = [c.name for c in plan.carried if c.kind == "undecided"]
    decided = {name: holds_numbers(source.types[name]) for name in unsure}
    listed = sorted(texts | {name for name in unsure if not decided[name]})
    wanted = ["count(*)", *(f"list(DISTINCT {cells.text(c, source.types[c])})" for c in listed)]
    row = connection.execute(f"SELECT {', '.join(wanted)} FROM {source.relation} AS s").fetchone()
    if row is None:
        raise RuntimeError("an aggregate gave no row")
    found = {
        c: tuple(sorted(v for v in values or () if v is not None))
        for c, values in zip(listed, row[1:], strict=True)
    }
    levels = {c.name: found[c.name] for c in plan.carried if c.kind == "category"}
    for name in unsure:
        if not decided[name] and not all(map(_is_number, found[name])):
            levels[name] = found[name]
    unknown: tuple[str, ...] = ()
    if status is not None and not isinstance(plan.outcome, FlagOutcome) and plan.outcome.performing:
        declared = {*plan.outcome.default, *plan.outcome.payoff, *plan.outcome.performing}
        unknown = tuple(code for code in found[status] if code not in declared)[:5]
    labels = sorted({label for c in dates for label in found.get(c, ())})
    return _Scan(row[0], tuple(labels), levels, unknown, {c: found[c][:8] for c in told})


def _flags(plan: Plan) -> list[str]:
    names = [getattr(plan.outcome, place, None) for place in ("default_flag", "payoff_flag")]
    return [name for name in names if name is not None]


def _months(connection: duckdb.DuckDBPyConnection, source: Source, column: str, prefix: str) -> bool:
    """Whether the periods of a panel name more months than quarters."""
    if cells.is_date(source.types[column]):
        months = f"SELECT {cells.month_of_date(column)} AS m FROM {source.relation} AS s"
    else:
        words = cells.text(column, source.types[column])
        months = f"SELECT m FROM {prefix}labels WHERE label IN (SELECT {words} FROM {source.relation} AS s)"
    row = connection.execute(f"SELECT count(DISTINCT m) > count(DISTINCT m // 3) FROM ({months})").fetchone()
    return row is not None and bool(row[0])


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return text.lower() in cells.MISSING_WORDS
    return True


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
        count=next((i for i, c in enumerate(plan.static) if c.name == plan.columns.count), None),
    )


def level_type(carried: Carried, plan: Plan, prefix: str) -> str:
    """Name of the database type that numbers a category's levels."""
    return f"{prefix}levels_{plan.carried.index(carried)}"


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
    """CREATE TABLE rows, in three layers: trimmed texts; their numbers; then joins, conversions and flags.

    The layers keep each text and each conversion from being computed more than once.
    """
    types = source.types
    own = "__"  # no column of the input begins like this
    while any(name.lower().startswith(own) for name in types):
        own += "_"
    texts = {plan.columns.loan: f"{own}loan"}
    joins, months, bad = [], {}, {}
    for i, (role, column) in enumerate(dates.items()):
        if cells.is_date(types[column]):
            months[role] = cells.month_of_date(column)
            continue
        words = texts.setdefault(column, f"{own}text{len(texts)}")
        joins.append(f"LEFT JOIN {prefix}labels AS l{i} ON l{i}.label = s.{words}")
        months[role] = f"l{i}.m"
        bad[column] = (
            f"(s.{words} IS NOT NULL AND lower(s.{words}) NOT IN {cells.MISSING_SQL} AND l{i}.m IS NULL)"
        )
    doubles: dict[str, str] = {}
    values: dict[str, str] = {}
    dated = {c.name for c in plan.carried if c.kind == "date"}
    for column in dict.fromkeys([*numbers.values(), *(columns.numbers - dated)]):
        place = doubles.setdefault(column, f"{own}number{len(doubles)}")
        if cells.holds_numbers(types[column]):
            values[column], bad[column] = cells.number(f"s.{place}", None)
        else:
            words = texts.setdefault(column, f"{own}text{len(texts)}")
            values[column], bad[column] = cells.number(f"s.{place}", f"s.{words}")
    outputs = ["l.k AS k"]
    per = 1 if plan.calendar is Frequency.MONTH else 3
    outputs += [f"({m}) // {per} AS {role}" for role, m in months.items() if role != "mat"]
    by_role = {role: values[column] for role, column in numbers.items()}
    outputs += _maturity(months, by_role, per)
    outputs += [f"{by_role.get(role, 'NULL::DOUBLE')} AS {role}" for role in ("bal", "amount")]
    outputs.append(
        f"({by_role['rate']}) * {plan.rate_scale!r} AS rate" if "rate" in by_role else "NULL::DOUBLE AS rate"
    )
    outputs += [] if book else _outcome(source, plan)
    outputs += _carried(source, plan, columns, values, prefix)
    flags = [f"CASE WHEN {sql} THEN {1 << columns.bits[c]}::BIGINT ELSE 0 END" for c, sql in bad.items()]
    outputs.append(f"({' + '.join(flags) or '0'})::BIGINT AS bad")
    inner = "".join(f", {cells.text(column, types[column])} AS {words}" for column, words in texts.items())
    middle = "".join(
        f", {cells.as_double(column, types[column], 's.' + texts.get(column, ''))} AS {place}"
        for column, place in doubles.items()
    )
    return (
        f"CREATE TABLE {prefix}rows AS SELECT {', '.join(outputs)} "
        f"FROM (SELECT *{middle} FROM (SELECT *{inner} FROM {source.relation} AS s) AS s) AS s "
        f"LEFT JOIN {prefix}loans AS l ON l.loan = s.{own}loan {' '.join(joins)}"
    )


def _carried(
    source: Source, plan: Plan, columns: Columns, values: Mapping[str, str], prefix: str
) -> list[str]:
    """c_i and v_i: numbers as read, categories as codes."""
    outputs = []
    for carried in plan.carried:
        if carried.kind == "date":
            continue  # a role among the dates
        moves = carried.moves != "no"
        place = f"v{columns.moving[carried.name]}" if moves else f"c{columns.static[carried.name]}"
        if carried.name in columns.numbers:
            value = values[carried.name]
        else:
            words = cells.text(carried.name, source.types[carried.name])
            value = f"enum_code(({words})::{level_type(carried, plan, prefix)})::INTEGER"
        outputs.append(f"{value} AS {place}")
    return outputs


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
