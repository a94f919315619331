"""Validation errors of models in plain words, each at its path in the text.

The validator names unions and functions inside its paths and says what its own types are called.
Here every error is walked down the declared types; at a union the member that the writer meant is
chosen by the keys and the sort of value given, and the value is checked against that member alone.
"""

from __future__ import annotations

import json
import re
from dataclasses import dataclass
from typing import Any, Literal, get_origin

from pydantic import BaseModel, TypeAdapter, ValidationError

from stresskit.spec import shape
from stresskit.spec.base import closest
from stresskit.spec.paths import NO_RANGE, RANGES
from stresskit.spec.places import Keys, Marks, dotted, short
from stresskit.spec.yaml import scalar

#: No more errors than these are put into words; a text with more is wrong in one way many times.
MOST = 100

_KEY = "[key]"
_LONGEST_LIST = 240


@dataclass(frozen=True, slots=True)
class Fault:
    """One error: the path it is about, the words, and whether the key or the value is to blame.

    meant    for an unknown key: the valid key that it was probably meant to be
    missing  for a missing key: its name; ``keys`` is then the mapping that lacks it
    """

    keys: Keys
    message: str
    at_key: bool = False
    meant: str | None = None
    missing: str | None = None

    def text(self) -> str:
        where = dotted(self.keys)
        return f"{where}: {self.message}" if where else self.message


def faults(
    model: type[BaseModel], data: Any, error: ValidationError, marks: Marks
) -> tuple[list[Fault], bool]:
    """Errors of validating ``data`` (plain, as read) as ``model`` in the order of the text, and whether
    there may be more than were put into words (see MOST).
    """
    found = _Explainer(marks, shape.homes(model)).explain(model, data, error, ())
    meant = {(f.keys[:-1], f.meant) for f in found if f.meant is not None}
    kept = [f for f in found if f.missing is None or (f.keys, f.missing) not in meant]
    kept.sort(key=lambda f: marks.of_key(f.keys) if f.at_key else marks.of_value(f.keys))
    return kept, len(found) >= MOST


@dataclass(frozen=True, slots=True)
class _Stop:
    """Where the walk along an error's path ended: type, value, its path, what is left of the error's path."""

    kind: Any
    value: Any
    keys: Keys
    rest: tuple[str | int, ...]


def _walk(kind: Any, value: Any, loc: tuple[str | int, ...], keys: Keys) -> _Stop:
    """Follow an error's path until it ends, meets a union, or leaves the text."""
    while loc:
        members = shape.choices(kind)
        if len(members) != 1 or loc == (_KEY,):
            break
        base, _ = shape.peel(members[0])
        inside = shape.below(base, loc[0])
        holds = (isinstance(value, dict) and loc[0] in value) or (
            isinstance(value, list) and isinstance(loc[0], int) and loc[0] < len(value)
        )
        if inside is None or not holds or loc[1:] == (_KEY,):
            break
        kind, value, keys, loc = inside, value[loc[0]], (*keys, loc[0]), loc[1:]
    return _Stop(kind, value, keys, loc)


