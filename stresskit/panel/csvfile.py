"""What a CSV file says about itself before anything is read from it, and its errors in plain words."""

from __future__ import annotations

import csv
import re
from collections import Counter
from collections.abc import Sequence
from pathlib import Path

from stresskit.core.errors import DataError

_FIRST_BYTES = 1 << 16
_OTHER_DELIMITERS = {";": "semicolon", "\t": "tab", "|": "vertical bar"}
_LINE = re.compile(r"Line: (\d+)")
_WIDTH = re.compile(r"Expected Number of Columns: (\d+) Found: (\d+)")
_FILE = re.compile(r"^\s*file = (.+)$", re.MULTILINE)


def csv_header(path: Path, name: str) -> tuple[str, ...]:
    """Column names in the first line of a comma-separated UTF-8 file. Raises DataError, never anything else."""
    with path.open("rb") as file:
        start = file.read(_FIRST_BYTES)
    if not start.strip():
        raise DataError(f"{name} is empty: expected a header line and rows")
    if b"\x00" in start:
        raise DataError(
            f"{name} is not a text file (it holds zero bytes): expected comma-separated UTF-8 text"
        )
    try:
        text = start.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        if error.end < len(start) - 4:  # a character cut in two by the block's end is no error
            raise DataError(
                f"{name} is not UTF-8 text (byte {error.start + 1}): save it as comma-separated UTF-8"
            ) from None
        text = start[: error.start].decode("utf-8-sig")
    if len(start) == _FIRST_BYTES and "\n" not in text:
        raise DataError(
            f"{name}: the first line is longer than {_FIRST_BYTES:,} bytes: expected a header line and rows"
        )
    header = next(csv.reader([text.splitlines()[0]]))
    names = tuple(column.strip() for column in header)
    if len(names) == 1:
        for delimiter, word in _OTHER_DELIMITERS.items():
            if delimiter in names[0]:
                raise DataError(
                    f"{name} is separated by {word}s, its first line reads {names[0][:80]!r}: save it with commas "
                    "between the columns and a point in decimal numbers"
                )
    check_names(names, name)
    return names


def check_names(names: Sequence[str], name: str) -> None:
    """Raises DataError for columns without a name or with the same one (upper and lower case alike)."""
    unnamed = [i + 1 for i, column in enumerate(names) if not column]
    if unnamed:
        raise DataError(
            f"{name}: column {unnamed[0]} has no name ({len(unnamed)} without): name every column"
        )
    doubled = [column for column, count in Counter(c.lower() for c in names).items() if count > 1]
    if doubled:
        raise DataError(
            f"{name} has columns of the same name (upper and lower case alike): {', '.join(doubled)}: rename one of each"
        )


def csv_trouble(message: str, names: dict[str, str], default: str) -> DataError:
    """The reader's message as a DataError in our words: which file, which line, what was expected.

    names maps the paths given to the reader to the names the user knows.
    """
    found = _FILE.search(message)
    file = names.get(found[1].strip(), default) if found else default
    line = _LINE.search(message)
    place = f"{file}, line {line[1]}" if line else file
    if width := _WIDTH.search(message):
        return DataError(
            f"{place}: {width[2]} fields where the header has {width[1]}: complete the line, or put text that "
            "holds commas in double quotes"
        )
    if "unterminated quote" in message:
        return DataError(f"{place}: a quoted field does not end: close the double quote")
    if "utf-8" in message.lower() or "unicode" in message.lower():
        return DataError(f"{place}: not UTF-8 text: save the file as comma-separated UTF-8")
    return DataError(f"{place}: cannot be read as comma-separated text")
