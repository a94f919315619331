"""A published wide table as a scenario: the mapping says which column is what, the rest is checked as for history."""

from __future__ import annotations

from stresskit.core.period import Frequency, format_period
from stresskit.macro.table import Layout, column_problem, read_csv, wide_table
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import GivenValues, ScenarioSpec, TableMapping


def scenario_from_table(
    loaded: Loaded[ScenarioSpec | TableMapping], mapping: TableMapping, *, frequency: Frequency
) -> ScenarioSpec:
    """The table's rows as a scenario with values given by position; numbers are those of the file, bit for bit.

    frequency  of the macro calendar the scenario joins

    Raises TextError where the mapping is wrong (file, column, frequency), DataError where the table is.
    """
    file = loaded.file.parent / mapping.table
    if not file.is_file():
        near = sorted(p.name for p in file.parent.glob("*.csv"))[:5] if file.parent.is_dir() else []
        there = f"; that folder has {', '.join(near)}" if near else ""
        raise loaded.error(("table",), f"table {mapping.table!r} does not exist{there}")
    frame = read_csv(file)
    for keys, wanted in (
        (("period",), {"period": mapping.period}),
        *((("only", c), {"only": c}) for c in mapping.only),
        *((("variables", v), {v: c}) for v, c in mapping.variables.items()),
    ):
        problem = column_problem(wanted, list(frame.columns))
        if problem is not None:
            raise loaded.error(keys, f"{mapping.table} has no column {problem.first[0]}. {problem.remedy}")
    layout = Layout(mapping.period, mapping.only, mapping.variables)
    table = wide_table(frame, layout, source=f"scenario {mapping.scenario!r}, {file}", blanks_before=False)
    if table.frequency is not frequency:
        raise loaded.error(
            ("table",),
            f"{mapping.table} is on a {table.frequency.value} calendar, macro history on a {frequency.value} calendar; "
            "supply the table on the calendar of the history",
        )
    return ScenarioSpec(
        scenario=mapping.scenario,
        weight=mapping.weight,
        based_on=None,
        missing=mapping.missing,
        starts=format_period(table.start, frequency),
        paths={
            v: GivenValues(values=tuple(float(x) for x in column), unit=None, rate=None)
            for v, column in table.values.items()
        },
        afterwards=mapping.afterwards,
        title=mapping.title,
        severity=mapping.severity,
        author_role=mapping.author_role,
        approved_on=mapping.approved_on,
        weighted=mapping.weighted,
        notes={"table": mapping.table} | mapping.notes,
    )
