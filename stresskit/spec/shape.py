"""What a model allows at a place: walks the declared types, and says them in words.

A type here is what stands in an annotation: a model class, ``Annotated``, a union, ``Literal``,
``dict``, ``tuple``, or a plain class.
"""

from __future__ import annotations

import types
from collections.abc import Iterator
from functools import lru_cache
from typing import Annotated, Any, Literal, Union, get_args, get_origin

from annotated_types import Ge, Gt, Le, Lt, MinLen
from pydantic import BaseModel, Tag
from pydantic.fields import FieldInfo

from stresskit.spec.base import Words


def peel(kind: Any) -> tuple[Any, tuple[Any, ...]]:
    """The type without ``Annotated``, and its metadata (fields flattened into their constraints)."""
    if get_origin(kind) is not Annotated:
        return kind, ()
    base, *extra = get_args(kind)
    flat: list[Any] = []
    for item in extra:
        flat.extend(item.metadata if isinstance(item, FieldInfo) else [item])
    return base, tuple(flat)


def is_model(base: Any) -> bool:
    return isinstance(base, type) and issubclass(base, BaseModel)


@lru_cache(maxsize=256)
def fields(model: type[BaseModel]) -> dict[str, Any]:
    """Key as written in YAML -> its type."""
    out = {}
    for name, info in model.model_fields.items():
        kind: Any = info.annotation
        out[info.alias or name] = Annotated[kind, *info.metadata] if info.metadata else kind
    return out


def required(model: type[BaseModel]) -> list[str]:
    return [info.alias or name for name, info in model.model_fields.items() if info.is_required()]


def choices(kind: Any) -> list[Any]:
    """The members of a union but None; a type that is no union is its only member."""
    base, _ = peel(kind)
    if get_origin(base) not in (Union, types.UnionType):
        return [kind]
    out: list[Any] = []
    for member in get_args(base):
        if member is not types.NoneType:
            out.extend(choices(member))
    return out


def tag_of(kind: Any) -> str | None:
    """The tag that a member of a tagged union carries."""
    return next((item.tag for item in peel(kind)[1] if isinstance(item, Tag)), None)


def key_names(base: Any) -> list[str]:
    """The keys a mapping type allows, empty when any will do."""
    if is_model(base):
        return list(fields(base))
    if get_origin(base) is dict:
        key, _ = peel(get_args(base)[0])
        return list(get_args(key)) if get_origin(key) is Literal else []
    return []


def key_type(base: Any) -> Any:
    """The type of the keys of a ``dict``; any text for other mappings."""
    return get_args(base)[0] if get_origin(base) is dict else str


def below(base: Any, key: str | int) -> Any:
    """The type of the value at ``key``, None when the type has no such place."""
    if is_model(base):
        return fields(base).get(str(key))
    if get_origin(base) is dict:
        return get_args(base)[1]
    if get_origin(base) is tuple and isinstance(key, int):
        items = get_args(base)
        if items[-1] is Ellipsis:
            return items[0]
        return items[key] if key < len(items) else None
    return None


def sort_of(value: object) -> str:
    """What a value of the text is: mapping, list, text, truth, number or null."""
    if isinstance(value, dict):
        return "mapping"
    if isinstance(value, list):
        return "list"
    if isinstance(value, str):
        return "text"
    if isinstance(value, bool):
        return "truth"
    return "null" if value is None else "number"


def takes(kind: Any) -> str:
    """The sort of value that a type (no union) is written as."""
    base, _ = peel(kind)
    if is_model(base) or get_origin(base) is dict:
        return "mapping"
    if get_origin(base) is tuple:
        return "list"
    if get_origin(base) is Literal or base is str:
        return "text"
    return "truth" if base is bool else "number"


def describe(kind: Any) -> str:
    """The type in words, as in "expected ..."."""
    members = choices(kind)
    words: list[str] = []
    for member in members:
        base, _ = peel(member)
        words += [repr(v) for v in get_args(base)] if get_origin(base) is Literal else [_one(member)]
    return _join(words)


def words_of(kind: Any) -> Words | None:
    return next((item for item in peel(kind)[1] if isinstance(item, Words)), None)


def _one(kind: Any) -> str:
    base, extra = peel(kind)
    words = words_of(kind)
    if words is not None:
        return words.words
    if is_model(base):
        return "{" + ", ".join(f"{name}: ..." for name in required(base) or list(fields(base))[:3]) + "}"
    if get_origin(base) is tuple and get_args(base)[-1] is not Ellipsis:
        return f"a list of {len(get_args(base))} items"
    if get_origin(base) in (tuple, dict):
        item = get_args(base)[0 if get_origin(base) is tuple else 1]
        what = "a list" if get_origin(base) is tuple else "a mapping"
        least = next((e.min_length for e in extra if isinstance(e, MinLen)), 0)
        return f"{what} of {'at least ' + str(least) + ' ' if least else ''}{_plural(item, least)}"
    if base is bool:
        return "true or false"
    if base is str:
        return "text"
    return ("a whole number" if base is int else "a number") + _bounds(extra)


def _plural(item: Any, count: int) -> str:
    base, _ = peel(item)
    many = count != 1
    if base in (int, float):
        return "numbers" if many else "number"
    if base is str:
        return "texts" if many else "text"
    return "items" if many else "item"


def _bounds(extra: tuple[Any, ...]) -> str:
    low = next((f"at least {e.ge:g}" for e in extra if isinstance(e, Ge)), None)
    high = next((f"at most {e.le:g}" for e in extra if isinstance(e, Le)), None)
    low = low or next((f"above {e.gt:g}" for e in extra if isinstance(e, Gt)), None)
    high = high or next((f"below {e.lt:g}" for e in extra if isinstance(e, Lt)), None)
    if low is None and high is None:
        return ""
    if low and high and low.startswith("at least ") and high.startswith("at most "):
        return f" from {low.removeprefix('at least ')} to {high.removeprefix('at most ')}"
    return " " + " and ".join(part for part in (low, high) if part)


def _join(words: list[str]) -> str:
    return words[0] if len(words) == 1 else ", ".join(words[:-1]) + " or " + words[-1]


def homes(top: type[BaseModel]) -> dict[str, set[str]]:
    """Key -> paths of the mappings under ``top`` that have it, for keys that were put in the wrong place."""
    out: dict[str, set[str]] = {}
    for path, name in _all_keys(top, ""):
        out.setdefault(name, set()).add(path)
    return out


def _all_keys(kind: Any, path: str) -> Iterator[tuple[str, str]]:
    for member in choices(kind):
        base, _ = peel(member)
        if is_model(base):
            for name, inner in fields(base).items():
                yield path, name
                yield from _all_keys(inner, f"{path}.{name}" if path else name)
        elif get_origin(base) is dict:
            for name in key_names(base):
                yield path, name
            yield from _all_keys(get_args(base)[1], f"{path}.<name>")
        elif get_origin(base) is tuple:
            yield from _all_keys(get_args(base)[0], path)
