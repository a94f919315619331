"""A strict reader of YAML text: plain data, and the place of every key and value.

Conventions

- Grammar: YAML 1.2 core schema, cut down. ``true false null ~`` and decimal numbers (``5``, ``-0.5``,
  ``1e-3``, ``.5``) are what they look like; everything else unquoted is text: ``NO``, ``on``, ``12:30``,
  ``2025-12``, and also ``007``, ``0x1F`` and ``1_000``, since codes with leading zeros are common in loan
  files and must not turn into other numbers.
- Refused, since they hide what a reader of the file sees: duplicate keys, anchors, aliases, merge keys,
  tags, directives, a second document, keys without a value, NaN and infinity, tabs, invisible line
  separators, unquoted text that runs over several lines. Nothing is ever executed or constructed.
- Bounds: MAX_BYTES, MAX_DEPTH and MAX_NODES, checked while reading.
- Places are 1-based lines and columns; columns count characters.
- Everything refused is a TextError with file, line and column.
"""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from types import MappingProxyType
from typing import Any, NoReturn

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.events import (
    AliasEvent,
    DocumentStartEvent,
    MappingEndEvent,
    MappingStartEvent,
    ScalarEvent,
    SequenceEndEvent,
    SequenceStartEvent,
)

from stresskit.core.errors import TextError
from stresskit.spec.places import Document, Keys, Mark, Marks, dotted, short
from stresskit.spec.syntax import lookalike, plain_syntax

MAX_BYTES = 1_000_000
MAX_DEPTH = 32
MAX_NODES = 50_000
MAX_DIGITS = 18

_INTEGER = re.compile(r"[-+]?(?:0|[1-9][0-9]*)")
_FLOAT = re.compile(r"[-+]?(?:\.[0-9]+|(?:0|[1-9][0-9]*)(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?")
_NOT_FINITE = re.compile(r"[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)")
_WORDS: Mapping[str, bool | None] = MappingProxyType(
    {"true": True, "True": True, "TRUE": True, "false": False, "False": False, "FALSE": False}
    | {"null": None, "Null": None, "NULL": None, "~": None}
)
#: Control characters, and those that change what a reader sees without being seen: soft hyphen, zero-width space,
#: marks and overrides of the writing direction. Joiners stay, since some scripts need them.
_UNSEEN = re.compile(
    "[^\n\r\x20-\x7e\xa0-\xac\xae-\u200a\u200c\u200d\u2010-\u2027\u202f-\u205f\u2070-\ud7ff\ue000-\ufefe\uff00-\ufffd"
    "\U00010000-\U0010ffff]"
)
_UNSEEN_IN_VALUE = re.compile(
    "[\x00-\x08\x0b-\x1f\x7f-\x9f\xad\u200b\u200e\u200f\u202a-\u202e\u2060-\u206f\ud800-\udfff\ufeff\ufffe\uffff]"
)
_LINE_END = re.compile(r"\r\n|\n|\r")


def scalar(text: str) -> str | int | float | bool | None:
    """What an unquoted scalar means. Raises ValueError for NaN, infinity and numbers too large to keep."""
    if text in _WORDS:
        return _WORDS[text]
    if _INTEGER.fullmatch(text):
        if len(text.lstrip("+-")) > MAX_DIGITS:
            raise ValueError(
                f"{short(text)!r} has more than {MAX_DIGITS} digits: write a smaller number, or put it in quotes"
            )
        return int(text)
    if _FLOAT.fullmatch(text):
        value = float(text)
        if value in (float("inf"), float("-inf")):
            raise ValueError(f"{short(text)!r} is too large for a number")
        if value == 0.0 and re.search("[1-9]", re.split("[eE]", text)[0]):
            raise ValueError(f"{short(text)!r} is too small for a number: write 0, or a larger one")
        return value
    if _NOT_FINITE.fullmatch(text):
        raise ValueError(f"{text!r} is not a finite number: write a number, or leave the key out")
    return text


def read_document(content: bytes, file: str) -> Document:
    """Read one YAML document whose top is a mapping. ``file`` is how messages name the source."""
    text = _decode(content, file)
    builder = _Builder(text, file)
    for event in _events(text, file):
        builder.take(event)
    return builder.document()


