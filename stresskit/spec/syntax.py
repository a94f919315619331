"""The YAML parser's complaints in plain words, with a remedy."""

from __future__ import annotations

import re
from typing import Any

_LINE_END = re.compile(r"\r\n|\n|\r")
_NO_SPACE = re.compile(r"^\s*(?:- )?[\w\-]+:[^\s:]")
_LOOKALIKES = {"\u00a0": "a no-break space", "\u200b": "a zero-width space", "\uff1a": "a full-width colon"}


def plain_syntax(error: Any, text: str) -> tuple[str, Any]:
    """Message and the parser mark (0-based line and column, or None) where the writer should look."""
    problem = str(error.problem or error.context or "text that is not YAML")
    message, mark = _translate(problem, error)
    if mark is None:
        return message, None
    lines = _LINE_END.split(text)
    line = lines[mark.line] if mark.line < len(lines) else ""
    if hint := lookalike(line):
        return message + hint, mark
    if _NO_SPACE.match(line):
        message += " (a key needs a space after its ':')"
    return message, mark


def lookalike(text: str) -> str:
    """`` (the text holds ...)`` for characters that look like a space or a colon and are none, else nothing."""
    return next(
        (f" (the text holds {name})" for character, name in _LOOKALIKES.items() if character in text), ""
    )


def _translate(problem: str, error: Any) -> tuple[str, Any]:
    here, start = error.problem_mark or error.context_mark, error.context_mark or error.problem_mark
    context = str(error.context or "")
    if problem.startswith("mapping values are not allowed"):
        return "a ':' that cannot stand here: check indentation, or put text that holds ': ' in quotes", here
    if problem.startswith("could not find expected ':'"):
        return "expected 'key: value'", start
    if problem.startswith("found character"):
        return f"text that begins with {problem.split()[2]} must stand in quotes", here
    if problem.startswith("found unexpected end of stream") or "document separator" in problem:
        return "a quote that is opened here and never closed", start
    if problem.startswith("expected ',' or"):
        closing = "]" if "sequence" in context else "}"
        return (
            f"expected ',' or '{closing}' (opened at line {start.line + 1}, column {start.column + 1})",
            here,
        )
    if problem.startswith("expected <block end>"):
        return _block(problem, start), here
    if problem.startswith("sequence entries are not allowed"):
        return "a list item '- ' that cannot stand here: begin it on a line of its own", here
    if "escape" in problem or "hexdecimal" in problem:
        return "an unknown escape sequence: use single quotes, in which a backslash is a backslash", here
    if problem.startswith("expected the node content"):
        return "a value is missing before this", here
    if "block scalar" in context:
        return (
            "a block of text (| or >) that does not begin properly: text starts on the next line, indented",
            here,
        )
    return f"text that is not YAML: {problem}", here


def _block(problem: str, start: Any) -> str:
    found = problem.rsplit("found", 1)[-1].strip().strip("'")
    if found == "<scalar>":
        return "text after a closing quote: put the whole text in one pair of quotes"
    if found in ("]", "}", ","):
        return f"a {found!r} that closes or parts nothing"
    block = f"the block that begins at line {start.line + 1}, column {start.column + 1}"
    return f"indentation that fits nothing above: either line it up with {block}, or indent it more"
