"""Sums over rows whose linear predictor is s_i + z_cell + m_row: one exponential per row, few columns per row.

A column of the loan alone has one value per stay, so its share of score and information needs only the sums of
the row weights over the stay; a column of the cell alone needs their sums over the cell; the two together need
sums of weight times loan columns over the cell. Only columns that change from row to row (a moving loan column,
a numeric loan column times a macro feature) are met row by row. The cost of a row is an exponential, one
multiplication per loan column that is not 0, and a few per row column, instead of half the columns squared.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.design import Design
from stresskit.hazard.factored import FactoredSums, Scores
from stresskit.hazard.link import InformationKind
from stresskit.hazard.stay_sums import Block, Point, Sides
from stresskit.hazard.sums import PLAIN_ETA, Evaluation, HazardData
from stresskit.hazard.terms import Side
from stresskit.hazard.tracks import Tracks, feature_rows_of
from stresskit.kernels import cohorts, row_values
from stresskit.kernels.blocks import in_order, totals

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

#: Rows per block, about; part of the result's definition, because sums are added per block.
BLOCK_ROWS = 1 << 15
#: Values of moving columns kept in the order of the tracks; beyond that they are made anew in every evaluation.
KEPT_VALUES = 1 << 25
#: With more row columns than this the plain row blocks are the cheaper way.
MOST_ROW_COLUMNS = 24


def row_columns(design: Design, *, grouped: bool) -> Flags:
    """(k,) columns that change from row to row; ``grouped``: tracks know loans times cells."""
    index = design.index
    mixed = (index["loan"] >= 0) & ((index["age"] >= 0) | (index["feature"] >= 0))
    return np.asarray((index["moving"] >= 0) | (mixed & (not grouped)))


class _Rows:
    """Rows of one block: where those of each stay begin, and the row columns x[r] (rows,)."""

    __slots__ = ("block", "enter", "place", "weight", "x")

    def __init__(self, block: Block, enter: Ints, place: Ints, weight: Floats) -> None:
        self.block, self.enter, self.place, self.weight = block, enter, place, weight
        self.x: list[Floats] = []

    def per_stay(self, values: Floats) -> Floats:
        """(n,) weighted sums over the rows of each stay."""
        out: Floats = self.weight * row_values.per_stay(values, self.place)
        return out

    def per_cell(self, values: Floats, columns: Floats | None = None) -> Floats:
        """(q, cells) weighted sums over the rows in each cell, of the values times the stay's columns (n, q)."""
        by_stay = self.weight[:, None] if columns is None else self.weight[:, None] * columns
        out = np.zeros((by_stay.shape[1], self.block.cells.stop - self.block.base))
        row_values.per_cell(values, by_stay, self.enter, self.block.base, self.place, out)
        return out


