"""Everything that a fit asks of sums without rows: :class:`StaySums` with clusters, expected events and totals."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.stay_products import StayProducts, padded
from stresskit.hazard.stay_sums import Block, Known, Point, PowerSide
from stresskit.hazard.sums import ScoreProducts, Tally
from stresskit.hazard.tracks import Tracks
from stresskit.kernels import cohorts, row_values, walks
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


@dataclass(frozen=True, slots=True, eq=False)
class Scores:
    """Scores of a block at a point; columns of matrices as in :attr:`FactoredSums._in_order`.

    single (k, k)      sum of outer products over the stays of loans with one stay
    several (r, k)     scores of the other stays
    by_period (p, k)   sums over calendar periods
    information        (k, k) expected information where it comes with them, else 0
    """

    single: Floats
    several: Floats
    by_period: Floats
    information: Floats | float = 0.0


class FactoredSums(StayProducts):
    """Sums of a design without moving columns."""

    def expected_information(self, params: Floats) -> Floats:
        return self._expected(params)[1]

    def _expected(self, params: Floats) -> tuple[Point, Floats]:
        """The point with its ``stays`` written, and (k, k) the expected information."""
        known = self._at(params)
        if known.expected is None:
            known = self._finished(known.at)
        assert known.expected is not None
        return known.at, known.expected

    def score_products(self, params: Floats) -> ScoreProducts:
        known = self._at(params)
        if known.products is None:
            known = self._finished(known.at)
        assert known.products is not None
        return known.products

    def _finished(self, at: Point) -> Known:
        """What covariances and gates ask for after the last evaluation, in one pass."""
        assert self._known is not None
        single = self._single()
        parts = in_order(lambda b: self._last_part(b, at, single), self.blocks, self._threads)
        products, several = np.zeros((self.k, self.k)), np.empty((int((~single).sum()), self.k))
        information = self._expected_matrix(at)
        by_period, filled = np.zeros((self._periods.size, self.k)), 0
        for scores in parts:
            information += scores.information
            products += scores.single
            several[filled : filled + scores.several.shape[0]] = scores.several
            filled += scores.several.shape[0]
            by_period += scores.by_period
        products += _of_clusters(self._loan[~single], several)
        place = np.argsort(self._in_order)
        by_period = np.ascontiguousarray(by_period[:, place])
        found = ScoreProducts(
            products[np.ix_(place, place)], self._rows.n_loans, by_period.T @ by_period,
            int((self._periods > 0).sum()), by_period,
        )  # fmt: skip
        expected = self._known.expected
        self._known = replace(
            self._known,
            expected=0.5 * (information + information.T) if expected is None else expected,
            products=found,
        )
        return self._known

    def _single(self) -> NDArray[np.bool_]:
        """(m,) whether the stay is the only one of its loan."""
        loan = self._rows.loan
        if loan.size == self._rows.n_loans:
            return np.ones(loan.size, dtype=bool)
        single: NDArray[np.bool_] = np.bincount(loan, minlength=self._rows.n_loans) == 1
        return single[self._loan]

    def _last_part(self, b: int, at: Point, single: NDArray[np.bool_]) -> Scores:
        """The scores of a block."""
        block = self._block(b)
        side = self._power_side(block, at)
        found = (
            self._hazard_scores(block, side) if self._link.log_hazard else self._power_scores(block, side, at)
        )
        return self._scores(block, at, *found, single[block.part])

    def _expected_matrix(self, at: Point) -> Floats:
        """(k, k) expected information of a log hazard, and writes the point's ``stays``; zeros where it is the observed one."""
        if not self._link.log_hazard:
            return np.zeros((self.k, self.k))
        return self._put(self._passed(at, range(self.blocks), observed=False)).information

    def _scores(
        self, block: Block, at: Point, loan: Floats, cell: Floats, cross: Floats, single: NDArray[np.bool_]
    ) -> Scores:
        """From the scores of all rows but the events'.

        loan (n,) of the ones, by stay; cell (n, kc and zeros) of the cell columns, by stay; cross (cells, columns) of
        the loan columns, by cell
        """
        columns, part, z = self._columns, block.part, self._z[block.cells]
        stay, place = self._events_in(block)
        score, kc = self._event_terms(block, at)[1], z.shape[1]
        loan[stay] += score
        cell[stay, :kc] += score[:, None] * z[place]
        walks.events_by_cell(stay, place, score, columns.dense[part], columns.codes[part], cross)
        rest = np.flatnonzero(~single)
        several = np.empty((rest.size, self.k))
        if rest.size:
            kl = self._on_loan.size
            np.multiply(columns.wide(part.start + rest)[:, 1:], loan[rest, None], out=several[:, :kl])
            several[:, kl:] = cell[rest, :kc]
            loan[rest], cell[rest] = 0.0, 0.0
        return Scores(self._outer(block, loan, cell), several, self._by_period(block, cross, z))

    def _outer(self, block: Block, loan: Floats, cell: Floats) -> Floats:
        """(k, k) sum of outer products of scores: ``loan`` (n,) times the loan columns, and ``cell``."""
        columns, kl, d = self._columns, self._on_loan.size, self._columns.used - 1
        w, out = columns.dense.shape[1], np.zeros((self.k, self.k))
        used = np.concatenate([np.arange(1, 1 + d), w + np.arange(self._on_cell.size)])
        square, across, among = walks.outer_products(
            loan,
            cell,
            columns.dense[block.part],
            columns.codes[block.part],
            columns.size,
        )
        at = np.concatenate([np.arange(d), np.arange(kl, self.k)])
        lower = np.tril(square[used[:, None], used])
        out[at[:, None], at] = lower + np.tril(lower, -1).T
        levels, place = np.arange(d, kl), columns.place[d:]
        out[levels[:, None], at] = across[place[:, None], used]
        out[at[:, None], levels] = across[place[:, None], used].T
        out[levels[:, None], levels] = among[place[:, None], place]
        return out

    def _by_period(self, block: Block, cross: Floats, z: Floats) -> Floats:
        """(periods, k) sums over the cells of each period."""
        kl, period = self._on_loan.size, self._tracks.period[block.cells]
        inner = np.flatnonzero(~self._tracks.boundary[block.cells])
        out = np.empty((self._periods.size, self.k))
        out[:, :kl] = cohorts.by_label(period[inner], cross[inner], self._periods.size)[
            :, self._columns.place
        ]
        out[:, kl:] = cohorts.by_label(period[inner], z[inner] * cross[inner, :1], self._periods.size)
        return out

    def _hazard_scores(self, block: Block, side: PowerSide) -> tuple[Floats, Floats, Floats]:
        """Scores of survived rows for :meth:`_scores`."""
        part, z, exp_z, columns, t = block.part, self._z[block.cells], side.exp_z, self._columns, self._tracks
        hazard, cross = walks.hazards(
            side.exp_s, self._weight[part], exp_z, columns.dense[part], columns.codes[part], columns.size,
            t.enter[part], self._last[part], block.base, block.late, block.starts,
        )  # fmt: skip
        table = cohorts.running(padded(z * exp_z[:, None]), block.starts)
        sums = walks.over_stays(
            side.exp_s * -self._weight[part], table, t.enter[part], self._last[part], block.base
        )
        return np.negative(hazard, out=hazard), sums, np.negative(cross, out=cross)

    def _power_scores(self, block: Block, side: PowerSide, at: Point) -> tuple[Floats, Floats, Floats]:
        """The same for links without log hazard, all rows counted as without event."""
        part, t, c = block.part, self._tracks, self._powers
        enter, last, z, weight = t.enter[part], self._last[part], self._z[block.cells], self._weight[part]
        fewer, wide = c.joint_score.size, padded(z)
        table = (side.power[:, :fewer] * c.joint_score)[:, :, None] * wide[:, None, :]
        table = cohorts.running(table.reshape(z.shape[0], -1), block.starts).reshape(table.shape)
        p = at.stays[0, part]
        of_cells = walks.powers_over_stays(side.exp_s, weight, table, side.small, enter, last, block.base)
        found, cross = self._powers_at_risk(block, side, c.joint_score)
        cross[:, 0] = found[0]
        for rest, place, x in self._beyond(block, side):
            odds, _, _ = self._link.from_exp(x)
            of_cells[rest, : z.shape[1]] = -weight[rest, None] * row_values.cell_columns(
                odds, z, enter[rest], block.base, place
            )
            cross += self._over_stays(
                odds, block, rest, place, weight[rest, None] * self._laid_out(block, rest)
            )
        return -weight * p, of_cells, np.negative(cross, out=cross)

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
        weight, side = self._weight[block.part], self._power_side(block, at)
        found, _ = self._powers_at_risk(block, side, self._powers.joint[:0])
        expected = found[0]
        for rest, place, x in self._beyond(block, side):
            p, _, _ = self._link.from_exp(x)
            expected += self._over_stays(p, block, rest, place, weight[rest, None])[:, 0]
        if self._link.log_hazard:
            stay, place = self._events_in(block)
            p = self._link.probability(at.event[block.events])
            expected += totals(place, weight[stay] * p, expected.size)
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
            p = self._link.probability(at.event)
            expected[self._event_at] += p
            variance[self._event_at] += p * (1.0 - p)
        return expected, variance

    def column_totals(self) -> tuple[Floats, Floats]:
        t = self._tracks
        rows, events = np.zeros(self.k), np.zeros(self.k)
        change = totals(t.leave, self._weight, t.cells) - totals(t.enter, self._weight, t.cells)
        at_risk = np.ascontiguousarray(change[:, None])
        cohorts.at_risk(at_risk, t.starts)
        everyone = slice(0, self._loan.size)
        rows[self._on_loan] = self._columns.totals(everyone, self._weight * (t.leave - t.enter))
        rows[self._on_cell] = at_risk[:, 0] @ self._z
        weight = self._weight[self._event_at]
        events[self._on_loan] = self._columns.totals(self._event_at, weight)
        events[self._on_cell] = totals(self._event_cell, weight, t.cells) @ self._z
        return rows, events


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