def _decode(content: bytes, file: str) -> str:
    if len(content) > MAX_BYTES:
        raise TextError(f"larger than {MAX_BYTES:,} bytes, the largest text that is read", file=file)
    try:
        text = content.decode("utf-8")
    except UnicodeDecodeError as error:
        line, column = _place(content[: error.start].decode("utf-8"), error.start)
        raise TextError(
            f"not UTF-8 text (byte 0x{content[error.start]:02x}): save the file as UTF-8",
            file=file,
            line=line,
            column=column,
        ) from None
    text = text.removeprefix("\ufeff")
    if found := _UNSEEN.search(text):
        line, column = _place(text, found.start())
        what = (
            "a tab: use spaces"
            if found[0] == "\t"
            else f"an invisible character U+{ord(found[0]):04X}: take it out"
        )
        raise TextError(what, file=file, line=line, column=column)
    if not text.strip():
        raise TextError("the file is empty", file=file, line=1, column=1)
    _refuse_directives(text, file)
    return text


def _refuse_directives(text: str, file: str) -> None:
    for number, line in enumerate(_LINE_END.split(text), start=1):
        if line.startswith("%"):
            raise TextError(
                "lines that begin with % (YAML directives) are not read", file=file, line=number, column=1
            )
        if line.strip() and not line.lstrip().startswith("#"):
            return


def _place(text: str, offset: int) -> tuple[int, int]:
    """Line and column (1-based) of the character at ``offset``."""
    lines = _LINE_END.split(text[:offset])
    return len(lines), len(lines[-1]) + 1


def _events(text: str, file: str) -> Iterator[Any]:
    """Parser events; the parser's own errors in plain words."""
    yaml = YAML(typ="safe", pure=True)
    _, parser = yaml.get_constructor_parser(text)
    try:
        while parser.check_event():
            yield parser.get_event()
    except MarkedYAMLError as error:
        message, mark = plain_syntax(error, text)
        line, column = (mark.line + 1, mark.column + 1) if mark is not None else (1, 1)
        raise TextError(message, file=file, line=line, column=column) from None
    except (YAMLError, ValueError, OverflowError):
        # Escapes beyond the last character (\UFFFFFFFF) end in chr() inside the scanner, without a mark.
        line, column = yaml.reader.line + 1, yaml.reader.column + 1
        raise TextError(
            "an escape sequence that names no character", file=file, line=line, column=column
        ) from None


class _Frame:
    """A mapping or list that is being filled."""

    __slots__ = ("items", "key", "key_place", "keys")

    def __init__(self, keys: Keys, items: dict[str, Any] | list[Any]) -> None:
        self.keys, self.items = keys, items
        self.key: str | None = None
        self.key_place = (1, 1)


