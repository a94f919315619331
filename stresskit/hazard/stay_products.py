"""What covariances on request are made of, by factored sums: squared scores of rows, information by calendar period.

The squared score of a row without event is a smooth function of e^eta as its information is (x^2 for a log hazard, P^2
for the logit), so the same sums over powers carry it. The information of a period is the sum over its cells, for
which the walk along a track carries the products of loan columns of those at risk.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.stay_sums import Block, Point, PowerSide, StaySums
from stresskit.kernels import row_values, walks
from stresskit.kernels.blocks import in_order
from stresskit.kernels.vectors import whole

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


class StayProducts(StaySums):
    """Squared scores and information by period of a design without moving columns."""

    @property
    def n_rows(self) -> int:
        return self._rows.n_rows

    @property
    def _in_order(self) -> Ints:
        """(k,) columns of the design as scores hold them: those of loans, of cells, of rows."""
        return np.concatenate([self._on_loan, self._on_cell, self._on_row])

    def of_scores(self, params: Floats) -> Floats:
        """(k, k) sum over rows of the outer product of the row's score."""
        at, total = self._at(params).at, np.zeros((self.k, self.k))
        for part in in_order(lambda b: self._squared_part(b, at), self.blocks, self._threads):
            total = total + part
        return 0.5 * (total + total.T)

    def _squared_part(self, b: int, at: Point) -> Floats:
        block = self._block(b)
        side, square = self._power_side(block, at), self._weight[block.part] ** 2
        alone = np.zeros((3, self._powers.degree))
        alone[0, : self._powers.squared.size] = self._powers.squared
        by_stay = self._powers_of_stays(block, side, alone)[0]
        found, cross = self._powers_at_risk(block, side, self._powers.squared, alone[:2], square)
        cross[:, 0] = found[0]
        for rest, place, x in self._beyond(block, side):
            score = x if self._link.log_hazard else self._link.from_exp(x)[0]
            by_stay[rest] = row_values.per_stay(score * score, place)
            cross += self._over_stays(
                score * score, block, rest, place, square[rest, None] * self._laid_out(block, rest)
            )
        nothing = np.zeros(square.size)
        sums = (0.0, *self._squares(block, nothing, square * by_stay), np.zeros(cross.shape[0]), cross)
        events = self._squared_events(block, at)
        return self._with_events(
            block, (np.zeros(events.size), np.zeros(events.size), events), sums
        ).information

    def _squared_events(self, block: Block, at: Point) -> Floats:
        """(events,) weighted squared scores of event rows, less what the pattern counted for them."""
        if self._link.log_hazard:
            score: Floats = self._event_terms(block, at)[1]
            return score * score
        weight = self._weight[self._event_at[block.events]]
        out: Floats = weight * weight * (1.0 - 2.0 * self._link.probability(at.event[block.events]))
        return out

    def by_period(self, params: Floats) -> Floats:
        """(periods, k, k) observed information of every calendar period from the first at risk to the last."""
        at, columns, kc = self._at(params).at, self._columns, self._on_cell.size
        wide = columns.size + whole(kc)
        shape = (self._periods.size, wide * wide)
        total = np.zeros(shape)
        for part in in_order(lambda b: self._period_part(b, at, shape), self.blocks, self._threads):
            total += part
        lower = np.tril(total.reshape((-1, wide, wide)))
        levels = np.arange(columns.dense.shape[1], columns.size)
        lower[:, levels, levels] = lower[:, levels, 0]
        both = lower + np.tril(lower, -1).transpose(0, 2, 1)
        used = np.concatenate([columns.place, columns.size + np.arange(kc)])[np.argsort(self._in_order)]
        return both[:, used[:, None], used]

    def _period_part(self, b: int, at: Point, shape: tuple[int, int]) -> Floats:
        block, columns, t = self._block(b), self._columns, self._tracks
        part, weight, period = block.part, self._weight[block.part], t.period[block.cells]
        z, out, side = padded(self._z[block.cells]), np.zeros(shape), self._observed_side(block, at)
        dense, codes = columns.dense[part], columns.codes[part]
        walks.period_squares(
            side.exp_s, weight, side.small, dense, codes, columns.shape, t.enter[part], self._last[part], block.base,
            block.late, block.starts, side.power, side.sums, z, np.where(t.boundary[block.cells], 0, period), out,
        )  # fmt: skip
        if self._link.log_hazard:
            stay, cell = self._events_in(block)
            information = self._event_terms(block, at)[2]
            walks.period_rows(stay, cell, information, dense, codes, columns.shape, z, period, out)
            return out
        for rest, place, x in self._beyond(block, side):
            length = np.diff(place)
            first = t.enter[part][rest] - block.base + 1 - place[:-1]
            cell = np.repeat(first, length) + np.arange(place[-1])
            information = np.repeat(weight[rest], length) * self._link.from_exp(x)[2]
            walks.period_rows(
                np.repeat(rest, length), cell, information, dense, codes, columns.shape, z, period, out
            )
        return out

    def _observed_side(self, block: Block, at: Point) -> PowerSide:
        """Powers of e^z, and in ``sums`` the coefficients with which they make the observed information."""
        if not self._link.log_hazard:
            side = self._power_side(block, at)
            return PowerSide(side.exp_s, side.exp_z, side.small, side.power, self._powers.joint)
        exp_s, exp_z = self._factors(block, at)
        return PowerSide(exp_s, exp_z, np.ones(exp_s.size, dtype=bool), exp_z[:, None], np.ones(1))


def padded(columns: Floats) -> Floats:
    """(n, q) columns and zeros up to a multiple of eight."""
    out = np.zeros((columns.shape[0], whole(columns.shape[1])))
    out[:, : columns.shape[1]] = columns
    return out
