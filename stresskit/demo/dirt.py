"""Put a few rows of every kind of trouble into the clean panel, and say which loans got what.

Every kind strikes loans of its own, so that one count can be checked against another.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.demo.simulate import REGIONS, STATUS, WINDOW_END, WINDOW_START

Ints = NDArray[np.int64]
#: Column name -> (R,) array: the panel's rows as plain columns.
Panel = Mapping[str, NDArray[Any]]

#: Codes that the clean panel never holds.
UNKNOWN_STATUS = "X"
STRAY_REGION = "islands"
STATUS_CODE_UNKNOWN = len(STATUS)
REGION_CODE_STRAY = len(REGIONS)

#: kind -> (number of loans struck, bad rows per loan, what was done). A kind has the name of the quality rule
#: that finds it. The order is that of choosing: kinds that only few loans can bear come first.
DIRT: Mapping[str, tuple[int, int, str]] = MappingProxyType(
    {
        "period_after_maturity": (4, 2, "two rows still reported after the contract had matured"),
        "after_event": (7, 3, "three rows still reported after the default"),
        "event_in_first_row": (5, 1, "first seen in default, mid-life: never seen at risk"),
        "period_before_origination": (4, 2, "two rows reported before the loan was opened"),
        "category_once": (1, 1, f"region {STRAY_REGION!r}, which no other loan has"),
        "duplicate_exact": (12, 1, "one row delivered twice"),
        "duplicate_conflicting": (6, 1, "one month delivered twice with different balances"),
        "after_gap": (8, 2, "two months missing in mid-life"),
        "origination_changes": (5, 1, "opening date jumps a year forward, so age runs backwards"),
        "missing_amount": (9, 1, "one balance empty"),
        "negative_amount": (6, 1, "one balance below zero"),
        "unknown_status": (5, 1, f"one status {UNKNOWN_STATUS!r}, which the code list does not know"),
        "static_changes": (6, 1, "region changes in mid-life"),
    }
)

#: A demo book smaller than this has too few defaulted and matured loans to bear every kind.
FEWEST_LOANS = 600


@dataclass(frozen=True, slots=True)
class Dirt:
    """kind -> indices of the loans struck, ascending; see DIRT for what was done to each."""

    loans: Mapping[str, tuple[int, ...]]


@dataclass(frozen=True, slots=True)
class _Lives:
    """Per loan of the clean panel: positions of its first and last row, their months, last status code, opening."""

    first: Ints
    last: Ints
    seen_from: Ints
    seen_to: Ints
    ended: Ints
    opened: Ints

    @property
    def rows(self) -> Ints:
        return self.last - self.first + 1


def add_dirt(panel: Panel, rng: np.random.Generator) -> tuple[Panel, Dirt]:
    """The panel with the troubles of DIRT in it.

    ``panel`` has integer columns loan, month, status, opened, matures, region and float columns
    balance, rate, sorted by loan and month with loans numbered 0..n-1; so has the result, whose rows
    of one month may be doubled. Raises ValueError when the book has too few loans that can bear a kind.
    """
    lives = _lives(panel)
    free = np.ones(lives.first.size, dtype=bool)
    chosen: dict[str, tuple[int, ...]] = {}
    for kind, (count, _, _) in DIRT.items():
        able = np.flatnonzero(free & _able(kind, lives))
        if able.size < count:
            raise ValueError(
                f"{able.size} loans can bear {kind}, {count} are needed: draw at least {FEWEST_LOANS}"
            )
        picked = np.sort(rng.choice(able, size=count, replace=False))
        free[picked] = False
        chosen[kind] = tuple(int(i) for i in picked)
    work = _Work(
        {name: column.copy() for name, column in panel.items()}, np.zeros(panel["loan"].size, dtype=bool), []
    )
    for kind, loans in chosen.items():
        for loan in loans:
            _STRIKE[kind](work, (int(lives.first[loan]), int(lives.last[loan])), DIRT[kind][1])
    return work.result(), Dirt(MappingProxyType(chosen))


def _lives(panel: Panel) -> _Lives:
    loan, month = panel["loan"], panel["month"]
    first = np.flatnonzero(np.r_[True, loan[1:] != loan[:-1]])
    last = np.r_[first[1:], loan.size] - 1
    return _Lives(first, last, month[first], month[last], panel["status"][last], panel["opened"][first])


def _able(kind: str, lives: _Lives) -> NDArray[np.bool_]:
    """Loans that can bear a kind of trouble: a long clean life for most, a certain end for some."""
    ended = np.array(STATUS, dtype=object)[lives.ended]
    if kind == "period_after_maturity":
        return np.asarray((ended == "M") & (lives.seen_to <= WINDOW_END - 3))
    if kind == "after_event":
        return np.asarray((ended == "D") & (lives.seen_to <= WINDOW_END - 4) & (lives.rows >= 6))
    if kind == "event_in_first_row":
        return np.asarray((lives.seen_from == WINDOW_START) & (lives.opened < WINDOW_START) & (ended == "P"))
    if kind == "period_before_origination":
        return np.asarray(
            (lives.seen_from == lives.opened) & (lives.opened > WINDOW_START + 2) & (lives.rows > 5)
        )
    if kind == "category_once":
        return np.asarray((ended == "P") & (lives.rows >= 6))
    # alive to the end, so that the effect on the book at as_of can be seen too
    return np.asarray((lives.seen_to == WINDOW_END) & (ended == "C") & (lives.rows >= 30))


@dataclass(frozen=True, slots=True)
class _Work:
    """The panel being spoiled: its rows, the rows to drop, the rows to add."""

    rows: dict[str, NDArray[Any]]
    drop: NDArray[np.bool_]
    extra: list[dict[str, NDArray[Any]]]

    def add_copies(self, row: int, months: Sequence[int], **changes: float) -> None:
        """Copies of one row, so many months away, with some columns changed."""
        copy = {name: np.repeat(column[row], len(months)) for name, column in self.rows.items()}
        copy["month"] = copy["month"] + np.array(months, dtype=np.int64)
        for name, value in changes.items():
            copy[name] = np.full_like(copy[name], value)
        self.extra.append(copy)

    def result(self) -> Panel:
        parts = [{name: column[~self.drop] for name, column in self.rows.items()}, *self.extra]
        whole = {name: np.concatenate([part[name] for part in parts]) for name in self.rows}
        order = np.lexsort((whole["month"], whole["loan"]))
        return MappingProxyType({name: column[order] for name, column in whole.items()})


_Strike = Callable[[_Work, tuple[int, int], int], None]


def _middle(span: tuple[int, int]) -> int:
    return (span[0] + span[1]) // 2


def _after_end(work: _Work, span: tuple[int, int], n: int) -> None:
    matured = STATUS[int(work.rows["status"][span[1]])] == "M"
    changes: dict[str, float] = {"status": STATUS.index("C"), "balance": 250.0} if matured else {}
    work.add_copies(span[1], range(1, n + 1), **changes)


def _event_first(work: _Work, span: tuple[int, int], n: int) -> None:
    work.rows["status"][span[0]] = STATUS.index("D")
    work.drop[span[0] + 1 : span[1] + 1] = True


def _before_origination(work: _Work, span: tuple[int, int], n: int) -> None:
    work.add_copies(span[0], range(-n, 0), status=STATUS.index("C"))


def _stray_region(work: _Work, span: tuple[int, int], n: int) -> None:
    work.rows["region"][span[0] : span[1] + 1] = REGION_CODE_STRAY


def _twice(work: _Work, span: tuple[int, int], n: int) -> None:
    work.add_copies(_middle(span), (0,))


def _twice_differing(work: _Work, span: tuple[int, int], n: int) -> None:
    row = _middle(span)
    work.add_copies(row, (0,), balance=round(float(work.rows["balance"][row]) * 1.07, 2))


def _hole(work: _Work, span: tuple[int, int], n: int) -> None:
    work.drop[_middle(span) : _middle(span) + n] = True


def _reopened(work: _Work, span: tuple[int, int], n: int) -> None:
    rows = slice(_middle(span), span[1] + 1)
    work.rows["opened"][rows] += 12


def _no_balance(work: _Work, span: tuple[int, int], n: int) -> None:
    work.rows["balance"][_middle(span)] = np.nan


def _below_zero(work: _Work, span: tuple[int, int], n: int) -> None:
    work.rows["balance"][_middle(span)] *= -1.0


def _unknown(work: _Work, span: tuple[int, int], n: int) -> None:
    work.rows["status"][_middle(span)] = STATUS_CODE_UNKNOWN


def _moved(work: _Work, span: tuple[int, int], n: int) -> None:
    rows, region = slice(_middle(span), span[1] + 1), work.rows["region"]
    region[rows] = (region[rows] + 1) % len(REGIONS)


_STRIKE: Mapping[str, _Strike] = MappingProxyType(
    {
        "period_after_maturity": _after_end,
        "after_event": _after_end,
        "event_in_first_row": _event_first,
        "period_before_origination": _before_origination,
        "category_once": _stray_region,
        "duplicate_exact": _twice,
        "duplicate_conflicting": _twice_differing,
        "after_gap": _hole,
        "origination_changes": _reopened,
        "missing_amount": _no_balance,
        "negative_amount": _below_zero,
        "unknown_status": _unknown,
        "static_changes": _moved,
    }
)
