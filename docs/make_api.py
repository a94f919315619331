"""Write docs/api.md: signature and docstring of every name that the package exports, and of what these give back.

Run from anywhere: ``python docs/make_api.py``. tests/docs compares the committed page with what this gives.
"""

from __future__ import annotations

import dataclasses
import importlib
import inspect
from pathlib import Path
from typing import Any

import stresskit

PAGE = Path(__file__).with_name("api.md")
#: What the exported functions take and return.
VALUES = (
    "stresskit.runs.inputs:StudyFile",
    "stresskit.runs.inputs:Prepared",
    "stresskit.runs.records:StudyResult",
    "stresskit.runs.records:Analysis",
    "stresskit.runs.records:AnalysisTable",
    "stresskit.runs.setting:Setting",
    "stresskit.loss.result:LossResult",
    "stresskit.core.errors:StresskitError",
)
HEAD = """# Python reference

<!-- Written by docs/make_api.py from the docstrings. Change those, then run it. -->

Everything a user calls is a name of the package: `import stresskit as sk`. [From Python](python.md) shows how they work together.
"""


def _parameter(p: inspect.Parameter) -> str:
    text = {p.VAR_POSITIONAL: "*", p.VAR_KEYWORD: "**"}.get(p.kind, "") + p.name
    if p.annotation is not p.empty:
        text += (
            f": {p.annotation if isinstance(p.annotation, str) else inspect.formatannotation(p.annotation)}"
        )
    if p.default is not p.empty:
        text += f" = {p.default.__name__.lstrip('_') if callable(p.default) else repr(p.default)}"
    return text


def _signature(name: str, thing: Any) -> str:
    """On one line, or a line per argument where it would be long."""
    told = inspect.signature(thing)
    parts, keyword = [], False
    for p in told.parameters.values():
        if p.kind is p.KEYWORD_ONLY and not keyword:
            parts.append("*")
            keyword = True
        parts.append(_parameter(p))
    back = told.return_annotation
    after = (
        ""
        if back is told.empty
        else f" -> {back if isinstance(back, str) else inspect.formatannotation(back)}"
    )
    line = f"{name}({', '.join(parts)}){after}"
    if len(line) <= 100:
        return line
    return f"{name}(\n" + "".join(f"    {part},\n" for part in parts) + f"){after}"


def _methods(thing: type) -> list[tuple[str, Any]]:
    out = []
    for name, member in vars(thing).items():
        if name.startswith("_") or not (
            inspect.isfunction(member) or isinstance(member, property | classmethod)
        ):
            continue
        if inspect.getdoc(member):
            out.append((name, member))
    return out


def _entry(name: str, thing: Any) -> list[str]:
    lines = [f"## {name.rpartition('.')[2]}", ""]
    # Dataclasses and errors list their fields in the docstring; the constructor is not how one gets them.
    shown = name if dataclasses.is_dataclass(thing) or inspect.isclass(thing) else _signature(name, thing)
    lines += ["```text", shown, "", inspect.getdoc(thing) or "", "```", ""]
    for method, member in _methods(thing) if inspect.isclass(thing) else ():
        call = method if isinstance(member, property) else _signature(method, getattr(thing, method))
        lines += ["```text", f".{call}", "", inspect.getdoc(member) or "", "```", ""]
    return lines


def page() -> str:
    """The page as text."""
    lines = [HEAD]
    for name in sorted(stresskit.__all__, key=str.lower):
        if not name.startswith("_"):
            lines += _entry(f"stresskit.{name}", getattr(stresskit, name))
    for where in VALUES:
        module, _, name = where.partition(":")
        lines += _entry(f"{module}.{name}", getattr(importlib.import_module(module), name))
    return "\n".join(line.rstrip() for line in "\n".join(lines).splitlines()).rstrip() + "\n"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
