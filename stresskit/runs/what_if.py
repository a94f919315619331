"""A what-if in one line as a full scenario of a study: YAML text like any other, read by the same strict loader."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from decimal import Decimal
from pathlib import Path

from stresskit.core.errors import UsageError
from stresskit.core.period import Frequency, format_period, frequency_of_label, parse_period
from stresskit.macro.read import read_history
from stresskit.runs.api import StudyFile
from stresskit.runs.records import RESERVED
from stresskit.spec.base import meant
from stresskit.spec.load import scenario_from_text
from stresskit.spec.scenario import ScenarioSpec
from stresskit.spec.what_if import Shock, Span, WhatIf, parse_what_if

#: The scenario that is changed when the text names none.
REFERENCE = "baseline"
_LONGEST_SPAN = 400


def what_if(file: StudyFile, text: str | Sequence[str], *, name: str | None = None) -> StudyFile:
    """The study with one scenario more, made from one line (see ``spec.what_if``) or several.

    name  of the new scenario; by default ``what_if``, or ``what_if_2`` and so on where that is taken

    The new scenario is the last of ``scenarios``; its YAML text is ``scenarios[-1].text``. It stands outside the
    probability-weighted mean, so the weights of the others count as before.

    Raises TextError that marks the place in the line, and what loading a scenario raises.
    """
    said = parse_what_if(text)
    taken = [s.model.scenario for s in file.scenarios]
    base = _base(file, said, taken)
    _check_variables(file, said)
    named = _free(taken) if name is None else name
    if named in (*taken, *RESERVED):
        raise UsageError(f"a scenario cannot be called {named!r}: the name is taken")
    scenario = scenario_from_text(_yaml(file, said, base, named), Path(f"{named}.yaml"), said)
    return replace(file, scenarios=(*file.scenarios, scenario))


def _free(taken: Sequence[str]) -> str:
    name, k = "what_if", 1
    while name in taken:
        k += 1
        name = f"what_if_{k}"
    return name


def _base(file: StudyFile, said: WhatIf, names: Sequence[str]) -> str:
    if said.on is None:
        if not names:
            raise UsageError("a what-if changes a scenario, and the study has none")
        return REFERENCE if REFERENCE in names else names[0]
    if said.on not in names:
        listed = ", ".join(names)
        raise said.error(
            *said.on_place, f"there is no scenario {said.on!r}; the study has {listed}{meant(said.on, names)}"
        )
    return said.on


def _check_variables(file: StudyFile, said: WhatIf) -> None:
    variables = file.study.macro.variables if file.study.macro is not None else {}
    for shock in said.shocks:
        name = shock.variable.text
        if name not in variables:
            there = f"there are {', '.join(variables)}" if variables else "the study declares none"
            raise said.error(
                shock.line,
                shock.variable.column,
                f"there is no variable {name!r}; {there}{meant(name, variables)}",
            )
        unit = variables[name].unit
        if shock.change == "percent" and unit in ("percent", "fraction"):
            size = shock.size.lstrip("-")
            sign, factor = (
                ("-", 1 - Decimal(size) / 100) if shock.size[0] == "-" else ("+", 1 + Decimal(size) / 100)
            )
            points = Decimal(size) if unit == "percent" else Decimal(size) / 100
            raise said.error(
                shock.line,
                shock.size_column,
                f"{name} is in {unit}, where {sign} {size}% can mean two things: write {sign} {points.normalize():f} for "
                f"percentage points, or x {factor.normalize():f} for its value times that",
            )


def _calendar(file: StudyFile) -> tuple[str, Frequency]:
    """Label of the first period of the scenarios, and the length of the macro table's periods."""
    starts = next((s.model.starts for s in file.scenarios if isinstance(s.model, ScenarioSpec)), None)
    if starts is None:
        starts = format_period(file.as_of + 1, file.frequency)
    if frequency_of_label(starts) is Frequency.QUARTER:
        return starts, Frequency.QUARTER
    # A month can also name the quarter that holds it: only the table tells.
    macro = file.study.macro
    if macro is not None and (file.base / macro.file).is_file():
        return starts, read_history(macro, base=file.base, model=file.frequency).frequency
    return starts, Frequency.MONTH


def _yaml(file: StudyFile, said: WhatIf, base: str, name: str) -> str:
    starts, frequency = _calendar(file)
    first = parse_period(starts, frequency)
    lines = [
        f"# What if: {said.text}",
        f"scenario: {name}",
        f"based_on: {base}",
        "weighted: false",
        f"starts: {starts}",
        "paths:",
    ]
    after = []
    for shock in said.shocks:
        at = first - 1 + (1 if shock.over is None else _periods(said, shock, shock.over, frequency))
        back = None if shock.back is None else _periods(said, shock, shock.back, frequency)
        words = f"at: {format_period(at, frequency)}"
        if shock.change == "level":
            words = f"reach: {_number(shock.size)}, {words}"
            words += "" if back is None else f", back_to: {base}"
            # Else the rule of the scenario that this one is based on would take over.
            after += [f"  {shock.variable.text}: hold"] if back is None else []
        else:
            words = f"change_from: {base}, {_size(shock)}, {words}"
        words = (
            f"{{{words}}}" if back is None else f"{{{words}, back_by: {format_period(at + back, frequency)}}}"
        )
        lines.append(f"  {shock.variable.text}: {words}")
    if after:
        lines += ["afterwards:", *after]
    return "\n".join([*lines, "notes:", f"  what_if: '{said.text}'", ""])


def _size(shock: Shock) -> str:
    if shock.change == "percent":
        return f"peak: {shock.size}%"
    return f"{'peak_factor' if shock.change == 'factor' else 'peak_points'}: {_number(shock.size)}"


def _number(text: str) -> str:
    """The number without leading zeros, which the strict reader takes for text."""
    return str(Decimal(text))


def _periods(said: WhatIf, shock: Shock, span: Span, frequency: Frequency) -> int:
    """Macro periods of a span. Raises TextError for a span that is no whole number of them, or too long."""
    months = 12 // frequency.per_year
    if span.months % months:
        raise said.error(
            shock.line,
            span.column,
            f"{span.written} is no whole number of quarters, and the macro table is quarterly",
        )
    if span.months // months > _LONGEST_SPAN:
        raise said.error(
            shock.line, span.column, f"{span.written} is longer than {_LONGEST_SPAN} {frequency.value}s"
        )
    return span.months // months


def with_what_if(file: StudyFile, texts: Sequence[str] | None) -> StudyFile:
    """The study as it is without texts, else with one scenario made of all of them."""
    return what_if(file, texts) if texts else file
