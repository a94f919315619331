"""A book's loans in the slots of the march, block by block: what paths share. See :mod:`stresskit.kernels.lanes`."""

from __future__ import annotations

import dataclasses
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.kernels.lanes import Book
from stresskit.loss.lgd import LgdSource, StaticLgd
from stresskit.loss.money import LaneMoney, lane_money
from stresskit.projection.factors import LARGEST_SPLIT, Factors
from stresskit.projection.packing import Packing
from stresskit.spec.study import Loss

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_MONEY = tuple(f.name for f in dataclasses.fields(LaneMoney))


def place_of(causes: Sequence[str]) -> Ints:
    """Row of each cause in the march: default 0, payoff 1 whether there is one or not, the others after."""
    others = 2
    out = []
    for cause in causes:
        out.append({"default": 0, "payoff": 1}.get(cause, others))
        others += cause not in ("default", "payoff")
    return np.array(out, dtype=np.int64)


@dataclass(frozen=True, slots=True, eq=False)
class Lanes:
    """What lanes are made of. They are made anew for every block of every march: in the processor's cache that costs less
    than keeping them in memory, and adds next to nothing to what a march takes.

    own       (R,) steps until the ages of a table row pass the last supported one
    schedule  whether balances follow from numbers of each loan; if not, they are worked out step by step
    weight    (n,) for how many loans each one stands; None: for itself
    """

    portfolio: Portfolio
    factors: Factors
    loss: Loss
    lgd: LgdSource
    packing: Packing
    own: Ints
    cap: int | None
    schedule: bool
    weight: Floats | None = None

    def part(self, first: int, last: int) -> tuple[Book, Ints]:
        """Lanes of runs first .. last - 1, and the cells that their sums are of."""
        p = self.packing
        chunks = slice(int(p.cut[first]), int(p.cut[last]))
        end = p.loan.size if chunks.stop == p.start.size else int(p.start[chunks.stop])
        begin = int(p.start[chunks.start])
        loan, row, start = p.loan[begin:end], p.row[chunks], p.start[chunks] - begin
        loans, padding = np.maximum(loan, 0), np.flatnonzero(loan < 0)
        present, a, term = (
            np.ones(loan.size) if self.weight is None else self.weight[loans],
            self._odds(loans),
            self.portfolio.remaining[loans].astype(np.float64),
        )
        money = self._money(loans, term)
        life = term.copy() if self.cap is None else np.minimum(term, self.cap)
        present[padding], a[:, padding], term[padding], life[padding] = 0.0, 0.0, 1.0, 0.0
        cells, slot = np.unique(p.cell[first:last], return_inverse=True)
        return Book(
            a=a, loan=loan, present=present, lgd=self._lgd(loans), term=term, life=life, **money,
            start=start, size=p.size[chunks], row=row, steps=p.steps[chunks], least=p.least[chunks],
            own=self.own[row], key=self.factors.row_key[row], top=np.maximum.reduceat(a, start, axis=1),
            cut=p.cut[first : last + 1] - chunks.start, slot=slot.astype(np.int64),
        ), cells  # fmt: skip

    def _odds(self, loans: Ints) -> Floats:
        """(causes, b) e^s."""
        place = place_of(self.factors.causes)
        out = np.zeros((int(place.max()) + 1, loans.size))
        for p, part in zip(place, self.factors.parts, strict=True):
            np.exp(np.clip(part.s[loans], -LARGEST_SPLIT, LARGEST_SPLIT), out=out[p])
        return out

    def _lgd(self, loans: Ints) -> Floats:
        return self.lgd.values[loans] if isinstance(self.lgd, StaticLgd) else np.zeros(loans.size)

    def _money(self, loans: Ints, term: Floats) -> dict[str, Floats]:
        """What balances, exposures and discount factors follow from; zeros where they do not."""
        if not self.schedule:
            return dict.fromkeys(_MONEY, np.zeros(loans.size))
        book = self.portfolio
        money = lane_money(
            self.loss,
            book.balance[loans],
            book.rate[loans],
            term,
            cap=self.cap,
            per_year=book.frequency.per_year,
        )
        return {name: getattr(money, name) for name in _MONEY}