class MovingSums(FactoredSums):
    """Sums of a design with columns that change from row to row.

    As in :class:`StaySums`, event rows are added one by one, and the rows of blocks are those without event for
    a log hazard, all for the logit.
    """

    def __init__(self, data: HazardData, tracks: Tracks, *, on_row: Flags, threads: int = 1) -> None:
        design, t = data.design, tracks
        self._lengths = t.last - t.enter
        self._row_place = np.concatenate(([0], np.cumsum(self._lengths)))
        self._first_row = data.rows.first_row[t.order]
        self._loan_factors, self._period_factors = data.loans, data.periods
        self._age_factors = design.age_matrix(np.arange(int(t.age.max()) + 1).clip(min=1))
        self._feature_rows = feature_rows_of(data, t)
        self._reads_moving = bool(design.products["moving"]) or design.has_offset("moving")
        self._kept: tuple[Floats, Floats] | None = None
        super().__init__(data, tracks, threads=threads, on_row=on_row)
        self._event_x, self._event_offset = self._event_rows()
        width = len(design.products["moving"]) + design.has_offset("moving")
        if self._reads_moving and width * self._row_place[-1] <= KEPT_VALUES:
            self._kept = self._all_moving()

    def _block_cuts(self) -> Ints:
        rows = self._row_place
        inner = np.searchsorted(rows, np.arange(0, max(1, int(rows[-1])), BLOCK_ROWS))
        return np.unique(np.concatenate((inner, [rows.size - 1]))).astype(np.int64)

    def _event_rows(self) -> tuple[Floats, Floats]:
        """The design of the rows with an event (events, k), and their offset."""
        at, t, design = self._event_at, self._tracks, self._design
        x, offset = np.empty((at.size, self.k)), self._offset[at]
        x[:, self._on_loan] = self._columns.wide(at)[:, 1:]
        x[:, self._on_cell] = self._z[self._event_cell]
        moving, add = self._moving(self._first_row[at] + t.leave[at] - t.enter[at] - 1, self._loan[at])
        loans, cells = self._loan[at], t.leave[at]
        for j in self._on_row:
            of = {side: int(index[j]) for side, index in design.index.items()}
            x[:, j] = self._cell_factor(cells, of)
            if of["loan"] >= 0:
                x[:, j] *= self._loan_factors[loans, of["loan"]]
            if of["moving"] >= 0:
                x[:, j] *= moving[of["moving"]]
        return x, offset + add if add.size else offset

    # ---- columns of rows

    def _all_moving(self) -> tuple[Floats, Floats]:
        """(products, rows) and offset (rows,) of all rows in the order of the tracks."""
        design, size = self._design, int(self._row_place[-1])
        products = np.empty((len(design.products["moving"]), size))
        offset = np.empty(size if design.has_offset("moving") else 0)
        for b in range(self.blocks):
            part = slice(int(self._cuts[b]), int(self._cuts[b + 1]))
            here = self._rows_here(part)
            products[:, here], add = self._moving_of(part)
            if offset.size:
                offset[here] = add
        return products, offset

    def _rows_here(self, part: slice) -> slice:
        return slice(int(self._row_place[part.start]), int(self._row_place[part.stop]))

    def _moving_of(self, part: slice) -> tuple[Floats, Floats]:
        length = self._lengths[part]
        place = np.cumsum(length) - length
        at = np.repeat(self._first_row[part] - place, length) + np.arange(int(length.sum()))
        return self._moving(at, np.repeat(self._loan[part], length))

    def _moving(self, at: Ints, loan: Ints) -> tuple[Floats, Floats]:
        """(products, rows) and offset (rows,) of rows ``at`` of the risk set's moving columns; no rows without offset."""
        design, rows = self._design, self._rows
        columns = {name: rows.moving[name][at] for name in design.sources("moving")}
        offset = design.offset("moving", columns, at.size) if design.has_offset("moving") else np.empty(0)
        return design.matrix("moving", columns, at.size, rows.loan_ids[loan]).T, offset

    def _cell_factor(self, cells: slice | Ints, of: dict[Side, int]) -> Floats:
        """What age and features give to a row column with the products ``of`` (side -> product, -1 for none)."""
        t = self._tracks
        out = np.ones(t.age[cells].size)
        if of["age"] >= 0:
            out *= self._age_factors[t.age[cells], of["age"]]
        if of["feature"] >= 0:
            out *= self._period_factors[self._feature_rows[cells], of["feature"]]
        return out

    def _rows_of(self, b: int) -> tuple[_Rows, Floats]:
        """The rows of block b, and their offset that moves (no rows when there is none)."""
        block, design = self._block(b), self._design
        part, enter = block.part, self._tracks.enter[block.part]
        out = _Rows(block, enter, row_values.places(enter, self._last[part]), self._weight[part])
        moving, offset = np.empty((0, 0)), np.empty(0)
        if self._kept is not None:
            here = self._rows_here(part)
            moving, offset = self._kept[0][:, here], self._kept[1][here]
        elif self._reads_moving:
            moving, offset = self._moving_of(part)
        for j in self._on_row:
            of = {side: int(index[j]) for side, index in design.index.items()}
            if of["age"] < 0 and of["feature"] < 0 and of["loan"] < 0:
                out.x.append(np.ascontiguousarray(moving[of["moving"]]))
                continue
            loan = np.ones(enter.size)
            if of["loan"] >= 0:
                loan = self._loan_factors[self._loan[part], of["loan"]]
            x = row_values.products(loan, self._cell_factor(block.cells, of), enter, block.base, out.place)
            if of["moving"] >= 0:
                x *= moving[of["moving"]]
            out.x.append(x)
        return out, offset

    def _predictor(self, b: int, at: Point) -> tuple[_Rows, Floats]:
        rows, offset = self._rows_of(b)
        block = rows.block
        eta = row_values.added(
            self._s(block.part, at, at.exp_s[block.part]),
            self._z_of(block.cells, at),
            rows.enter,
            block.base,
            rows.place,
        )
        for x, coefficient in zip(rows.x, at.params[self._on_row], strict=True):
            eta += coefficient * x
        if offset.size:
            eta += offset
        return rows, eta

    def _terms(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        """(log-likelihood, score, information) of rows without event."""
        if self._link.log_hazard or not float(eta.max(initial=0.0)) <= PLAIN_ETA:
            return self._link.survive(eta, kind)
        p, q, information = self._link.from_exp(np.exp(eta, out=eta))
        return np.log(q), np.negative(p, out=p), information

    # ---- sums

    def _parts(self, at: Point, blocks: range) -> Iterator[Evaluation]:
        return in_order(lambda i: self._part(blocks[i], at), len(blocks), self._threads)

    def _part(self, b: int, at: Point) -> Evaluation:
        rows, eta = self._predictor(b, at)
        return self._row_part(rows, eta, at, "observed")

    def _row_part(self, rows: _Rows, eta: Floats, at: Point, kind: InformationKind) -> Evaluation:
        """Sums over the rows of a block and its events; ``eta`` may be overwritten."""
        loglik, score, info = self._terms(eta, kind)
        one_a = self._columns.wide(rows.block.part)
        sides = Sides(
            float(rows.per_stay(loglik).sum()), rows.per_stay(score) @ one_a,
            one_a.T @ (one_a * rows.per_stay(info)[:, None]), rows.per_cell(score)[0], rows.per_cell(info, one_a).T,
            1 + np.arange(self._on_loan.size),
        )  # fmt: skip
        out = self._placed(rows.block, sides)
        matrix, on_row = out.information, self._on_row
        for r, j in enumerate(on_row):
            out.score[j] = rows.per_stay(score * rows.x[r]).sum()
            v = info * rows.x[r]
            matrix[j, self._on_loan] = rows.per_stay(v) @ one_a[:, 1:]
            matrix[j, self._on_cell] = rows.per_cell(v)[0] @ self._z[rows.block.cells]
            for q in range(r + 1):
                matrix[j, on_row[q]] = matrix[on_row[q], j] = rows.per_stay(v * rows.x[q]).sum()
            matrix[self._on_loan, j] = matrix[j, self._on_loan]
            matrix[self._on_cell, j] = matrix[j, self._on_cell]
        return self._and_events(rows.block, at, kind, out)

    def _and_events(self, block: Block, at: Point, kind: InformationKind, to: Evaluation) -> Evaluation:
        x = self._event_x[block.events]
        at.event[block.events] = x @ at.params + self._event_offset[block.events]
        loglik, score, information = self._event_terms(block, at, kind)
        return Evaluation(
            to.llf + float(loglik.sum()),
            to.score + x.T @ score,
            to.information + x.T @ (x * information[:, None]),
        )

    def _ending(self, at: Point, apart: Ints) -> tuple[Floats, Scores]:
        single = np.ones(self._loan.size, dtype=bool)
        single[apart] = False
        expected, products = np.zeros((self.k, self.k)), np.zeros((self.k, self.k))
        by_period, several = np.zeros((self._periods.size, self.k)), [np.empty((0, self.k))]
        for information, scores in in_order(
            lambda b: self._last_part(b, at, single), self.blocks, self._threads
        ):
            expected += information
            products += scores.products
            by_period += scores.by_period
            several.append(scores.apart)
        return expected, Scores(products, np.concatenate(several), by_period)

    def _last_part(self, b: int, at: Point, single: Flags) -> tuple[Floats, Scores]:
        rows, eta = self._predictor(b, at)
        expected = np.zeros((self.k, self.k))
        if self._link.log_hazard:
            expected = self._row_part(rows, eta.copy(), at, "expected").information
        _, score, _ = self._terms(eta, "observed")
        block, kl, kc, t = rows.block, self._on_loan.size, self._on_cell.size, self._tracks
        z, one_a = self._z[block.cells], self._columns.wide(block.part)
        stays = np.empty((rows.enter.size, self.k))
        stays[:, :kl] = one_a[:, 1:] * rows.per_stay(score)[:, None]
        stays[:, kl : kl + kc] = row_values.cell_columns(score, z, rows.enter, block.base, rows.place)
        stays[:, kl : kl + kc] *= rows.weight[:, None]
        cross = rows.per_cell(score, one_a)
        by_cell = np.empty((z.shape[0], self.k))
        by_cell[:, :kl] = cross[1:].T
        np.multiply(z, cross[0][:, None], out=by_cell[:, kl : kl + kc])
        for r, x in enumerate(rows.x, start=kl + kc):
            stays[:, r], by_cell[:, r] = rows.per_stay(score * x), rows.per_cell(score * x)[0]
        x = self._event_x[block.events][:, self._in_order]
        x *= self._event_terms(block, at)[1][:, None]
        stays[self._events_in(block)[0]] += x
        inner, size = ~t.boundary[block.cells], self._periods.size
        by_period = cohorts.by_label(t.period[block.cells][inner], by_cell[inner], size)
        by_period += cohorts.by_label(t.period[self._event_cell[block.events]], x, size)
        mine = single[block.part]
        alone = stays if mine.all() else stays[mine]
        return expected, Scores(alone.T @ alone, stays[~mine], by_period)

    def _apart(self, block: Block, at: Point) -> tuple[Ints, Ints, Floats]:
        """(stays, cells, P) of the event rows that are not among the block's rows."""
        stay, cell = self._events_in(block)
        if not self._link.log_hazard:
            return stay[:0], cell[:0], np.empty(0)
        eta = self._event_x[block.events] @ at.params + self._event_offset[block.events]
        return stay, cell, self._link.probability(eta)

    def _cells_part(self, b: int, at: Point) -> tuple[slice, Floats]:
        rows, eta = self._predictor(b, at)
        block = rows.block
        out = rows.per_cell(self._link.probability(eta))[0]
        stay, cell, p = self._apart(block, at)
        return block.cells, out + totals(cell, rows.weight[stay] * p, out.size)

    def _of_stays(self, params: Floats) -> tuple[Floats, Floats]:
        at = self._point(params)
        parts = list(in_order(lambda b: self._of_stays_part(b, at), self.blocks, self._threads))
        expected, variance = np.concatenate(parts, axis=1)
        return expected, variance

    def _of_stays_part(self, b: int, at: Point) -> Floats:
        rows, eta = self._predictor(b, at)
        p = self._link.probability(eta)
        out = np.stack([row_values.per_stay(v, rows.place) for v in (p, p * (1.0 - p))])
        event, _, p = self._apart(rows.block, at)
        out[:, event] += np.stack([p, p * (1.0 - p)])
        return out

    def column_totals(self) -> tuple[Floats, Floats]:
        at_risk = np.zeros(self.k)
        for b in range(self.blocks):
            rows, _ = self._rows_of(b)
            part = rows.block.part
            at_risk[self._on_loan] += self._columns.totals(part, rows.weight * self._lengths[part])
            at_risk[self._on_cell] += rows.per_cell(np.ones(rows.place[-1]))[0] @ self._z[rows.block.cells]
            at_risk[self._on_row] += [float(rows.per_stay(x).sum()) for x in rows.x]
        events: Floats = self._weight[self._event_at] @ self._event_x
        return at_risk + events if self._link.log_hazard else at_risk, events