class _Explainer:
    def __init__(self, marks: Marks, homes: dict[str, set[str]]) -> None:
        self.marks, self.homes = marks, homes

    def explain(self, kind: Any, value: Any, error: ValidationError, keys: Keys) -> list[Fault]:
        out: list[Fault] = []
        unions: set[Keys] = set()
        for detail in error.errors(include_url=False):
            if len(out) >= MOST:
                break
            stop = _walk(kind, value, detail["loc"], keys)
            if len(shape.choices(stop.kind)) > 1:
                if stop.keys not in unions:
                    unions.add(stop.keys)
                    out.extend(self._union(stop, detail))
            elif not _miscounted(stop, detail):
                out.append(self._one(stop, detail))
        return out

    def _union(self, stop: _Stop, detail: Any) -> list[Fault]:
        """Errors of the member that was meant; one error for the union when none can be told."""
        if detail["type"] == "path" and isinstance(stop.value, dict) and RANGES & stop.value.keys():
            return [Fault(stop.keys, f"{NO_RANGE}; got {self._got(stop.value, stop.keys)}")]
        tag = str(stop.rest[0]) if stop.rest else None
        member = _member(shape.choices(stop.kind), stop.value, tag)
        if member is not None:
            base, _ = shape.peel(member)
            try:
                TypeAdapter(base if shape.is_model(base) else member).validate_json(
                    json.dumps(stop.value), strict=True
                )
            except ValidationError as inner:
                return self.explain(member, stop.value, inner, stop.keys)
        expected = "expected " + shape.describe(stop.kind)
        if detail["type"] in ("path", "term"):
            expected = detail["msg"]
        hint = self._hint(stop.kind, stop.value, stop.keys)
        return [Fault(stop.keys, f"{expected}; got {self._got(stop.value, stop.keys)}{hint}")]

    def _one(self, stop: _Stop, detail: Any) -> Fault:
        what = detail["type"]
        members = shape.choices(stop.kind)
        base, _ = shape.peel(members[0])
        if stop.rest[1:] == (_KEY,):
            return self._bad_key(stop, base, str(stop.rest[0]), detail)
        if what == "extra_forbidden":
            return self._unknown(stop, base, str(stop.rest[0]))
        if what == "missing" and isinstance(stop.rest[0], str):
            name = stop.rest[0]
            expected = shape.describe(shape.below(base, name))
            return Fault(stop.keys, f"missing key {name!r}: expected {expected}", at_key=True, missing=name)
        if what == "value_error":
            cause = detail["ctx"]["error"]
            keys = (*stop.keys, *getattr(cause, "at", ()))
            return Fault(keys, str(cause), at_key=isinstance(stop.value, dict))
        got = self._got(stop.value, stop.keys)
        hint = self._hint(stop.kind, stop.value, stop.keys)
        return Fault(stop.keys, f"expected {shape.describe(stop.kind)}, got {got}{hint}")

    def _bad_key(self, stop: _Stop, base: Any, key: str, detail: Any) -> Fault:
        if shape.key_names(base):
            return self._unknown(stop, base, key)
        if detail["type"] == "value_error":
            message = str(detail["ctx"]["error"])
        else:
            kind = shape.key_type(base)
            message = f"not a key that can stand here: expected {shape.describe(kind)}"
        return Fault((*stop.keys, key), message, at_key=True)

    def _unknown(self, stop: _Stop, base: Any, key: str) -> Fault:
        names = shape.key_names(base)
        given = set(stop.value) if isinstance(stop.value, dict) else set()
        near = closest(key, [n for n in names if n not in given])
        if near is not None and len(self.homes.get(key, set())) == 1 and closest(key, [near], 0.75) is None:
            near = None  # a key spelled right in the wrong place, rather than a faint likeness
        message = "unknown key"
        if near is not None:
            message += f"; did you mean {near!r}?"
        elif key in names:
            message += "; it is given already"
        elif len(homes := self.homes.get(key, set())) == 1 and "<name>" not in (home := next(iter(homes))):
            message += f" here; it belongs under {home}" if home else " here; it belongs at the top"
        listed = ", ".join(names)
        if len(listed) <= _LONGEST_LIST:
            message += f" (keys here: {listed})"
        return Fault((*stop.keys, key), message, at_key=True, meant=near)

    def _got(self, value: Any, keys: Keys) -> str:
        sort = shape.sort_of(value)
        if sort == "mapping":
            given = ", ".join(short(k, 30) for k in list(value)[:4])
            return (
                f"a mapping with key{'s' if len(value) > 1 else ''} {given}" if value else "an empty mapping"
            )
        if sort == "list":
            return (
                f"a list of {len(value)} item{'s' if len(value) != 1 else ''}" if value else "an empty list"
            )
        if sort == "null":
            return "null"
        mark = self.marks.by_keys.get(keys)
        written = short(mark.written) if mark is not None and mark.written is not None else str(value)
        if sort == "text":
            return f"the {'quoted ' if mark is not None and mark.quoted else ''}text {short(str(value))!r}"
        return written if sort == "truth" else f"the number {written}"

    def _hint(self, kind: Any, value: Any, keys: Keys) -> str:
        """The remedy, where one can be told from what was written."""
        members = shape.choices(kind)
        wanted, sort = {shape.takes(m) for m in members}, shape.sort_of(value)
        words = [
            w for m in members if get_origin(shape.peel(m)[0]) is Literal for w in shape.peel(m)[0].__args__
        ]
        mark = self.marks.by_keys.get(keys)
        named = shape.words_of(members[0])
        quotable = named is None or named.quotes
        if sort in ("number", "truth") and wanted == {"text"} and quotable and not words and mark is not None:
            return f": put it in quotes, '{short(mark.written or '')}'"
        if sort == "text" and words and (near := closest(value, words)):
            return f"; did you mean {near!r}?"
        if sort == "text" and "number" in wanted and named is None:
            return _number_hint(value, quoted=mark is not None and mark.quoted)
        if wanted == {"list"} and sort in ("text", "number", "truth") and mark is not None:
            return f": write [{short(mark.written or '', 30)}]"
        if wanted == {"list"} and sort == "mapping":
            return ": begin each item with '- '"
        if wanted == {"mapping"} and sort == "text" and re.search(r"\w:\S", value):
            return ": a key needs a space after its ':'"
        return ""


