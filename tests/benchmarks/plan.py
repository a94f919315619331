"""What is measured: sizes and rounds as data."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

from tests.benchmarks.panel import Shape

LINKS = ("cloglog", "logit")
GLUM = ("glum-dense", "glum-split")


@dataclass(frozen=True)
class Case:
    """One fit to be timed ``rounds`` times; ``group`` is the table it stands in, ``at`` its place in a plot."""

    group: str
    who: str
    link: str
    shape: Shape
    rounds: int
    at: int = 0


def peers(rows: int, rounds: int, statsmodels_rows: int, statsmodels_rounds: int) -> Iterator[Case]:
    for link in LINKS:
        for who in ("ours", "ours-2", *GLUM):
            yield Case("peers", who, link, Shape(rows), rounds)
        for who in ("ours", "statsmodels"):
            yield Case("statsmodels", who, link, Shape(statsmodels_rows), statsmodels_rounds)


def variants(rows: int, rounds: int, links: tuple[str, ...]) -> Iterator[Case]:
    for group in ("moving", "crossed"):
        for link in links:
            for who in ("ours", *GLUM):
                shape = Shape(rows, moving=group == "moving", crossed=group == "crossed")
                yield Case(group, who, link, shape, rounds)


def large(rows: int, rounds: int) -> Iterator[Case]:
    yield Case("large", "exp", "cloglog", Shape(rows), rounds)
    for link in LINKS:
        for who in ("ours", "ours-2"):
            yield Case("large", who, link, Shape(rows), rounds)


def growth(loans: int, rounds: int) -> Iterator[Case]:
    base = Shape(0, loans=loans)
    for at in (loans // 2, loans, 2 * loans, 4 * loans):
        yield from _both(Case("by loans", "", "", replace(base, loans=at), rounds, at))
    # A longer window for longer contracts; more loans, so that the cells (cohort, age) stay few against them.
    wide = replace(base, window=240, loans=5 * loans)
    for at in (24, 48, 96, 192):
        yield from _both(Case("by periods", "", "", replace(wide, term=at), rounds, at))
    for at in (6, 12, 24, 48):
        yield from _both(Case("by columns", "", "", replace(base, numbers=at), rounds, at))


def _both(case: Case) -> Iterator[Case]:
    for who, link in (("ours", "cloglog"), ("ours", "logit"), ("glum-dense", "cloglog")):
        yield replace(case, who=who, link=link)


def plan(*, quick: bool, rows: int | None, large_rows: int | None) -> list[Case]:
    """``rows`` and ``large_rows`` replace 5 and 50 million (quick: half a million and 5 million)."""
    if quick:
        # One round of each: most of a small fit's process is its start, some four seconds of CPU time.
        n = rows or 500_000
        return [
            *peers(n, 1, n // 5, 1), *variants(n // 4, 1, ("cloglog",)), *large(large_rows or 10 * n, 1),
        ]  # fmt: skip
    n = rows or 5_000_000
    return [
        *peers(n, 7, n // 5, 1), *variants(n, 1, LINKS), *large(large_rows or 10 * n, 3), *growth(n // 250, 1),
    ]  # fmt: skip
