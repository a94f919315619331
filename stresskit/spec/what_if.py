"""One line of text to a shock: ``unemployment_rate + 4 over 4 quarters then back over 8 quarters``.

    what-if  = shock { ";" shock } [ "on" SCENARIO ]
    shock    = VARIABLE change [ "over" SPAN ] [ "then" ( "hold" | "back" "over" SPAN ) ]
    change   = ( "+" | "-" ) NUMBER [ "%" ]  |  ( "x" | "*" ) NUMBER  |  "to" NUMBER
    SPAN     = whole number, then month(s), quarter(s) or year(s)

``+ 4`` is an amount in the variable's unit, ``- 10%`` and ``x 0.9`` are relative to the other scenario's path,
``to 8`` is a level reached straight from history's last value. Without ``over`` the change is there in the first
period; without ``then`` it stays. Nothing is evaluated: the text is cut into words and read from left to right.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

from stresskit.core.errors import TextError

#: How messages name the place.
SOURCE = "what-if"
LONGEST = 500
LONGEST_NUMBER = 12

_MONTHS = {"month": 1, "months": 1, "quarter": 3, "quarters": 3, "year": 12, "years": 12}
_WORD = re.compile(
    r"\s*(?:(?P<name>[A-Za-z][A-Za-z0-9_\-]*)|(?P<number>\d+(?:\.\d*)?|\.\d+)|(?P<sign>[-+*%;]))", re.ASCII
)
_CHANGES = "+ 4, - 10%, x 0.9 or to 8"
_SPANS = "a span such as 4 quarters"


@dataclass(frozen=True, slots=True)
class Word:
    """A piece of the text: what it is, as written, and its column (1-based)."""

    kind: Literal["name", "number", "sign", "end"]
    text: str
    column: int


@dataclass(frozen=True, slots=True)
class Span:
    """A stretch of time in months, with the unit it was written in."""

    months: int
    written: str
    column: int


@dataclass(frozen=True, slots=True)
class Shock:
    """One variable's change.

    change   points: plus ``size``; percent: by ``size`` percent; factor: times ``size``; level: to ``size``
    size     the number as written, with its sign for points and percent
    over     until it is reached, None: at once
    back     from there until it is gone, None: it stays
    column, size_column   of variable and number in the text; ``line``: which text (1-based)
    """

    variable: Word
    change: Literal["points", "percent", "factor", "level"]
    size: str
    size_column: int
    over: Span | None
    back: Span | None
    line: int


@dataclass(frozen=True, slots=True)
class WhatIf:
    """All shocks of one scenario, and the scenario they change (None: not said).

    texts  as given, one per line of messages
    """

    shocks: tuple[Shock, ...]
    on: str | None
    on_place: tuple[int, int]
    texts: tuple[str, ...]

    @property
    def text(self) -> str:
        """Everything in one line, with single spaces."""
        return "; ".join(" ".join(t.split()) for t in self.texts)

    def error(self, line: int, column: int, message: str) -> TextError:
        """The error at a place of the text, which is shown with a mark below it."""
        return _error(self.texts[line - 1], line, column, message)

    def about(self, keys: tuple[str | int, ...], message: str) -> TextError:
        """The error about what the scenario made of this says under ``keys``: at the variable's shock, or at the first."""
        named = keys[1] if len(keys) > 1 and keys[0] in ("paths", "afterwards") else None
        shock = next((s for s in self.shocks if s.variable.text == named), self.shocks[0])
        return self.error(shock.line, shock.variable.column, message)


def _error(text: str, line: int, column: int, message: str) -> TextError:
    shown = "".join(c if c.isprintable() else " " for c in text)
    return TextError(f"{message}\n  {shown}\n  {' ' * (column - 1)}^", file=SOURCE, line=line, column=column)


def parse_what_if(texts: str | Sequence[str]) -> WhatIf:
    """Read one text, or several that make one scenario. Raises TextError with line (which text) and column."""
    listed = (texts,) if isinstance(texts, str) else tuple(texts)
    if not listed:
        raise TextError(
            "there is no text: write a shock such as unemployment_rate + 4 over 4 quarters", file=SOURCE
        )
    shocks: list[Shock] = []
    on: Word | None = None
    place = (1, 1)
    for line, text in enumerate(listed, start=1):
        reader = _Reader(text, line)
        shocks += reader.shocks()
        found = reader.on
        if found is None:
            continue
        if on is not None and found.text != on.text:
            raise _error(
                text, line, found.column, f"one scenario changes one other: {on.text!r} was named before"
            )
        on, place = found, (line, found.column)
    out = WhatIf(tuple(shocks), None if on is None else on.text, place, listed)
    for i, shock in enumerate(shocks):
        if any(shock.variable.text == s.variable.text for s in shocks[:i]):
            raise out.error(shock.line, shock.variable.column, f"{shock.variable.text} is changed twice")
    return out


