"""Texts that are not the YAML we read: exact words and place."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.spec.load import load_scenario
from stresskit.spec.yaml import MAX_BYTES, MAX_DEPTH, MAX_NODES
from tests.spec.texts import said

PARTS = "check indentation, commas and brackets, or put the text in quotes"

CASES: dict[str, tuple[str | bytes, str]] = {
    # what YAML allows and hides
    "duplicate key": (
        "scenario: a\nstarts: x\nscenario: b\n",
        "3:1: scenario: duplicate key, given first at line 1, column 1",
    ),
    "duplicate key below": (
        "paths: {u: {values: [1], values: [2]}}",
        "1:26: paths.u.values: duplicate key, given first at line 1, column 13",
    ),
    "duplicate key in quotes": ("a: 1\n'a': 2\n", "2:1: a: duplicate key, given first at line 1, column 1"),
    "anchor": ("a: &x [1]\n", "1:4: anchor &x: anchors are not read, write the value out"),
    "anchor on a key": ("&x a: 1\n", "1:1: anchor &x: anchors are not read, write the value out"),
    "alias": ("a: 1\nb: *x\n", "2:4: alias *x: aliases are not read, write the value out"),
    "merge key": ("a: 1\n<<: {b: 2}\n", "2:1: merge key <<: merge keys are not read, write the keys out"),
    "tag": ("a: !secret 1\n", "1:4: a tag (!...): tags are not read, write the plain value"),
    "core tag": ("a: !!str 1\n", "1:4: a tag (!...): tags are not read, write the plain value"),
    "executable tag": (
        "a: !!python/object/apply:os.system ['true']\n",
        "1:4: a tag (!...): tags are not read, write the plain value",
    ),
    "directive": (
        "# old\n%YAML 1.1\n---\na: NO\n",
        "2:1: lines that begin with % (YAML directives) are not read",
    ),
    "second document": (
        "a: 1\n---\nb: 2\n",
        "2:1: a second document begins here: one file holds one document",
    ),
    "second document, implicit": (
        "a: 1\n...\nb: 2\n",
        "3:1: a second document begins here: one file holds one document",
    ),
    "key without value": (
        "scenario: a\nweight:\nstarts: 2026Q1\n",
        "2:1: weight: a key without a value: give one, or take the key out",
    ),
    "key without value, last": (
        "paths:\n",
        "1:1: paths: a key without a value: give one, or take the key out",
    ),
    "key glued to its value": (
        "paths: {u: {values:[1]}}\n",
        "1:13: paths.u.'values:': a key without a value: give one, or take the key out (a key needs a space after its ':')",
    ),
    "key glued to its text": (
        "a: {b:c}\n",
        "1:5: a.'b:c': a key without a value: give one, or take the key out (a key needs a space after its ':')",
    ),
    "decimal comma": (
        "paths: {u: {a: 0,4}}\n",
        "1:18: paths.u.4: a key without a value: give one, or take the key out "
        "(decimals are written with a point, not a comma)",
    ),
    "empty item": ("paths:\n  - \n  - a\n", "2:4: paths#1: an empty list item"),
    "value without key": ("{: 1}\n", "1:3: a value without a key"),
    "list as key": ("? [a]\n: 1\n", "1:3: a list or mapping as a key: keys are plain text"),
    "mapping as key": ("{a: 1}: 2\n", "1:1: a list or mapping as a key: keys are plain text"),
    "text over two lines": ("title: one\n  two\nstarts: x\n", f"1:8: 'one two' runs on to line 2: {PARTS}"),
    "deeper than its line above": ("a: 1\n  b: 1\n", f"1:4: '1 b' runs on to line 2: {PARTS}"),
    "list not closed": ("a: [1, 2\nb: 3\n", f"1:8: '2 b' runs on to line 2: {PARTS}"),
    "no-break space": (
        "a:\u00a01\nb: 2\n",
        f"1:1: 'a:\\xa01 b' runs on to line 2: {PARTS} (the text holds a no-break space)",
    ),
    # numbers that are none
    "nan": ("a: {b: .nan}", "1:8: a.b: '.nan' is not a finite number: write a number, or leave the key out"),
    "infinity": (
        "a: [1, -.inf]",
        "1:8: a#2: '-.inf' is not a finite number: write a number, or leave the key out",
    ),
    "too large": ("a: 1e999", "1:4: a: '1e999' is too large for a number"),
    "too small": ("a: 1e-400", "1:4: a: '1e-400' is too small for a number: write 0, or a larger one"),
    "too many digits": (
        "a: -1234567890123456789",
        "1:4: a: '-1234567890123456789' has more than 18 digits: write a smaller number, or put it in quotes",
    ),
    # bytes and characters
    "tab as indent": ("a:\n\tb: 1\n", "2:1: a tab: use spaces"),
    "tab in a line": ("a: 1\nb:\t2\n", "2:3: a tab: use spaces"),
    "latin-1": (b"a: 1\nb: caf\xe9\n", "2:7: not UTF-8 text (byte 0xe9): save the file as UTF-8"),
    "utf-16": ("a: 1\n".encode("utf-16-le"), "1:2: an invisible character U+0000: take it out"),
    "utf-16 with mark": (
        "a: 1\n".encode("utf-16"),
        "1:1: not UTF-8 text (byte 0xff): save the file as UTF-8",
    ),
    "line separator": ("a: x\u2028b: 1\n", "1:5: an invisible character U+2028: take it out"),
    "byte order mark inside": ("a: 1\nb: \ufeff2\n", "2:4: an invisible character U+FEFF: take it out"),
    "escape to nothing": ('a: "\\UFFFFFFFF"\n', "1:7: an escape sequence that names no character"),
    "escape to half a character": (
        'a: "\\ud800"\n',
        "1:4: text with an invisible character U+D800: take it out",
    ),
    "escape to zero": ('a: "\\0"\n', "1:4: text with an invisible character U+0000: take it out"),
    "unknown escape": (
        'a: "C:\\data"\n',
        "1:8: an unknown escape sequence: use single quotes, in which a backslash is a backslash",
    ),
    # nothing or the wrong thing at the top
    "empty": ("", "1:1: the file is empty"),
    "blank": (" \n\n", "1:1: the file is empty"),
    "only comments": ("# a\n# b\n", "1:1: the file is empty"),
    "only a document start": ("---\n", "1:1: the file is empty"),
    "list at the top": ("- a\n- b\n", "1:1: expected 'key: value' lines at the top, got a list"),
    "text at the top": (
        "# x\njust text\n",
        "2:1: expected 'key: value' lines at the top, got a single value",
    ),
    "null at the top": ("null\n", "1:1: expected 'key: value' lines at the top, got a single value"),
    # syntax
    "no colon": ("scenario: a\nstarts 2026Q1\nweight: 1\n", "2:1: expected 'key: value'"),
    "two colons": (
        "title: a: b\n",
        "1:9: a ':' that cannot stand here: check indentation, or put text that holds ': ' in quotes",
    ),
    "glued key on a line": ("paths:\n  u:5\n  v: 6\n", f"2:3: 'u:5 v' runs on to line 3: {PARTS}"),
    "unaligned": (
        "paths:\n   u: 1\n  v: 2\n",
        "3:3: indentation that fits nothing above: either line it up with the block that begins at "
        "line 1, column 1, or indent it more",
    ),
    "list item among keys": (
        "a: 1\n- b\n",
        "2:1: indentation that fits nothing above: either line it up with the block that begins at "
        "line 1, column 1, or indent it more",
    ),
    "quote not closed": ("a: 'x\nb: 1\n", "1:4: a quote that is opened here and never closed"),
    "text after quote": (
        "a: 'x' y\n",
        "1:8: text after a closing quote: put the whole text in one pair of quotes",
    ),
    "bracket not closed": ("a: [1, 2\n", "2:1: expected ',' or ']' (opened at line 1, column 4)"),
    "brace closed by bracket": ("a: {b: 1]\n", "1:9: expected ',' or '}' (opened at line 1, column 4)"),
    "bracket too many": ("a: [1]]\n", "1:7: a ']' that closes or parts nothing"),
    "comma first": ("a: [, 1]\n", "1:5: a value is missing before this"),
    "begins with @": ("a: @b\n", "1:4: text that begins with '@' must stand in quotes"),
    "begins with %": ("a: %5\n", "1:4: text that begins with '%' must stand in quotes"),
    "list on the key's line": (
        "a: - b\n",
        "1:4: a list item '- ' that cannot stand here: begin it on a line of its own",
    ),
    "block text on its own line": (
        "a: | text\n",
        "1:6: a block of text (| or >) that does not begin properly: text starts on the next line, indented",
    ),
    # bounds
    "too deep": ("a: " + "[" * 60, f"1:{3 + MAX_DEPTH}: nested deeper than {MAX_DEPTH} levels"),
    "too large a file": (
        b"#" * (MAX_BYTES + 1),
        f" larger than {MAX_BYTES:,} bytes, the largest text that is read",
    ),
}


@pytest.mark.parametrize("name", CASES)
def test_words_and_place(name: str, tmp_path: Path) -> None:
    content, expected = CASES[name]
    assert said(tmp_path / "x.yaml", content, load_scenario) == f"file:{expected}"


def test_too_many_values(tmp_path: Path) -> None:
    # The mapping, the list and the items are values; the place is that of the first one too many.
    text = "a: [" + "1," * MAX_NODES + "]"
    column = 5 + 2 * (MAX_NODES - 2)
    expected = f"file:1:{column}: more than {MAX_NODES:,} values in one file"
    assert said(tmp_path / "x.yaml", text, load_scenario) == expected


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r"])
def test_lines_are_counted_whatever_ends_them(end: str, tmp_path: Path) -> None:
    text = end.join(["# é", "scenario: a", "", "starts: 2026Q1", "scenario: b", ""])
    expected = "file:5:1: scenario: duplicate key, given first at line 2, column 1"
    assert said(tmp_path / "x.yaml", text, load_scenario) == expected


def test_columns_count_characters_not_bytes(tmp_path: Path) -> None:
    assert said(tmp_path / "x.yaml", "{é𝄞: 1, é𝄞: 2}", load_scenario).startswith(
        "file:1:9: 'é𝄞': duplicate key"
    )
