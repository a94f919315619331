"""Everything that a fit asks of sums without rows: :class:`StaySums` with clusters, expected events and totals."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.stay_products import StayProducts
from stresskit.hazard.stay_sums import Known, Point
from stresskit.hazard.sums import ScoreProducts, Tally
from stresskit.hazard.tracks import Tracks
from stresskit.kernels import cohorts, hazard_scores, score_pass
from stresskit.kernels.blocks import in_order, totals
from stresskit.kernels.vectors import whole

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
    """Scores at a point; columns as in :attr:`FactoredSums._in_order`.

    products (k, k)    sum of outer products over the stays of loans with one stay
    apart (r, k)       scores of the other stays
    by_period (p, k)   sums over calendar periods
    """

    products: Floats
    apart: Floats
    by_period: Floats


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
        """What covariances and gates ask for after the last evaluation."""
        assert self._known is not None
        apart = np.flatnonzero(~self._single())
        information, scores = self._ending(at, apart)
        products = scores.products + _of_clusters(self._loan[apart], scores.apart)
        place = np.argsort(self._in_order)
        by_period = np.ascontiguousarray(scores.by_period[:, place])
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

    def _ending(self, at: Point, apart: Ints) -> tuple[Floats, Scores]:
        """(k, k) expected information of a log hazard, for which the point's ``stays`` are written, and the scores."""
        information = np.zeros((self.k, self.k))
        if self._link.log_hazard:
            information = self._put(self._passed(at, range(self.blocks), observed=False)).information
        return information, self._scores(at, apart)

    def _scores(self, at: Point, apart: Ints) -> Scores:
        columns, kc, periods = self._columns, self._on_cell.size, self._periods.size
        w, size, v = columns.dense.shape[1], columns.size, whole(kc)
        place = np.full(self._loan.size, -1)
        place[apart] = np.arange(apart.size)
        loan, cell = np.empty(apart.size), np.empty(apart.size * v)
        z, powers = self._exp_z(at)[0], self._powers.for_scores()
        period = np.where(self._tracks.boundary, 0, self._tracks.period)

        def work(ids: Ints) -> Floats:
            some, apart = (ids, self._stays, self._table, (size, v, periods)), (place, loan, cell)
            if self._link.log_hazard:
                return hazard_scores.hazard_scores(*some, z, at.exp_s, at.event, period, *apart)
            return score_pass.score_pass(*some, powers, z, at.exp_s, at.event, period, *apart)

        total = self._over_blocks(work, range(self.blocks), score_pass.score_width(w, size, v, periods))
        products, by_period = self._products_of(total)
        several = np.empty((apart.size, self.k))
        if apart.size:
            kl = self._on_loan.size
            np.multiply(columns.wide(apart)[:, 1:], loan[:, None], out=several[:, :kl])
            several[:, kl:] = cell.reshape((apart.size, v))[:, :kc]
        return Scores(products, several, by_period)

    def _products_of(self, sums: Floats) -> tuple[Floats, Floats]:
        """(k, k) products and (periods, k) scores by period from the sums of :mod:`stresskit.kernels.score_pass`."""
        columns, kl, kc, d = self._columns, self._on_loan.size, self._on_cell.size, self._columns.used - 1
        w, size, v = columns.dense.shape[1], columns.size, whole(kc)
        wide, out = w + v, np.zeros((self.k, self.k))
        square, across, among, by_period = np.split(sums, np.cumsum([wide * wide, size * wide, size * size]))
        used = np.concatenate([np.arange(1, 1 + d), w + np.arange(kc)])
        at = np.concatenate([np.arange(d), np.arange(kl, self.k)])
        lower = np.tril(square.reshape((wide, wide))[used[:, None], used])
        out[at[:, None], at] = lower + np.tril(lower, -1).T
        levels, place = np.arange(d, kl), columns.place[d:]
        of_levels = across.reshape((size, wide))[place[:, None], used]
        out[levels[:, None], at] = of_levels
        out[at[:, None], levels] = of_levels.T
        out[levels[:, None], levels] = among.reshape((size, size))[place[:, None], place]
        both = by_period.reshape((-1, size + v))
        return out, both[:, np.concatenate([columns.place, size + np.arange(kc)])]

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