def _words(text: str, line: int) -> list[Word]:
    if len(text) > LONGEST:
        raise TextError(f"longer than {LONGEST} characters", file=SOURCE, line=line, column=LONGEST + 1)
    out: list[Word] = []
    at = 0
    while text[at:].strip(" "):
        found = _WORD.match(text, at)
        if found is None or re.search(r"[^ ]", text[at : found.start(found.lastgroup or 0)]):
            column = at + len(text[at:]) - len(text[at:].lstrip(" ")) + 1
            raise _error(text, line, column, f"{text[column - 1]!r} is not part of a what-if")
        group = found.lastgroup
        assert group is not None
        if group == "number" and len(found[group]) > LONGEST_NUMBER:
            raise _error(text, line, found.start(group) + 1, f"more than {LONGEST_NUMBER} digits")
        out.append(Word(group, found[group], found.start(group) + 1))  # type: ignore[arg-type]
        at = found.end()
    out.append(Word("end", "", len(text.rstrip(" ")) + 1))
    return out


class _Reader:
    """Reads the words of one text from left to right."""

    def __init__(self, text: str, line: int) -> None:
        self.text, self.line = text, line
        self.words, self.at = _words(text, line), 0
        self.on: Word | None = None

    def shocks(self) -> list[Shock]:
        out = [self._shock()]
        while True:
            word = self._take()
            if word.text == ";":
                out.append(self._shock())
            elif word.text == "on":
                self.on = self._expect("name", "the name of a scenario after on")
                if self._next.kind != "end":
                    raise self._refused(self._next, "on comes last")
            elif word.kind == "end":
                return out
            else:
                raise self._refused(word, "expected over, then, on, ';' or the end")

    @property
    def _next(self) -> Word:
        return self.words[self.at]

    def _take(self) -> Word:
        word = self.words[self.at]
        self.at = min(self.at + 1, len(self.words) - 1)
        return word

    def _refused(self, word: Word, message: str) -> TextError:
        got = "the end" if word.kind == "end" else repr(word.text)
        return _error(self.text, self.line, word.column, f"{message}; got {got}")

    def _expect(self, kind: str, what: str) -> Word:
        word = self._take()
        if word.kind != kind:
            raise self._refused(word, f"expected {what}")
        return word

    def _shock(self) -> Shock:
        variable = self._expect("name", "the name of a variable")
        word = self._take()
        if word.text in ("+", "-"):
            number = self._expect("number", "an amount such as 4 or 10%")
            relative = self._next.text == "%"
            if relative:
                self._take()
                if word.text == "-" and float(number.text) >= 100:
                    raise self._refused(number, "nothing is left after a fall by 100% or more")
            size = ("-" if word.text == "-" else "") + number.text
            return self._span(variable, "percent" if relative else "points", size, number)
        if word.text in ("x", "*"):
            number = self._expect("number", "a factor such as 0.9")
            if float(number.text) == 0:
                raise self._refused(number, "a factor is above zero")
            return self._span(variable, "factor", number.text, number)
        if word.text == "to":
            below = self._next.text == "-"
            if below:
                self._take()
            number = self._expect("number", "a level such as 8")
            if self._next.text == "%":
                raise self._refused(
                    self._next, "a level is a number in the variable's unit, without a percent sign"
                )
            return self._span(variable, "level", ("-" if below else "") + number.text, number)
        hint = " (put spaces around -)" if "-" in variable.text else ""
        raise self._refused(word, f"expected a change after {variable.text}: {_CHANGES}{hint}")

    def _span(
        self,
        variable: Word,
        change: Literal["points", "percent", "factor", "level"],
        size: str,
        number: Word,
    ) -> Shock:
        over = back = None
        if self._next.text == "over":
            self._take()
            over = self._time()
        if self._next.text == "then":
            self._take()
            word = self._take()
            if word.text == "back":
                then = self._take()
                if then.text != "over":
                    raise self._refused(then, f"expected over and {_SPANS} after back")
                back = self._time()
            elif word.text != "hold":
                raise self._refused(word, "expected hold or back after then")
        return Shock(variable, change, size, number.column, over, back, self.line)

    def _time(self) -> Span:
        number = self._expect("number", _SPANS)
        if not number.text.isdecimal() or not 1 <= int(number.text) <= 4800:
            raise self._refused(number, "expected a whole number from 1 to 4800")
        unit = self._take()
        if unit.text not in _MONTHS:
            raise self._refused(unit, f"expected month, quarter or year after {number.text}")
        return Span(int(number.text) * _MONTHS[unit.text], f"{number.text} {unit.text}", number.column)
