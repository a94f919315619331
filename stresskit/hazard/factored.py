"""Everything that a fit asks of sums without rows: :class:`StaySums` with clusters, expected events and totals."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.powers import CellPowers, PowerTables, joint_sums, joint_table, power_tables
from stresskit.hazard.stay_sums import Part, Point, StaySums
from stresskit.hazard.sums import ScoreProducts, Tally
from stresskit.hazard.tracks import Tracks
from stresskit.kernels.blocks import in_order, totals
from stresskit.kernels.cohorts import remaining, running, tiles

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Cells may be at most this share of the rows, else the design is cheaper row by row.
LARGEST_SHARE = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class _Scores:
    """Scores at a point, rows counted as without event.

    cell (cells,), cross (cells, kl)   minus the score of z in each cell, alone and times loan columns
    of_block                           block -> (n, k) scores of its stays, loan columns first
    """

    point: Point
    cell: Floats
    cross: Floats
    of_block: Callable[[int], Floats]


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
        t, rows = self._tracks, self._rows
        single = (totals(rows.loan, np.ones(rows.loan.size), rows.n_loans) == 1)[self._loan]
        found = self._hazard_scores(params) if self._link.log_hazard else self._odds_scores(params)
        # Columns lie as loan columns, then cell columns, until the end.
        order = np.concatenate([self._on_loan, self._on_cell])
        products, several = np.zeros((self.k, self.k)), np.zeros((int((~single).sum()), self.k))
        by_period, filled = np.zeros((self._periods.size, self.k)), 0

        def scores(b: int) -> tuple[Floats, Floats, Floats]:
            part = self._stays(b)
            stays = found.of_block(b)
            here = self._events_of(part)
            at, x = self._event_at[here], self._event_x[here][:, order]
            x *= self._event_terms(at, found.point)[1][:, None]
            stays[at - part.start] += x
            events = _by_period(t.period[t.leave[at]], x, self._periods.size)
            if single[part].all():
                return stays.T @ stays, stays[:0], events
            alone = stays[single[part]]
            return alone.T @ alone, stays[~single[part]], events

        for alone, rest, events in in_order(scores, self.blocks, self._threads):
            products += alone
            several[filled : filled + rest.shape[0]] = rest
            filled += rest.shape[0]
            by_period += events
        products += _of_clusters(self._loan[~single], several)
        inside, kl = ~t.boundary, self._on_loan.size
        period, size = t.period[inside], self._periods.size
        by_period[:, kl:] -= _by_period(period, (self._z * found.cell[:, None])[inside], size)
        by_period[:, :kl] -= _by_period(period, found.cross[inside], size)
        place = np.argsort(order)
        by_period = np.ascontiguousarray(by_period[:, place])
        return ScoreProducts(
            products[np.ix_(place, place)], rows.n_loans, by_period.T @ by_period,
            int((self._periods > 0).sum()), by_period,
        )  # fmt: skip

    def _hazard_scores(self, params: Floats) -> _Scores:
        """Sums by cell are those of the evaluation at the same coefficients."""
        if self._known is None or not np.array_equal(self._known.params, params):
            self.evaluate(params)
        assert self._known is not None
        point, total = self._known.point, self._known.total
        c = running(np.column_stack([point.exp_z, point.exp_z[:, None] * self._z]), self._tracks.starts)
        return _Scores(
            point, total.cell, total.cross, lambda b: self._running_scores(self._stays(b), point, c)
        )

    def _odds_scores(self, params: Floats) -> _Scores:
        """Sums by cell come with the scores, so the blocks are gone through twice: here for the cells."""
        point, t, c = self._point(params), self._tracks, self._powers
        tables = power_tables(point.exp_z, c.degree, t.starts)
        table = joint_table(tables, self._z, c.joint_score, t.starts)
        total = self._added(lambda b: self._score_cells(b, point, tables))
        assert total.powers is not None
        cell = total.cell + total.powers.at_risk(tables, t.starts) @ c.probability
        cross = total.cross + total.powers.joint_at_risk(tables, t.starts, c.joint_score)
        return _Scores(point, cell, cross, lambda b: self._power_scores(b, point, tables, table))

    def _score_cells(self, b: int, point: Point, tables: PowerTables) -> Part:
        """Expected events of block b by cell, alone and times loan columns."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        size, kl, none = cells.stop - cells.start, self._on_loan.size, np.zeros((self.k, self.k))
        small, power = self._small_powers(part, point, tables)
        power *= self._weight[part][:, None]
        leaving = CellPowers.of_block(power, self._one_a[part], self._ends[b], self._powers.joint.size)
        out = Part(
            cells.start, 0.0, none[0], none, np.zeros(size), np.zeros(size), np.zeros((size, kl)), leaving
        )
        rest = np.flatnonzero(~small)
        if rest.size:
            weighted = self._one_a[part][rest] * self._weight[part][rest, None]
            enter, last = t.enter[part][rest] - cells.start, self._last[part][rest] - cells.start
            for tile in tiles(enter, last, t.stay_track[part][rest]):
                p, _, _ = self._link.from_exp(tile.outer(point.exp_s[part][rest], point.exp_z[cells]))
                both = p.T @ weighted[tile.rows]
                out.cell[tile.cells] += both[:, 0]
                out.cross[tile.cells] += both[:, 1:]
        return out

    def _running_scores(self, part: slice, point: Point, c: Floats) -> Floats:
        """Scores of stays (n, k) without event rows; c running sums of e^z and of e^z times the cell columns."""
        t, kl = self._tracks, self._on_loan.size
        sums = np.take(c, t.enter[part], axis=0)
        sums -= np.take(c, self._last[part], axis=0)
        sums *= (self._weight[part] * point.exp_s[part])[:, None]
        out = np.empty((sums.shape[0], self.k))
        out[:, kl:] = sums[:, 1:]
        np.multiply(self._a[part], sums[:, :1], out=out[:, :kl])
        return out

    def _power_scores(self, b: int, point: Point, tables: PowerTables, table: Floats) -> Floats:
        """The same for links without log hazard, all rows counted as without event; table of :func:`joint_table`."""
        part, t, kl = self._stays(b), self._tracks, self._on_loan.size
        enter, last, weight, a = t.enter[part], self._last[part], self._weight[part], self._a[part]
        small, power = self._small_powers(part, point, tables)
        p = self._power_sums(b, power, tables, last) @ self._powers.probability
        out = np.empty((weight.size, self.k))
        np.multiply(joint_sums(power, table, enter, last), -weight[:, None], out=out[:, kl:])
        np.multiply(a, -(weight * p)[:, None], out=out[:, :kl])
        rest = np.flatnonzero(~small)
        if rest.size:
            exp_s, own, scores = point.exp_s[part][rest], -weight[rest, None], np.zeros((rest.size, self.k))
            for tile in tiles(enter[rest], last[rest], t.stay_track[part][rest]):
                q, _, _ = self._link.from_exp(tile.outer(exp_s, point.exp_z))
                scores[tile.rows, kl:] = own[tile.rows] * (q @ self._z[tile.cells])
                scores[tile.rows, :kl] = own[tile.rows] * a[rest[tile.rows]] * (q @ np.ones((q.shape[1], 1)))
            out[rest] = scores
        return out

    def tally(self, params: Floats) -> Tally:
        point = self._point(params)
        t, size = self._tracks, self._tracks.cells

        def work(b: int) -> tuple[slice, Floats]:
            part, cells = self._stays(b), self._cells(b)
            self._filled(part, point)
            expected = np.zeros(cells.stop - cells.start)
            for tile in tiles(t.enter[part] - cells.start, t.leave[part] - cells.start, t.stay_track[part]):
                p, _, _ = self._link.from_exp(tile.outer(point.exp_s[part], point.exp_z[cells]))
                expected[tile.cells] += self._weight[part][tile.rows] @ p
            return cells, expected

        cell = np.zeros(size)
        for cells, expected in in_order(work, self.blocks, self._threads):
            cell[cells] += expected
        inside = ~t.boundary
        return Tally(
            totals(t.age[inside], cell[inside], self._rows.largest_age + 1),
            totals(t.period[inside], cell[inside], self._periods.size),
        )

    def expected_by_loan(self, params: Floats) -> tuple[Floats, Floats]:
        point, t = self._point(params), self._tracks
        tables = power_tables(point.exp_z, self._powers.degree, t.starts)
        parts = in_order(lambda b: self._expected_part(b, point, tables), self.blocks, self._threads)
        expected, variance = (np.concatenate(half) for half in zip(*parts, strict=True))
        size = self._rows.n_loans
        return totals(self._loan, self._weight * expected, size), totals(
            self._loan, self._weight * variance, size
        )

    def _expected_part(self, b: int, point: Point, tables: PowerTables) -> tuple[Floats, Floats]:
        """Expected events of each stay of a block and their variance, without weights."""
        part, t, c = self._stays(b), self._tracks, self._powers
        small, power = self._small_powers(part, point, tables)
        enter, leave = t.enter[part], t.leave[part]
        sums = self._power_sums(b, power, tables, leave)
        expected, variance = sums @ c.probability, sums @ c.variance
        rest = np.flatnonzero(~small)
        if rest.size:
            exp_s, more, spread = point.exp_s[part][rest], np.zeros(rest.size), np.zeros(rest.size)
            for tile in tiles(enter[rest], leave[rest], t.stay_track[part][rest]):
                p, q, _ = self._link.from_exp(tile.outer(exp_s, point.exp_z))
                more[tile.rows] = p @ np.ones(p.shape[1])
                spread[tile.rows] = (p * q) @ np.ones(p.shape[1])
            expected[rest], variance[rest] = more, spread
        return expected, variance

    def column_totals(self) -> tuple[Floats, Floats]:
        t = self._tracks
        rows, events = np.zeros(self.k), np.zeros(self.k)
        at_risk = totals(t.leave, self._weight, t.cells) - totals(t.enter, self._weight, t.cells)
        rows[self._on_loan] = self._a.T @ (self._weight * (t.leave - t.enter))
        rows[self._on_cell] = self._z.T @ np.where(t.boundary, 0.0, remaining(at_risk, t.starts))
        events += self._event_x.T @ self._weight[self._event_at]
        return rows, events


def _by_period(period: Ints, rows: Floats, size: int) -> Floats:
    """(size, k) sums of the rows (n, k) of each period."""
    return np.column_stack(
        [totals(period, rows[:, j], size) for j in range(rows.shape[1])] or [np.empty((size, 0))]
    )


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
