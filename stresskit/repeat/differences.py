"""Two files of one kind, figure by figure: which one moved, from what to what, by how much."""

from __future__ import annotations

import difflib
import json
import math
import re
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from fnmatch import fnmatch
from itertools import zip_longest
from pathlib import Path
from typing import Any, Literal
from zipfile import BadZipFile

import openpyxl

from stresskit.repeat.frames import csv_differences, parquet_differences
from stresskit.repeat.moved import Found, Moved, Tally
from stresskit.runs.record import digest_file

Status = Literal["same bytes", "same figures", "within tolerance", "moved", "missing", "new"]

#: Relative tolerances between builds: file pattern -> tolerance; the first pattern that fits counts (docs/repeat.md).
TOLERANCES: tuple[tuple[str, float, str], ...] = (
    ("evidence/*", 1e-6, "tests that fit again, and logarithms of likelihoods that nearly cancel"),
    ("recovery/cox.csv", 1e-6, "fitted by a library with its own stopping rule"),
    ("models/*", 1e-7, "covariances: inverses, which multiply a rounding error"),
    ("coefficients.csv", 1e-7, "standard errors: roots of the same inverses"),
    ("report.html", 1e-7, "rounded figures: one unit of the last digit shown as well"),
    ("results.xlsx", 1e-6, "holds the tables above"),
    ("*", 1e-9, "everything else"),
)


#: Sizes below which figures of a file are what an iteration leaves: a gradient of 1e-13 is as good as one of 1e-16.
TINY: tuple[tuple[str, float], ...] = (("models/*", 1e-7), ("report.html", 1e-7), ("results.xlsx", 1e-7))


def tolerance_of(name: str) -> float:
    """Relative tolerance of a file of a run folder, for another build than the one that wrote it."""
    return next(rel for pattern, rel, _ in TOLERANCES if fnmatch(name, pattern))


@dataclass(frozen=True, slots=True)
class FileComparison:
    """One output, before and now.

    count    figures beyond the tolerance (or lines of text that differ)
    largest  largest relative difference of any figure, NaN where none could be had
    first    the first few that moved
    """

    file: str
    status: Status
    tolerance: float
    count: int = 0
    largest: float = 0.0
    first: tuple[Moved, ...] = ()

    @property
    def agrees(self) -> bool:
        return self.status in ("same bytes", "same figures", "within tolerance")


def compare_file(
    name: str, before: Path, after: Path, *, exact: bool, pictures: bool = True
) -> FileComparison:
    """One output of two folders; ``name`` is relative to both.

    exact     whether bytes must agree; else figures within :func:`tolerance_of`
    pictures  whether drawings in a page are compared: another drawing library draws other lines
    """
    rel = 0.0 if exact else tolerance_of(name)
    old, new = before / name, after / name
    if not new.is_file():
        return FileComparison(name, "missing", rel, 1)
    if not old.is_file():
        return FileComparison(name, "new", rel, 1)
    if digest_file(old) == digest_file(new):
        return FileComparison(name, "same bytes", rel)
    tally = Tally(name, rel, next((size for pattern, size in TINY if fnmatch(name, pattern)), 0.0))
    try:
        _compare(name, old, new, tally, pictures=pictures)
    except (ValueError, OSError, KeyError, BadZipFile) as e:
        # an edited file need not be one of its kind any more
        tally.text("", "", "", f"cannot be read: {e}".splitlines()[0][:200])
    found = tally.done()
    if exact and not found.count:
        found = Found(1, 1, 0.0, (Moved(name, "", "bytes", "", "no figure differs", math.nan),))
    status: Status = "moved" if found.count else "within tolerance" if found.differ else "same figures"
    return FileComparison(name, status, rel, found.count, found.largest, found.first)


