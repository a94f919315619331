"""The one-line language of what-ifs: what is read, and every refusal word for word with its column."""

from __future__ import annotations

import string

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.errors import TextError
from stresskit.spec.what_if import parse_what_if


def read(text: str) -> list[tuple[object, ...]]:
    return [
        (s.variable.text, s.change, s.size, s.over and s.over.months, s.back and s.back.months)
        for s in parse_what_if(text).shocks
    ]


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("u + 4", ("u", "points", "4", None, None)),
        ("u+4", ("u", "points", "4", None, None)),
        ("u - 0.5 over 2 quarters", ("u", "points", "-0.5", 6, None)),
        ("hpi - 10% over 1 year then hold", ("hpi", "percent", "-10", 12, None)),
        ("hpi + 2.5 % then back over 18 months", ("hpi", "percent", "2.5", None, 18)),
        ("u x 1.5 over 4 quarters then back over 2 years", ("u", "factor", "1.5", 12, 24)),
        ("u * .9", ("u", "factor", ".9", None, None)),
        ("u to 8 over 4 quarters", ("u", "level", "8", 12, None)),
        ("rate to - 0.25 over 1 quarter then back over 1 month", ("rate", "level", "-0.25", 3, 1)),
        ("  x   x   2  ", ("x", "factor", "2", None, None)),
        ("on + 1", ("on", "points", "1", None, None)),
    ],
)
def test_one_shock(text: str, expected: tuple[object, ...]) -> None:
    assert read(text) == [expected]


def test_several_shocks_make_one_scenario() -> None:
    said = parse_what_if("u + 4 over 4 quarters; hpi - 10% on severe")
    assert ([s.variable.text for s in said.shocks], said.on) == (["u", "hpi"], "severe")
    several = parse_what_if(["u + 4   over 4 quarters", "hpi - 10% on severe"])
    assert ([s.line for s in several.shocks], several.on) == ([1, 2], "severe")
    assert said.text == several.text == "u + 4 over 4 quarters; hpi - 10% on severe"
    assert parse_what_if(["u + 4 on severe", "hpi - 10% on severe"]).on == "severe"


CHANGE = "+ 4, - 10%, x 0.9 or to 8"
#: text -> (column, message)
BAD: dict[str, tuple[int, str]] = {
    "": (1, "expected the name of a variable; got the end"),
    "   ": (1, "expected the name of a variable; got the end"),
    "4": (1, "expected the name of a variable; got '4'"),
    "u": (2, f"expected a change after u: {CHANGE}; got the end"),
    "u 4": (3, f"expected a change after u: {CHANGE}; got '4'"),
    "u up 4": (3, f"expected a change after u: {CHANGE}; got 'up'"),
    "u-4": (4, f"expected a change after u-4: {CHANGE} (put spaces around -); got the end"),
    "u +": (4, "expected an amount such as 4 or 10%; got the end"),
    "u + four": (5, "expected an amount such as 4 or 10%; got 'four'"),
    "u + -4": (5, "expected an amount such as 4 or 10%; got '-'"),
    "u + % 4": (5, "expected an amount such as 4 or 10%; got '%'"),
    "u - 100%": (5, "nothing is left after a fall by 100% or more; got '100'"),
    "u x": (4, "expected a factor such as 0.9; got the end"),
    "u x -2": (5, "expected a factor such as 0.9; got '-'"),
    "u x 0": (5, "a factor is above zero; got '0'"),
    "u x 0.9%": (8, "expected over, then, on, ';' or the end; got '%'"),
    "u to": (5, "expected a level such as 8; got the end"),
    "u to 8%": (7, "a level is a number in the variable's unit, without a percent sign; got '%'"),
    "u + 4 over": (11, "expected a span such as 4 quarters; got the end"),
    "u + 4 over four quarters": (12, "expected a span such as 4 quarters; got 'four'"),
    "u + 4 over 4": (13, "expected month, quarter or year after 4; got the end"),
    "u + 4 over 4 weeks": (14, "expected month, quarter or year after 4; got 'weeks'"),
    "u + 4 over 1.5 years": (12, "expected a whole number from 1 to 4800; got '1.5'"),
    "u + 4 over 0 quarters": (12, "expected a whole number from 1 to 4800; got '0'"),
    "u + 4 over 99999 quarters": (12, "expected a whole number from 1 to 4800; got '99999'"),
    "u + 4 over 4 quarters over 2 quarters": (23, "expected over, then, on, ';' or the end; got 'over'"),
    "u + 4 then": (11, "expected hold or back after then; got the end"),
    "u + 4 then stay": (12, "expected hold or back after then; got 'stay'"),
    "u + 4 then back": (16, "expected over and a span such as 4 quarters after back; got the end"),
    "u + 4 then back by 2027Q1": (17, "expected over and a span such as 4 quarters after back; got 'by'"),
    "u + 4 then hold then hold": (17, "expected over, then, on, ';' or the end; got 'then'"),
    "u + 4;": (7, "expected the name of a variable; got the end"),
    "u + 4, hpi - 2": (6, "',' is not part of a what-if"),
    "u + 4; u - 1": (8, "u is changed twice"),
    "u + 4 on": (9, "expected the name of a scenario after on; got the end"),
    "u + 4 on baseline over 4 quarters": (19, "on comes last; got 'over'"),
    "u + 4 on 2026": (10, "expected the name of a scenario after on; got '2026'"),
    "u + 1e3": (6, "expected over, then, on, ';' or the end; got 'e3'"),
    "u + 4,5": (6, "',' is not part of a what-if"),
    "u + 1234567890123": (5, "more than 12 digits"),
    "u \u2212 4": (3, "'\u2212' is not part of a what-if"),
    "u\u00a0+ 4": (2, "'\\xa0' is not part of a what-if"),
    "\u00fc + 4": (1, "'\u00fc' is not part of a what-if"),
    "u\n+ 4": (2, "'\\n' is not part of a what-if"),
    "u\t+ 4": (2, "'\\t' is not part of a what-if"),
    "u + \u0664": (5, "'\u0664' is not part of a what-if"),
    "__import__('os')": (1, "'_' is not part of a what-if"),
    "u + 4 if 1": (7, "expected over, then, on, ';' or the end; got 'if'"),
}


