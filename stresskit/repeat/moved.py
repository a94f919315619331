"""Counting what moved between two files, with the first few kept."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass, field
from decimal import Decimal

#: Moved figures of a file that are kept; all are counted.
KEPT = 5
#: Differences below this share of the largest figure of a column are rounding, whatever the figure itself.
FLOOR = 1e-12
#: A number as people write it, thousands separated or not; not a digit inside a name.
_NUMBER = re.compile(r"(?<![\w#.])[-+−]?\d[\d,]*(?:\.\d+)?(?:[eE][-+]?\d+)?")


@dataclass(frozen=True, slots=True)
class Moved:
    """One figure (or piece of text): file, row, column, before, after, relative difference (NaN for text)."""

    file: str
    row: str
    column: str
    before: str
    after: str
    relative: float


@dataclass(frozen=True, slots=True)
class Found:
    """differ: figures that are not the same number; count: those beyond the tolerance; largest: the largest relative
    difference, rounding noise (see Tally) left out; first: the first that moved."""

    differ: int
    count: int
    largest: float
    first: tuple[Moved, ...]


def apart(before: float, after: float) -> float:
    """|after - before| over the larger of the two sizes: 0 for equal (two NaN too), inf where only one is finite."""
    if before == after or (math.isnan(before) and math.isnan(after)):
        return 0.0
    if not (math.isfinite(before) and math.isfinite(after)):
        return math.inf
    return abs(after - before) / max(abs(before), abs(after))


@dataclass(slots=True)
class Tally:
    """What moved in one file.

    rel   relative tolerance; 0 counts every difference, and the two rules below are off
    tiny  figures that are both smaller than this are noise: what an iteration leaves of a gradient
    A difference below FLOOR of the largest figure of a column is noise too.
    """

    file: str
    rel: float
    tiny: float = 0.0
    differ: int = 0
    count: int = 0
    largest: float = 0.0
    first: list[Moved] = field(default_factory=list)

    def number(self, row: str, column: str, before: float, after: float, scale: float = 0.0) -> None:
        """A pair of figures; ``scale`` is the largest of the column, 0 where that says nothing."""
        distance = apart(before, after)
        if distance > 0.0:
            self._pair(
                Moved(self.file, row, column, repr(before), repr(after), distance),
                before,
                after,
                FLOOR * scale,
            )

    def words(self, row: str, column: str, before: str, after: str) -> None:
        """A pair of texts that differ: numbers in them are held against each other, a unit of the last digit is rounding."""
        if self.rel == 0 or _NUMBER.sub("0", before) != _NUMBER.sub("0", after):
            k = next((i for i, (p, q) in enumerate(zip(before, after, strict=False)) if p != q), 0)
            cut = slice(max(0, k - 20), k + 60)
            self.text(row, column, before[cut], after[cut])
            return
        for p, q in zip(_NUMBER.findall(before), _NUMBER.findall(after), strict=True):
            if p == q:
                continue
            x, y = (Decimal(t.replace(",", "").replace("−", "-")) for t in (p, q))
            exponents = [int(d.as_tuple().exponent) for d in (x, y)]
            unit = 1.001 * 10.0 ** max(exponents)
            moved = Moved(self.file, row, column, p, q, apart(float(x), float(y)))
            self._pair(moved, float(x), float(y), unit)

    def text(self, row: str, column: str, before: str, after: str) -> None:
        """A pair of texts that differ in more than numbers, or of which there is only one."""
        self.differ += 1
        self._keep(Moved(self.file, row, column, before, after, math.nan))

    def several(self, differ: int, count: int, largest: float, first: list[Moved]) -> None:
        """Many figures at once, judged already."""
        self.differ += differ
        self.count += count
        self.largest = max(self.largest, largest)
        self.first += first[: KEPT - len(self.first)]

    def _pair(self, moved: Moved, before: float, after: float, noise: float) -> None:
        self.differ += 1
        if self.rel > 0 and (abs(after - before) <= noise or max(abs(before), abs(after)) < self.tiny):
            return
        self.largest = max(self.largest, moved.relative)
        if moved.relative > self.rel:
            self._keep(moved)

    def _keep(self, moved: Moved) -> None:
        self.count += 1
        if len(self.first) < KEPT:
            self.first.append(moved)

    def done(self) -> Found:
        return Found(self.differ, self.count, self.largest, tuple(self.first))