def _compare(name: str, old: Path, new: Path, tally: Tally, *, pictures: bool) -> None:
    kind = Path(name).suffix
    if kind == ".csv":
        csv_differences(old, new, tally)
    elif kind == ".parquet":
        parquet_differences(old, new, tally)
    elif kind == ".xlsx":
        _workbooks(old, new, tally)
    elif kind == ".json":
        _trees(json.loads(old.read_text("utf-8")), json.loads(new.read_text("utf-8")), tally)
    else:
        _texts(old.read_text("utf-8"), new.read_text("utf-8"), tally, pictures=pictures)


_INDEX = re.compile(r"\[\d+\]")


def _leaves(value: Any, path: str = "") -> Iterator[tuple[str, Any]]:
    if isinstance(value, dict):
        for key, inner in value.items():
            yield from _leaves(inner, f"{path}.{key}" if path else str(key))
    elif isinstance(value, list):
        for k, inner in enumerate(value):
            yield from _leaves(inner, f"{path}[{k}]")
    else:
        yield path, value


def _trees(old: Any, new: Any, tally: Tally) -> None:
    """Saved models: every number by its place; what is small beside the largest of its list is held against that."""
    a, b = dict(_leaves(old)), dict(_leaves(new))
    scale: dict[str, float] = {}
    for path, value in a.items():
        if isinstance(value, float):
            key = _INDEX.sub("", path)
            scale[key] = max(scale.get(key, 0.0), abs(value))
    for path in [*a, *(p for p in b if p not in a)]:
        x, y = a.get(path, "(nothing)"), b.get(path, "(nothing)")
        if x == y:
            continue
        numbers = all(isinstance(v, int | float) and not isinstance(v, bool) for v in (x, y))
        if numbers:
            tally.number(path, "", float(x), float(y), scale.get(_INDEX.sub("", path), 0.0))
        else:
            tally.words(path, "", str(x), str(y))


def _workbooks(old: Path, new: Path, tally: Tally) -> None:
    """Cell by cell; a column goes by its heading in the first row."""
    one, two = (openpyxl.load_workbook(f, read_only=True, data_only=True) for f in (old, new))
    try:
        for title in dict.fromkeys([*one.sheetnames, *two.sheetnames]):
            if title not in one.sheetnames or title not in two.sheetnames:
                where = ("(sheet)", "(nothing)") if title in one.sheetnames else ("(nothing)", "(sheet)")
                tally.text(title, "", *where)
                continue
            heads: Sequence[Any] = ()
            rows = zip_longest(one[title].iter_rows(values_only=True), two[title].iter_rows(values_only=True))
            for number, (a, b) in enumerate(rows, start=1):
                heads = heads or a or ()
                for k, (x, y) in enumerate(zip_longest(a or (), b or ())):
                    if x == y:
                        continue
                    column = str(heads[k]) if k < len(heads) else f"column {k + 1}"
                    if isinstance(x, int | float) and isinstance(y, int | float):
                        tally.number(f"{title}, row {number}", column, float(x), float(y))
                    else:
                        tally.words(f"{title}, row {number}", column, str(x), str(y))
    finally:
        one.close()
        two.close()


_DRAWN = re.compile(r"<svg\b.*?</svg>", re.DOTALL)


def _texts(old: str, new: str, tally: Tally, *, pictures: bool) -> None:
    """Pages and plain text: words must agree, numbers may differ as far as the tolerance and the digits shown allow."""
    if not pictures:
        old, new = _DRAWN.sub("<svg/>", old), _DRAWN.sub("<svg/>", new)
    a, b = old.splitlines(), new.splitlines()
    if len(a) == len(b):
        pairs = [(i, x, y) for i, (x, y) in enumerate(zip(a, b, strict=True), start=1) if x != y]
    else:
        pairs = []
        for tag, i1, i2, j1, j2 in difflib.SequenceMatcher(None, a, b, autojunk=False).get_opcodes():
            if tag != "equal":
                pairs += [
                    (i1 + k + 1, x or "", y or "") for k, (x, y) in enumerate(zip_longest(a[i1:i2], b[j1:j2]))
                ]
    for line, x, y in pairs:
        tally.words(f"line {line}", "", x, y)
