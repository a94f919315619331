"""Scenario text to complete paths, in the macro calendar, from the first period after as_of."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from math import fsum

from stresskit.core.errors import DataError, UsageError
from stresskit.core.period import Frequency, convert, format_period, frequency_of_label, parse_period
from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.macro.calendar import first_after, last_needed
from stresskit.macro.rules import check_calendars, growth_users, not_positive, used_by
from stresskit.macro.var import VarModel
from stresskit.scenario.lineage import Entry, Lineage, lineage
from stresskit.scenario.paths import PathBook, VariablePath
from stresskit.scenario.table import scenario_from_table
from stresskit.spec.base import closest, meant
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.study import Macro

_WEIGHT_ERROR = 1e-9


def resolve(
    loaded: Sequence[Loaded[ScenarioSpec | TableMapping]],
    macro: Macro | None,
    history: MacroHistory | None,
    *,
    as_of: int,
    model: Frequency,
    horizon: int,
    var: VarModel | None = None,
    also: Mapping[str, str] | None = None,
) -> tuple[ScenarioPath, ...]:
    """Every scenario as a complete path, in the order given.

    as_of    last observed MODEL period (ordinal)
    horizon  projected MODEL periods, >= 1
    var      the study's VAR, fitted on history up to as_of; fills variables where ``missing: conditional`` asks for it
    also     variable -> place in the study that reads it, for variables that are read as they are

    Each path covers the macro periods from the first one that ends after as_of to the one that
    holds model period ``as_of + horizon``. It has every macro variable that a feature uses, and the
    other declared variables that the scenario states. Values beyond the horizon are not carried;
    variables that the study does not declare are named in the notes under ``left out``. A study
    without macro section gets paths without values, on the model's calendar.

    Raises TextError (file, line, column) for text that does not make complete paths, DataError for
    tables and history that do not.
    """
    if horizon < 1:
        raise UsageError(f"a projection needs at least one period, not {horizon}")
    if (macro is None) != (history is None):
        raise UsageError("scenarios need both the macro section and its history, or neither")
    for item in loaded:
        if item.model.missing == "conditional" and var is None:
            raise item.error(
                ("missing",),
                "conditional fills variables by a VAR, and the study declares none; add macro.var to it, or state every variable",
            )
    if macro is None or history is None:
        return _without_macro(loaded, as_of=as_of, model=model)
    check_calendars(macro, model=model, frequency=history.frequency)
    start = first_after(as_of, model=model, macro=history.frequency)
    observed = _up_to(history, start, as_of=format_period(as_of, model))
    scenarios = lineage([_entry(item, history.frequency) for item in loaded])
    _check_weights(scenarios)
    for entry in scenarios.entries.values():
        _check_start(entry, start, history.frequency, as_of=format_period(as_of, model))
        _check_rules(entry, scenarios, macro)
    last = last_needed(as_of, horizon, model=model, macro=history.frequency)
    rates = {name: v.rate for name, v in macro.variables.items() if v.rate is not None}
    book = PathBook(scenarios, observed, last - start + 1, rates, var)
    return tuple(_complete(entry, book, macro, also or {}) for entry in scenarios.entries.values())


def _entry(loaded: Loaded[ScenarioSpec | TableMapping], frequency: Frequency) -> Entry:
    if isinstance(loaded.model, TableMapping):
        return Entry(loaded, scenario_from_table(loaded, loaded.model, frequency=frequency))
    return Entry(loaded, loaded.model)


def _without_macro(
    loaded: Sequence[Loaded[ScenarioSpec | TableMapping]], *, as_of: int, model: Frequency
) -> tuple[ScenarioPath, ...]:
    entries = []
    for item in loaded:
        if isinstance(item.model, TableMapping):
            raise item.error(
                ("table",),
                "a scenario from a table needs a macro section in the study that says what its variables are",
            )
        entries.append(Entry(item, item.model))
    scenarios = lineage(entries)
    _check_weights(scenarios)
    for entry in scenarios.entries.values():
        calendar = frequency_of_label(entry.spec.starts)
        coarse = calendar if model is Frequency.MONTH else Frequency.QUARTER
        start = int(convert(as_of + 1, model, coarse))
        _check_start(entry, start, coarse, as_of=format_period(as_of, model))
    return tuple(
        ScenarioPath(
            name=entry.name, weight=entry.spec.weight, frequency=model, start=as_of + 1, values={}, flags={},
            notes=_notes(entry.spec, entry.spec.paths),
        )
        for entry in scenarios.entries.values()
    )  # fmt: skip


def _up_to(history: MacroHistory, start: int, *, as_of: str) -> MacroHistory:
    """History up to the period before ``start``: later rows must not be seen."""
    kept = start - history.start
    if not 0 < kept <= history.n_periods:
        needed, begins, ends = (
            format_period(p, history.frequency) for p in (start - 1, history.start, history.end)
        )
        raise DataError(
            f"macro history runs from {begins} to {ends}; as_of {as_of} needs it up to {needed}: "
            "supply the missing periods, or move as_of"
        )
    return MacroHistory(
        history.frequency,
        history.start,
        {name: values[:kept] for name, values in history.values.items()},
        history.units,
        history.place,
    )


def _check_weights(scenarios: Lineage) -> None:
    entries = [e for e in scenarios.entries.values() if e.spec.weighted]
    without = [e for e in entries if e.spec.weight is None]
    if len(without) == len(entries):
        return
    if without:
        raise without[0].error(
            ("scenario",),
            f"scenario {without[0].name!r} has no weight, but {next(e.name for e in entries if e not in without)!r} has; "
            "give every scenario a weight, or none (or say weighted: false where one stands outside the mean)",
        )
    total = fsum(e.spec.weight or 0.0 for e in entries)
    if abs(total - 1.0) > _WEIGHT_ERROR:
        listed = ", ".join(f"{e.name} {e.spec.weight:g}" for e in entries)
        raise entries[-1].error(("weight",), f"the scenarios' weights sum to {total:.10g}, not 1: {listed}")


def _check_start(entry: Entry, start: int, frequency: Frequency, *, as_of: str) -> None:
    stated = parse_period(entry.spec.starts, frequency)
    if stated != start:
        said, expected = format_period(stated, frequency), format_period(start, frequency)
        stale = "stale vintage: " if stated < start else ""
        raise entry.error(
            ("starts",),
            f"{stale}scenario {entry.name!r} starts in {said}, but the first period after as_of {as_of} is {expected}; "
            f"restate it from {expected}, or move as_of",
        )


def _check_rules(entry: Entry, scenarios: Lineage, macro: Macro) -> None:
    rules = entry.spec.afterwards
    if not isinstance(rules, dict):
        return
    known = dict.fromkeys((*macro.variables, *scenarios.stated(entry.name)))
    for variable in rules:
        if variable not in known:
            raise entry.error(
                ("afterwards", variable),
                f"there is no variable {variable!r}; there are {', '.join(known)}{meant(variable, known)}",
            )


def _complete(entry: Entry, book: PathBook, macro: Macro, also: Mapping[str, str]) -> ScenarioPath:
    users = used_by(macro)
    stated = book.lineage.stated(entry.name)
    paths: dict[str, VariablePath] = {}
    for variable in macro.variables:
        path = book.path(entry.name, variable)
        if path is not None:
            _check_growth(entry, book, macro, variable=variable, path=path)
            paths[variable] = path
        elif variable in users:
            undeclared = [v for v in stated if v not in macro.variables]
            near = closest(variable, undeclared)
            hint = "" if near is None else f" (it states {near!r}, which the study does not declare)"
            remedy = "state it under paths, or name a scenario that states it in based_on"
            if book.var is not None and book.lineage.completes(entry.name) is not None:
                remedy = f"the VAR has only {', '.join(book.var.names)}: add it to macro.var, or {remedy}"
            raise entry.error(
                entry.where,
                f"scenario {entry.name!r} gives no path of {variable!r}{hint}, which "
                f"{'features' if len(users[variable]) > 1 else 'feature'} {', '.join(users[variable])} "
                f"{'need' if len(users[variable]) > 1 else 'needs'}; "
                f"{'map its column under variables' if entry.is_table else remedy}",
            )
        elif variable in also:
            raise entry.error(
                entry.where,
                f"scenario {entry.name!r} gives no path of {variable!r}, which {also[variable]} reads; "
                f"{'map its column under variables' if entry.is_table else 'state it under paths, or name a scenario that states it in based_on'}",
            )
    return ScenarioPath(
        name=entry.name,
        weight=entry.spec.weight,
        frequency=book.history.frequency,
        start=book.start,
        values={v: p.values for v, p in paths.items()},
        flags={v: p.flags for v, p in paths.items()},
        notes=_notes(entry.spec, [v for v in stated if v not in macro.variables]),
        stated={v: p.stated for v, p in paths.items()},
    )


def _check_growth(entry: Entry, book: PathBook, macro: Macro, *, variable: str, path: VariablePath) -> None:
    growing = growth_users(macro, variable)
    bad = not_positive(path.values)
    if growing and bad.size:
        raise entry.error(
            entry.where,
            f"scenario {entry.name!r}: {variable} is {path.values[bad[0]]:g} in {book.label(int(bad[0]))}, and "
            f"{', '.join(growing)} takes growth of it, which needs values above zero",
        )


def _notes(spec: ScenarioSpec, left_out: Mapping[str, object] | Sequence[str]) -> dict[str, str]:
    """Words for the report: the scenario's own fields, then its free notes."""
    fields = {"title": spec.title, "severity": spec.severity, "author role": spec.author_role}
    fields |= {"approved on": spec.approved_on, "weighting": None if spec.weighted else "outside the mean"}
    notes = {key: value for key, value in fields.items() if value is not None}
    notes |= {key: value for key, value in spec.notes.items() if key not in notes}
    if left_out:
        notes["left out"] = f"not declared in the study's macro section: {', '.join(left_out)}"
    return notes