@pytest.mark.parametrize("text", BAD)
def test_exact_refusal_with_a_mark_below_the_place(text: str) -> None:
    column, message = BAD[text]
    with pytest.raises(TextError) as caught:
        parse_what_if(text)
    shown = "".join(c if c.isprintable() else " " for c in text)
    assert str(caught.value) == f"what-if:1:{column}: {message}\n  {shown}\n  {' ' * (column - 1)}^"
    assert (caught.value.line, caught.value.column) == (1, column)


def test_the_line_is_which_of_several_texts() -> None:
    with pytest.raises(
        TextError, match=r"^what-if:2:5: expected an amount such as 4 or 10%; got 'x'\n  v \+ x\n      \^$"
    ):
        parse_what_if(["u + 4", "v + x"])
    with pytest.raises(TextError, match=r"^what-if:2:1: u is changed twice"):
        parse_what_if(["u + 4", "u - 1"])
    with pytest.raises(
        TextError, match=r"^what-if:2:10: one scenario changes one other: 'a' was named before"
    ):
        parse_what_if(["u + 4 on a", "v + 1 on b"])
    with pytest.raises(TextError, match=r"^what-if: there is no text"):
        parse_what_if([])
    with pytest.raises(TextError, match=r"^what-if:1:501: longer than 500 characters$"):
        parse_what_if("u + 4 " + "x" * 500)


@settings(max_examples=400, deadline=None)
@given(
    text=st.text(alphabet=string.printable + "ü−\u00a0", max_size=40)
    | st.lists(st.sampled_from(["u", "hpi", "+", "-", "x", "*", "to", "over", "then", "back", "hold", "on", "4", "0.5", "10", "%", ";", "quarters", "months", "1", "year"]), max_size=12).map(" ".join)
)  # fmt: skip
def test_any_text_is_read_or_refused_at_a_place_in_it(text: str) -> None:
    try:
        said = parse_what_if(text)
    except TextError as error:
        found = error
    else:
        assert said.shocks
        assert parse_what_if(said.text).text == said.text
        return
    assert found.line == 1
    assert found.column is not None
    assert 1 <= found.column <= len(text) + 1
