"""A book's loans in the slots of the march, made once: what paths share. See :mod:`stresskit.kernels.lanes`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.kernels.blocks import in_order
from stresskit.kernels.lanes import Book
from stresskit.kernels.packs import RECORD, into_lanes
from stresskit.loss.lgd import LgdSource, StaticLgd
from stresskit.loss.money import lane_money
from stresskit.projection.factors import LARGEST_SPLIT, Factors
from stresskit.projection.packing import Packing
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Loans, and chunks of lanes, that are worked on at a time.
LOANS, CHUNKS = 1 << 13, 1 << 8


@dataclass(frozen=True, slots=True, eq=False)
class Lanes:
    """Slots of a whole book.

    a (C, slots), numbers (RECORD, slots), present (slots,), top (C, chunks)  as in :class:`stresskit.kernels.lanes.Book`
    own, key (R,)  by table row
    schedule       whether balances follow from these numbers; if not, they are worked out loan by loan and step by step
    """

    packing: Packing
    a: Floats
    numbers: Floats
    present: Floats
    top: Floats
    own: Ints
    key: Ints
    schedule: bool

    def part(self, first: int, last: int) -> tuple[Book, Ints]:
        """Lanes of runs first .. last - 1, and the cells that their sums are of."""
        p = self.packing
        chunks = slice(int(p.cut[first]), int(p.cut[last]))
        at = slots(p, chunks)
        row = p.row[chunks]
        cells, slot = np.unique(p.cell[first:last], return_inverse=True)
        return Book(
            a=np.ascontiguousarray(self.a[:, at]), loan=p.loan[at], present=self.present[at],
            start=p.start[chunks] - at.start, size=p.size[chunks], row=row, steps=p.steps[chunks], least=p.least[chunks],
            own=self.own[row], key=self.key[row], top=np.ascontiguousarray(self.top[:, chunks]),
            cut=p.cut[first : last + 1] - chunks.start, slot=slot.astype(np.int64),
            **{name: self.numbers[k, at] for k, name in enumerate(RECORD)},
        ), cells  # fmt: skip


def slots(p: Packing, chunks: slice) -> slice:
    """Slots of some chunks."""
    end = p.loan.size if chunks.stop >= p.start.size else int(p.start[chunks.stop])
    return slice(int(p.start[chunks.start]), end)


def place_of(causes: Sequence[str]) -> Ints:
    """Row of each cause in the march: default 0, payoff 1 whether there is one or not, the others after."""
    others = 2
    out = []
    for cause in causes:
        out.append({"default": 0, "payoff": 1}.get(cause, others))
        others += cause not in ("default", "payoff")
    return np.array(out, dtype=np.int64)


@dataclass(frozen=True, slots=True, eq=False)
class Terms:
    """What lanes are made of; ``life`` (n,) steps to project."""

    portfolio: Portfolio
    factors: Factors
    loss: Loss
    lgd: LgdSource
    life: Ints
    cap: int | None

    def record(self, threads: int) -> tuple[Floats, bool]:
        """(n, causes + RECORD) in the portfolio's order, and whether the numbers of the schedule are known for all."""
        n, place = self.portfolio.n_loans, place_of(self.factors.causes)
        causes = int(place.max()) + 1
        out = np.empty((n, causes + len(RECORD)))
        out[:, :causes] = 0.0

        def block(b: int) -> bool:
            at = slice(b * LOANS, min(n, (b + 1) * LOANS))
            for p, part in zip(place, self.factors.parts, strict=True):
                out[at, p] = np.exp(np.clip(part.s[at], -LARGEST_SPLIT, LARGEST_SPLIT))
            money = lane_money(self.loss, self.portfolio, self.cap, at)
            known = {} if money is None else {name: getattr(money, name) for name in money.__slots__}
            known |= {"term": self.portfolio.remaining[at], "life": self.life[at]}
            if isinstance(self.lgd, StaticLgd):
                known["lgd"] = self.lgd.values[at]
            for k, name in enumerate(RECORD, start=causes):
                out[at, k] = known.get(name, 0.0)
            return money is not None

        return out, all(list(in_order(block, -(-n // LOANS), threads)))


def lanes_of(terms: Terms, packing: Packing, supported_age: int, threads: int) -> Lanes:
    """The book in lanes, the same bits for any number of threads."""
    record, schedule = terms.record(threads)
    causes, size, chunks = record.shape[1] - len(RECORD), packing.loan.size, packing.start.size
    a, numbers, present = np.empty((causes, size)), np.empty((len(RECORD), size)), np.empty(size)
    top = np.empty((causes, chunks))

    def block(b: int) -> None:
        mine = slice(b * CHUNKS, min(chunks, (b + 1) * CHUNKS))
        at = slots(packing, mine)
        into_lanes(record, packing.loan, at.start, at.stop, a, numbers, present)
        top[:, mine] = np.maximum.reduceat(a[:, at], packing.start[mine] - at.start, axis=1)

    for _ in in_order(block, -(-chunks // CHUNKS), threads):
        pass
    factors = terms.factors
    return Lanes(
        packing, a, numbers, present, top, supported_age - factors.row_age, factors.row_key, schedule
    )
