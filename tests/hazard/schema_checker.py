"""A small JSON Schema checker: the keywords that our schemas use, and an error for any other."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from typing import Any

NOTES = {"$schema", "$defs", "title", "description", "default", "discriminator", "examples"}
TYPES: dict[str, Callable[[Any], bool]] = {
    "object": lambda v: isinstance(v, dict),
    "array": lambda v: isinstance(v, list),
    "string": lambda v: isinstance(v, str),
    "boolean": lambda v: isinstance(v, bool),
    "null": lambda v: v is None,
    "integer": lambda v: isinstance(v, int) and not isinstance(v, bool),
    "number": lambda v: isinstance(v, int | float) and not isinstance(v, bool),
}
#: keyword -> (type it speaks of, whether a value breaks it)
LIMITS: dict[str, tuple[str, Callable[[Any, Any], bool]]] = {
    "minimum": ("number", lambda v, n: v < n),
    "maximum": ("number", lambda v, n: v > n),
    "exclusiveMinimum": ("number", lambda v, n: v <= n),
    "exclusiveMaximum": ("number", lambda v, n: v >= n),
    "minItems": ("array", lambda v, n: len(v) < n),
    "maxItems": ("array", lambda v, n: len(v) > n),
    "minProperties": ("object", lambda v, n: len(v) < n),
    "minLength": ("string", lambda v, n: len(v) < n),
    "maxLength": ("string", lambda v, n: len(v) > n),
    "pattern": ("string", lambda v, p: re.search(p, v) is None),
}


def broken(
    value: Any, schema: dict[str, Any], root: dict[str, Any] | None = None, at: str = "$"
) -> list[str]:
    """What of ``value`` does not follow ``schema``; empty when all does. KeyError for keywords not known here."""
    return list(_broken(value, schema, schema if root is None else root, at))


def _broken(value: Any, schema: dict[str, Any], root: dict[str, Any], at: str) -> Iterator[str]:
    for keyword, wanted in schema.items():
        if keyword in NOTES or keyword in (
            "properties",
            "additionalProperties",
            "patternProperties",
            "prefixItems",
        ):
            continue
        if keyword == "$ref":
            yield from _broken(value, _referred(wanted, root), root, at)
        elif keyword == "type":
            names = [wanted] if isinstance(wanted, str) else wanted
            if not any(TYPES[n](value) for n in names):
                yield f"{at}: {value!r} is not of type {wanted}"
        elif keyword == "const":
            if value != wanted or type(value) is not type(wanted):
                yield f"{at}: {value!r} is not {wanted!r}"
        elif keyword == "enum":
            if value not in wanted:
                yield f"{at}: {value!r} is none of {wanted}"
        elif keyword in ("anyOf", "oneOf"):
            fitting = sum(not broken(value, option, root, at) for option in wanted)
            if fitting == 0 or (keyword == "oneOf" and fitting > 1):
                yield f"{at}: fits {fitting} of {len(wanted)} forms"
        elif keyword == "required":
            yield from (
                f"{at}: no {name!r}" for name in wanted if isinstance(value, dict) and name not in value
            )
        elif keyword == "propertyNames":
            for name in value if isinstance(value, dict) else ():
                yield from _broken(name, wanted, root, f"{at}.{name}")
        elif keyword == "items":
            first = len(schema.get("prefixItems", ()))
            for i, item in enumerate(value if isinstance(value, list) else ()):
                if i >= first:
                    yield from _broken(item, wanted, root, f"{at}[{i}]")
        else:
            kind, breaks = LIMITS[keyword]
            if TYPES[kind](value) and breaks(value, wanted):
                yield f"{at}: {value!r} breaks {keyword} {wanted!r}"
    if isinstance(value, list):
        for i, (item, form) in enumerate(zip(value, schema.get("prefixItems", ()), strict=False)):
            yield from _broken(item, form, root, f"{at}[{i}]")
    if isinstance(value, dict):
        yield from _members(value, schema, root, at)


def _members(value: dict[str, Any], schema: dict[str, Any], root: dict[str, Any], at: str) -> Iterator[str]:
    named, patterns = schema.get("properties", {}), schema.get("patternProperties", {})
    for name, member in value.items():
        forms = [named[name]] if name in named else []
        forms += [form for pattern, form in patterns.items() if re.search(pattern, name)]
        if not forms:
            more = schema.get("additionalProperties", True)
            if more is False:
                yield f"{at}: unknown {name!r}"
            elif isinstance(more, dict):
                forms = [more]
        for form in forms:
            yield from _broken(member, form, root, f"{at}.{name}")


def _referred(pointer: str, root: dict[str, Any]) -> dict[str, Any]:
    here: Any = root
    for part in pointer.removeprefix("#/").split("/"):
        here = here[part]
    assert isinstance(here, dict)
    return here
