"""Counting what moved between two files, with the first few kept."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

#: Moved figures of a file that are kept; all are counted.
KEPT = 5
#: Differences below this share of the largest figure of a column are rounding, whatever the figure itself.
FLOOR = 1e-12


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
    """count beyond the tolerance, largest relative difference of all, the first that moved."""

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
    """What moved in one file; ``rel`` 0 counts every difference."""

    file: str
    rel: float
    count: int = 0
    largest: float = 0.0
    first: list[Moved] = field(default_factory=list)

    def number(self, row: str, column: str, before: float, after: float, scale: float) -> None:
        """A pair of figures; ``scale`` is the largest of the column, 0 where that says nothing."""
        distance = apart(before, after)
        if distance == 0.0 or (self.rel > 0 and abs(after - before) <= FLOOR * scale):
            return
        self.largest = max(self.largest, distance)
        if distance > self.rel:
            self._keep(Moved(self.file, row, column, repr(before), repr(after), distance))

    def shown(self, row: str, before: str, after: str) -> None:
        """A pair of rounded figures as people read them: one unit of the last digit is rounding between builds."""
        x, y = (float(t.replace(",", "").replace("−", "-")) for t in (before, after))
        digits = len(before.partition(".")[2].split("e")[0].split("E")[0])
        if self.rel > 0 and abs(x - y) <= 1.001 * 10.0**-digits:
            return
        distance = apart(x, y)
        if distance == 0.0 and self.rel > 0:
            return
        self.largest = max(self.largest, distance)
        if distance > self.rel or self.rel == 0:
            self._keep(Moved(self.file, row, "", before, after, distance))

    def text(self, row: str, column: str, before: str, after: str) -> None:
        """A pair of texts that differ."""
        self._keep(Moved(self.file, row, column, before, after, math.nan))

    def several(self, count: int, largest: float, first: list[Moved]) -> None:
        """Many figures at once, counted already; ``largest`` is over those within the tolerance as well."""
        self.count += count
        self.largest = max(self.largest, largest)
        self.first += first[: KEPT - len(self.first)]

    def _keep(self, moved: Moved) -> None:
        self.count += 1
        if len(self.first) < KEPT:
            self.first.append(moved)

    def done(self) -> Found:
        return Found(self.count, self.largest, tuple(self.first))