def _miscounted(stop: _Stop, detail: Any) -> bool:
    """A list called too short only because its items are wrong, which is reported by itself."""
    return (
        detail["type"] == "too_short"
        and isinstance(stop.value, list | dict)
        and (len(stop.value) >= detail["ctx"]["min_length"])
    )


#: What word processors and documents put for a minus sign.
_MINUS = {ord(c): "-" for c in "\u2010\u2011\u2012\u2013\u2014\u2212\ufe63\uff0d"}


def _read(text: str) -> str | int | float | bool | None:
    try:
        return scalar(text.strip())
    except ValueError:
        return text


def _number_hint(text: str, *, quoted: bool) -> str:
    value = _read(text)
    if quoted and isinstance(value, int | float) and not isinstance(value, bool):
        return ": take the quotes off"
    plain = text.translate(_MINUS)
    if plain != text and isinstance(_read(plain), int | float):
        return f": {text.strip()[0]!r} is no minus sign (U+{ord(text.strip()[0]):04X}); write {plain.strip()}"
    if re.fullmatch(r"[-+]?[\d,_' ]*\d[\d,_' .]*", text):
        return ": write digits with a decimal point and nothing else, such as 1234.5"
    if text.strip().endswith("%"):
        return ": write it without the percent sign, in the unit that is expected here"
    return ""


def _member(members: list[Any], value: Any, tag: str | None) -> Any:
    """The member of a union that the writer meant, or None."""
    sort = shape.sort_of(value)
    fitting = [m for m in members if shape.takes(m) == sort]
    if sort != "mapping":
        # Words of a choice and unions of several scalars are named together: "expected 'rate', 'none' or a number".
        return (
            fitting[0] if len(fitting) == 1 and get_origin(shape.peel(fitting[0])[0]) is not Literal else None
        )
    tagged = [m for m in fitting if tag is not None and shape.tag_of(m) == tag]
    if tagged and tag in value:
        return tagged[0]
    scores = [_likeness(m, value) for m in fitting]
    if not scores or max(scores) <= 0:
        free = [m for m in fitting if not shape.key_names(shape.peel(m)[0])]
        return free[0] if free and value else None
    return max(zip(scores, fitting, strict=True), key=lambda pair: pair[0])[1]


def _likeness(member: Any, value: dict[str, Any]) -> float:
    """Keys that the member knows, nearly known ones counting a little less, less a little for each it lacks."""
    base, _ = shape.peel(member)
    names = shape.key_names(base)
    known = {key for key in value if key in names}
    open_names = [n for n in names if n not in known]
    near = {n for key in list(value)[:50] if key not in known and (n := closest(key, open_names))}
    lacking = [n for n in shape.required(base) if n not in known | near] if shape.is_model(base) else []
    score = len(known) + 0.9 * len(near)
    return score - 0.01 * len(lacking) if score else 0.0
