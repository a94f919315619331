"""A scenario as the YAML that a reviewer reads: values in a row per year, source and digests under notes."""

from __future__ import annotations

import json
import re
from collections.abc import Iterator, Mapping, Sequence
from decimal import Decimal
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.imports.paths import ImportedPath
from stresskit.imports.rows import PER_YEAR, period_label
from stresskit.spec.imports import ImportMapping
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import Afterwards

Floats = NDArray[np.float64]
#: How every file begins that an import wrote; only such a file is ever replaced.
FIRST_WORDS = "# Imported by stresskit from "
_PLAIN = re.compile(r"[A-Za-z][A-Za-z0-9_\-]*( [A-Za-z0-9_\-]+)*")
_WORDS = ("true", "false", "null", "yes", "no", "on", "off")


def scenario_text(path: ImportedPath, loaded: Loaded[ImportMapping]) -> str:
    """The whole file. The loader reads back the same numbers bit for bit, because floats are written by repr."""
    return "\n".join(_lines(path, loaded)) + "\n"


def _lines(path: ImportedPath, loaded: Loaded[ImportMapping]) -> Iterator[str]:
    mapping = loaded.model
    spec = mapping.scenarios[path.name]
    sources = ", ".join(dict.fromkeys(_plain(s.file) for s in path.sheets))
    yield f"{FIRST_WORDS}{sources} by the mapping {mapping.import_}."
    yield "# Rather than edit numbers here, change the table or the mapping and import again."
    yield f"scenario: {path.name}"
    for key in ("title", "severity", "author_role"):
        if (words := getattr(spec, key)) is not None:
            yield f"{key}: {quoted(words)}"
    if spec.approved_on is not None:
        yield f"approved_on: {spec.approved_on}"
    if spec.based_on is not None:
        yield f"based_on: {spec.based_on}"
    if spec.weight is not None:
        yield f"weight: {spec.weight!r}"
    if not spec.weighted:
        yield "weighted: false"
    if "missing" in spec.model_fields_set:
        yield f"missing: {spec.missing}"
    yield f"starts: {period_label(path.start, path.calendar)}"
    yield ""
    yield "paths:"
    for variable, values in path.values.items():
        stated = mapping.of(path.name)[variable]
        told = f"; {path.told[variable]}" if variable in path.told else ""
        yield f"  {variable}:  # {stated.unit}, column {_plain(stated.column)!r}{told}"
        yield from values_by_year(values, path.start, path.calendar, indent=4)
    yield ""
    rule = spec.afterwards if spec.afterwards is not None else "hold"
    if isinstance(rule, dict):
        yield "afterwards:"
        for variable, one in rule.items():
            yield f"  {variable}: {_rule(one)}"
    else:
        yield f"afterwards: {_rule(rule)}"
    yield ""
    yield "notes:"
    for key, value in _notes(path, loaded).items():
        yield f"  {quoted(key)}: {quoted(value)}"


def values_by_year(values: Floats, start: int, calendar: str, *, indent: int) -> Iterator[str]:
    """``values: [...]`` with one line per calendar year and the year as a comment."""
    n = PER_YEAR[calendar]
    rows: list[tuple[int, list[str]]] = []
    for i, value in enumerate(values):
        year = (start + i) // n
        if not rows or rows[-1][0] != year:
            rows.append((year, []))
        rows[-1][1].append(repr(float(value)))
    texts = [", ".join(cells) + ("," if i < len(rows) - 1 else "]") for i, (_, cells) in enumerate(rows)]
    width = max(map(len, texts))
    head = " " * indent + "values: ["
    for i, ((year, _), text) in enumerate(zip(rows, texts, strict=True)):
        yield f"{head if i == 0 else ' ' * len(head)}{text.ljust(width)}  # {year}"


def _notes(path: ImportedPath, loaded: Loaded[ImportMapping]) -> dict[str, str]:
    """The scenario's own free fields, then where the numbers come from. Raises TextError for a field that both write."""
    mapping = loaded.model
    made = _sources(path, loaded)
    notes = mapping.scenarios[path.name].notes
    for key in notes:
        if key in made:
            keys = ("scenarios", path.name, "notes", key)
            raise loaded.error(keys, f"the import writes {key!r} itself; choose another name")
    return notes | made


def _sources(path: ImportedPath, loaded: Loaded[ImportMapping]) -> dict[str, str]:
    mapping, out = loaded.model, dict[str, str]()
    for i, sheet in enumerate({s.digest: s for s in path.sheets}.values()):
        number = "" if i == 0 else f" {i + 1}"
        out[f"source{number}"] = sheet.file
        out[f"source{number} sha256"] = sheet.digest
    if path.joined is not None:
        out["history joined"], out["history joined sha256"] = path.joined
    out["mapping"] = mapping.import_
    out["mapping sha256"] = loaded.digest
    for variable, words in path.told.items():
        out[f"made: {variable}"] = words
    if path.cautions:
        out["cautions of the import"] = " ".join(path.cautions)
    return out


def _rule(rule: Afterwards) -> str:
    """The rule as YAML, every key that it was given."""
    if isinstance(rule, str):
        return rule
    stated = ((key, getattr(rule, key)) for key in type(rule).model_fields)
    return "{" + ", ".join(f"{key}: {_value(key, value)}" for key, value in stated if value is not None) + "}"


def _value(key: str, value: Any) -> str:
    if isinstance(value, str):
        return value
    # a percentage in the shortest digits that read back as the same fraction
    return f"{_percent(value)}%" if key == "grow_by" else repr(value)


def _percent(fraction: float) -> str:
    for digits in range(1, 18):
        text = f"{100.0 * fraction:.{digits}g}"
        if "e" not in text and float(text) / 100.0 == fraction:
            return text
    return f"{Decimal(fraction) * 100:f}"


def _plain(text: str) -> str:
    """Text for a comment: one line, printable."""
    return "".join(c if c.isprintable() else " " for c in " ".join(text.split()))


def quoted(text: str) -> str:
    """Text as a YAML scalar, in quotes unless it is a plain word."""
    if _PLAIN.fullmatch(text) and text.lower() not in _WORDS:
        return text
    return json.dumps(_plain(text), ensure_ascii=False)


def history_text(variables: Mapping[str, Floats], start: int, calendar: str, order: Sequence[str]) -> str:
    """Macro history as the CSV that a study reads: a row per period, blanks before a variable's first value."""
    lines = [",".join(["period", *order])]
    for i in range(len(variables[order[0]])):
        cells = ["" if np.isnan(variables[v][i]) else repr(float(variables[v][i])) for v in order]
        lines.append(",".join([period_label(start + i, calendar), *cells]))
    return "\n".join(lines) + "\n"
