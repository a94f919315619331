"""Everything that a fit asks of sums without rows: :class:`StaySums` with clusters, expected events and totals."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.stay_sums import Block, Point, StaySums
from stresskit.hazard.sums import ScoreProducts, Tally
from stresskit.hazard.tracks import Tracks
from stresskit.kernels import cohorts, power_sums, row_values
from stresskit.kernels.blocks import in_order, totals

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Cells may be at most this share of the rows, else the design is cheaper row by row.
LARGEST_SHARE = 0.5


def why_impossible(design: Design) -> str:
    """Why factored sums cannot carry the design; empty when they can."""
    moving = design.sources("moving")
    return f"it reads columns that move along a stay: {', '.join(moving)}" if moving else ""


def worthwhile(tracks: Tracks, rows: CauseRows) -> bool:
    """Cells (group, cohort, age) are few against rows, so sums over cells are the cheaper ones."""
    return tracks.cells <= LARGEST_SHARE * rows.n_rows


class FactoredSums(StaySums):
    """Sums of a design without moving columns."""

    def score_products(self, params: Floats) -> ScoreProducts:
        rows, at = self._rows, self._point(params)
        single = (totals(rows.loan, np.ones(rows.loan.size), rows.n_loans) == 1)[self._loan]

        def scores(b: int) -> tuple[Floats, Floats, Floats]:
            stays, by_period = self._scores_of(b, at)
            one = single[self._cuts[b] : self._cuts[b + 1]]
            alone = stays if one.all() else stays[one]
            return alone.T @ alone, stays[~one], by_period

        products, several = np.zeros((self.k, self.k)), np.empty((int((~single).sum()), self.k))
        by_period, filled = np.zeros((self._periods.size, self.k)), 0
        for alone, rest, periods in in_order(scores, self.blocks, self._threads):
            products += alone
            several[filled : filled + rest.shape[0]] = rest
            filled += rest.shape[0]
            by_period += periods
        products += _of_clusters(self._loan[~single], several)
        place = np.argsort(self._in_order)
        by_period = np.ascontiguousarray(by_period[:, place])
        return ScoreProducts(
            products[np.ix_(place, place)], rows.n_loans, by_period.T @ by_period,
            int((self._periods > 0).sum()), by_period,
        )  # fmt: skip

    @property
    def _in_order(self) -> Ints:
        """(k,) columns of the design as scores hold them: those of loans, of cells, of rows."""
        return np.concatenate([self._on_loan, self._on_cell, self._on_row])

    def _scores_of(self, b: int, at: Point) -> tuple[Floats, Floats]:
        """(n, k) scores of the stays of a block, and (periods, k) of its calendar periods; columns :attr:`_in_order`."""
        block, t = self._block(b), self._tracks
        part, found = block.part, self._hazard_scores if self._link.log_hazard else self._power_scores
        stays, cell, cross = found(block, at)
        here = self._events_of(part)
        event, x = self._event_at[here], self._event_x[here][:, self._in_order]
        x *= self._event_terms(here, at.params)[1][:, None]
        stays[event - part.start] += x
        by_cell = np.concatenate([cross, self._z[block.cells] * cell[:, None]], axis=1)
        by_period = self._by_period(block, by_cell)
        by_period += cohorts.by_label(t.period[t.leave[event]], x, self._periods.size)
        return stays, by_period

    def _by_period(self, block: Block, by_cell: Floats) -> Floats:
        """(periods, q) sums over the cells (cells, q) of each period."""
        inner = ~self._tracks.boundary[block.cells]
        return cohorts.by_label(self._tracks.period[block.cells][inner], by_cell[inner], self._periods.size)

    def _hazard_scores(self, block: Block, at: Point) -> tuple[Floats, Floats, Floats]:
        """Scores of survived rows: (n, k) of the stays, (cells,) of z in each cell, (cells, kl) times loan columns."""
        part, t, kl = block.part, self._tracks, self._on_loan.size
        enter, last = t.enter[part], self._last[part]
        mass, exp_z = self._exp_s(part, at) * self._weight[part], self._exp_z(block, at)
        table = np.empty((exp_z.size, 1 + self._on_cell.size))
        table[:, 0] = exp_z
        np.multiply(self._z[block.cells], exp_z[:, None], out=table[:, 1:])
        sums = cohorts.differences(-mass, cohorts.running(table, block.starts), enter, last, block.base)
        stays = np.empty((mass.size, self.k))
        np.multiply(self._columns.wide(part)[:, 1:], sums[:, :1], out=stays[:, :kl])
        stays[:, kl:] = sums[:, 1:]
        cross = self._spread(block, mass)
        cross *= -exp_z[:, None]
        return stays, cross[:, 0], cross[:, 1:]

    def _power_scores(self, block: Block, at: Point) -> tuple[Floats, Floats, Floats]:
        """The same for links without log hazard, all rows counted as without event."""
        part, t, kl, c = block.part, self._tracks, self._on_loan.size, self._powers
        enter, last, z, side = (
            t.enter[part],
            self._last[part],
            self._z[block.cells],
            self._power_side(block, at),
        )
        weight = self._weight[part]
        p = power_sums.of_stays(
            side.exp_s, side.sums, side.small, enter, last, block.base, c.probability[None]
        )[0]
        fewer = c.joint_score.size
        table = (side.power[:, :fewer] * c.joint_score)[:, :, None] * z[:, None, :]
        table = cohorts.running(table.reshape(z.shape[0], -1), block.starts).reshape(table.shape)
        of_cells = power_sums.joint_of_stays(side.exp_s, table, side.small, enter, last, block.base)
        found, cross = power_sums.at_risk(
            *self._leaving(block, side, last), side.power, block.starts, c.of_cells, c.joint_score
        )
        cross[:, 0] = found[0]
        for rest, place, x in self._beyond(block, side, last):
            odds, _, _ = self._link.from_exp(x)
            p[rest] = row_values.per_stay(odds, place)
            of_cells[rest] = row_values.cell_columns(odds, z, enter[rest], block.base, place)
            cross[:, :-1] += self._over_stays(
                odds, block, rest, place, weight[rest, None] * self._wide(block, rest)
            )
        stays = np.empty((weight.size, self.k))
        np.multiply(self._columns.wide(part)[:, 1:], -(weight * p)[:, None], out=stays[:, :kl])
        np.multiply(of_cells, -weight[:, None], out=stays[:, kl:])
        return stays, -cross[:, 0], -cross[:, 1:-1]

    def tally(self, params: Floats) -> Tally:
        t, at = self._tracks, self._point(params)
        cell = np.zeros(t.cells)
        for cells, expected in in_order(lambda b: self._cells_part(b, at), self.blocks, self._threads):
            cell[cells] += expected
        inside = ~t.boundary
        return Tally(
            totals(t.age[inside], cell[inside], self._rows.largest_age + 1),
            totals(t.period[inside], cell[inside], self._periods.size),
        )

    def _cells_part(self, b: int, at: Point) -> tuple[slice, Floats]:
        """Expected events of a block in its cells."""
        block = self._block(b)
        leave, weight = self._tracks.leave[block.part], self._weight[block.part]
        side = self._power_side(block, at)
        found, _ = power_sums.at_risk(
            *self._leaving(block, side, leave, alone=True), side.power, block.starts,
            self._powers.probability[None], self._powers.joint[:0],
        )  # fmt: skip
        expected = found[0]
        for rest, place, x in self._beyond(block, side, leave):
            p, _, _ = self._link.from_exp(x)
            expected += self._over_stays(p, block, rest, place, weight[rest, None])[:, 0]
        return block.cells, expected

    def expected_by_loan(self, params: Floats) -> tuple[Floats, Floats]:
        expected, variance = self._of_stays(params)
        size = self._rows.n_loans
        return totals(self._loan, self._weight * expected, size), totals(
            self._loan, self._weight * variance, size
        )

    def _of_stays(self, params: Floats) -> tuple[Floats, Floats]:
        """(m,) expected events of each stay and their variance, without weights."""
        at, _ = self._expected(params)
        expected, variance = at.stays.copy()
        if self._link.log_hazard:
            p = self._link.probability(self._event_x @ params + self._event_offset)
            expected[self._event_at] += p
            variance[self._event_at] += p * (1.0 - p)
        return expected, variance

    def column_totals(self) -> tuple[Floats, Floats]:
        t = self._tracks
        rows = np.zeros(self.k)
        change = totals(t.leave, self._weight, t.cells) - totals(t.enter, self._weight, t.cells)
        at_risk = np.ascontiguousarray(change[:, None])
        cohorts.at_risk(at_risk, t.starts)
        everyone = slice(0, self._loan.size)
        rows[self._on_loan] = self._columns.totals(everyone, self._weight * (t.leave - t.enter))[1:]
        rows[self._on_cell] = at_risk[:, 0] @ self._z
        return rows, self._weight[self._event_at] @ self._event_x


def _of_clusters(loan: Ints, scores: Floats) -> Floats:
    """Sum over loans of the outer product of the loan's score, the sum of its stays' scores (n, k)."""
    order = np.argsort(loan, kind="stable")
    label, scores = loan[order], scores[order]
    if label.size == 0:
        return np.zeros((scores.shape[1], scores.shape[1]))
    first = np.flatnonzero(np.concatenate(([True], label[1:] != label[:-1])))
    by_loan = np.add.reduceat(scores, first, axis=0)
    out: Floats = by_loan.T @ by_loan
    return out