class _Builder:
    """Turns events into data and marks, and refuses what is listed at the top of this module."""

    def __init__(self, text: str, file: str) -> None:
        self.text, self.file = text, file
        self.stack: list[_Frame] = []
        self.marks: dict[Keys, Mark] = {}
        self.root: Any = None
        self.documents = 0

    def take(self, event: Any) -> None:
        place = event.start_mark.line + 1, event.start_mark.column + 1
        if isinstance(event, DocumentStartEvent):
            self.documents += 1
            if self.documents > 1:
                self._refuse("a second document begins here: one file holds one document", place)
        elif isinstance(event, AliasEvent):
            self._refuse(f"alias *{short(event.anchor)}: aliases are not read, write the value out", place)
        elif isinstance(event, ScalarEvent):
            self._refuse_properties(event, place)
            self._scalar(event, place)
        elif isinstance(event, MappingStartEvent | SequenceStartEvent):
            self._refuse_properties(event, place)
            self._open({} if isinstance(event, MappingStartEvent) else [], place)
        elif isinstance(event, MappingEndEvent | SequenceEndEvent):
            self.stack.pop()

    def document(self) -> Document:
        if not isinstance(self.root, dict):
            raise TextError("the file is empty", file=self.file, line=1, column=1)
        return Document(self.root, Marks(self.marks), self.text)

    def _refuse(self, message: str, place: tuple[int, int]) -> NoReturn:
        raise TextError(message, file=self.file, line=place[0], column=place[1])

    def _refuse_properties(self, event: Any, place: tuple[int, int]) -> None:
        if event.anchor is not None:
            self._refuse(f"anchor &{short(event.anchor)}: anchors are not read, write the value out", place)
        if event.tag is not None:
            self._refuse("a tag (!...): tags are not read, write the plain value", place)

    def _scalar(self, event: Any, place: tuple[int, int]) -> None:
        text, quoted = event.value, event.style is not None
        frame = self.stack[-1] if self.stack else None
        expects_key = frame is not None and isinstance(frame.items, dict) and frame.key is None
        if not quoted and not text:
            self._refuse_empty(frame, expects_key, place)
        if not quoted and event.end_mark.line != event.start_mark.line:
            self._refuse(
                f"{short(text)!r} runs on to line {event.end_mark.line + 1}: check indentation, commas and "
                f"brackets, or put the text in quotes{lookalike(text)}",
                place,
            )
        if found := _UNSEEN_IN_VALUE.search(text):
            self._refuse(f"text with an invisible character U+{ord(found[0]):04X}: take it out", place)
        if expects_key:
            self._key(text, quoted, place)
            return
        try:
            value = text if quoted else scalar(text)
        except ValueError as error:
            self._refuse(self._named(str(error)), place)
        self._add(value, place, written=text, quoted=quoted)

    def _refuse_empty(self, frame: _Frame | None, expects_key: bool, place: tuple[int, int]) -> NoReturn:
        if frame is None:
            self._refuse("the file is empty", (1, 1))
        if isinstance(frame.items, list):
            self._refuse(self._named("an empty list item"), place)
        if expects_key:
            self._refuse("a value without a key", place)
        key = str(frame.key)
        hint = ""
        if re.match(r"[\w\-]+:", key):
            hint = " (a key needs a space after its ':')"
        elif key.isdecimal():
            hint = " (decimals are written with a point, not a comma)"
        self._refuse(
            self._named("a key without a value: give one, or take the key out") + hint, frame.key_place
        )

    def _named(self, message: str) -> str:
        """The message with the path of the value that is being read in front."""
        where = dotted(self._next_keys()) if self.stack else ""
        return f"{where}: {message}" if where else message

    def _next_keys(self) -> Keys:
        frame = self.stack[-1]
        if isinstance(frame.items, list):
            return (*frame.keys, len(frame.items))
        return (*frame.keys, frame.key) if frame.key is not None else frame.keys

    def _key(self, text: str, quoted: bool, place: tuple[int, int]) -> None:
        frame = self.stack[-1]
        if text == "<<" and not quoted:
            self._refuse("merge key <<: merge keys are not read, write the keys out", place)
        if text in frame.items:
            first = self.marks[(*frame.keys, text)]
            self._refuse(
                f"{dotted((*frame.keys, text))}: duplicate key, given first at line {first.key_line}, "
                f"column {first.key_column}",
                place,
            )
        frame.key, frame.key_place = text, place

    def _open(self, items: dict[str, Any] | list[Any], place: tuple[int, int]) -> None:
        if len(self.stack) >= MAX_DEPTH:
            self._refuse(f"nested deeper than {MAX_DEPTH} levels", place)
        if self.stack and isinstance(self.stack[-1].items, dict) and self.stack[-1].key is None:
            self._refuse("a list or mapping as a key: keys are plain text", place)
        keys = self._next_keys() if self.stack else ()
        self._add(items, place)
        self.stack.append(_Frame(keys, items))

    def _add(
        self, value: Any, place: tuple[int, int], *, written: str | None = None, quoted: bool = False
    ) -> None:
        if len(self.marks) >= MAX_NODES:
            self._refuse(f"more than {MAX_NODES:,} values in one file", place)
        if not self.stack:
            if not isinstance(value, dict):
                what = "a list" if isinstance(value, list) else f"a single value{lookalike(str(value))}"
                self._refuse(f"expected 'key: value' lines at the top, got {what}", place)
            self.root, self.marks[()] = value, Mark(*place, *place)
            return
        frame, keys = self.stack[-1], self._next_keys()
        if isinstance(frame.items, list):
            self.marks[keys] = Mark(*place, *place, written, quoted)
            frame.items.append(value)
        else:
            self.marks[keys] = Mark(*place, *frame.key_place, written, quoted)
            frame.items[str(frame.key)] = value
            frame.key = None
