"""Sums over rows whose linear predictor is s_i + z_cell + m_row: one exponential per row, few columns per row.

A column of the loan alone has one value per stay, so its share of score and information needs only the sums of
the row weights over the stay; a column of the cell alone needs their sums over the cell; the two together need
sums of weight times loan columns over the cell. Only columns that change from row to row (a moving loan column,
a numeric loan column times a macro feature) are met row by row. The cost of a row is an exponential, one
multiplication per loan column that is not 0, and a few per row column, instead of half the columns squared.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.design import Design
from stresskit.hazard.factored import FactoredSums
from stresskit.hazard.link import InformationKind
from stresskit.hazard.stay_sums import Block, Point
from stresskit.hazard.sums import PLAIN_ETA, Evaluation, HazardData
from stresskit.hazard.tracks import Tracks
from stresskit.kernels import stay_rows

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
        out: Floats = self.weight * stay_rows.per_stay(values, self.place)
        return out

    def per_cell(self, values: Floats, columns: Floats | None = None) -> Floats:
        """(q, cells) weighted sums over the rows in each cell, of the values times the stay's columns (n, q)."""
        by_stay = self.weight[:, None] if columns is None else self.weight[:, None] * columns
        out = np.zeros((by_stay.shape[1], self.block.cells.stop - self.block.base))
        stay_rows.per_cell(values, by_stay, self.enter, self.block.base, self.place, out)
        return out


class MovingSums(FactoredSums):
    """Sums of a design with columns that change from row to row.

    Event rows are rows like the others here.
    """

    def __init__(self, data: HazardData, tracks: Tracks, *, on_row: Flags, threads: int = 1) -> None:
        self._lengths = tracks.leave - tracks.enter
        super().__init__(data, tracks, threads=threads, on_row=on_row)
        design, t = data.design, tracks
        self._first_row = data.rows.first_row[t.order]
        self._row_place = np.concatenate(([0], np.cumsum(self._lengths)))
        self._loan_factors, self._period_factors = data.loans, data.periods
        self._age_factors = design.age_matrix(np.arange(int(t.age.max()) + 1).clip(min=1))
        self._kept: tuple[Floats, Floats] | None = None
        self._reads_moving = bool(design.products["moving"]) or design.has_offset("moving")
        width = len(design.products["moving"]) + design.has_offset("moving")
        if self._reads_moving and width * self._rows.n_rows <= KEPT_VALUES:
            self._kept = self._all_moving()

    def _block_cuts(self) -> Ints:
        rows = np.cumsum(self._lengths)
        inner = np.searchsorted(rows, np.arange(BLOCK_ROWS, int(rows[-1]), BLOCK_ROWS))
        return np.unique(np.concatenate(([0], inner, [rows.size]))).astype(np.int64)

    def _event_rows(self) -> tuple[Ints, Floats]:
        return np.empty(0, dtype=np.int64), np.empty((0, self.k))

    # ---- columns of rows

    def _all_moving(self) -> tuple[Floats, Floats]:
        """(products, rows) and offset (rows,) of all rows in the order of the tracks."""
        design, size = self._design, self._rows.n_rows
        products = np.empty((len(design.products["moving"]), size))
        offset = np.empty(size if design.has_offset("moving") else 0)
        for b in range(self.blocks):
            here = slice(int(self._row_place[self._cuts[b]]), int(self._row_place[self._cuts[b + 1]]))
            values, add = self._moving(slice(int(self._cuts[b]), int(self._cuts[b + 1])))
            products[:, here] = values
            if offset.size:
                offset[here] = add
        return products, offset

    def _moving(self, part: slice) -> tuple[Floats, Floats]:
        """(products, rows) and offset (rows,) of the rows of some stays from the columns of the risk set."""
        design, rows, length = self._design, self._rows, self._lengths[part]
        place = np.cumsum(length) - length
        at = np.repeat(self._first_row[part] - place, length) + np.arange(int(length.sum()))
        columns = {name: rows.moving[name][at] for name in design.sources("moving")}
        ids = rows.loan_ids[np.repeat(self._loan[part], length)]
        offset = design.offset("moving", columns, at.size) if design.has_offset("moving") else np.empty(0)
        return design.matrix("moving", columns, at.size, ids).T, offset

    def _rows_of(self, b: int) -> tuple[_Rows, Floats]:
        """The rows of block b, and their offset that moves (0 rows when there is none)."""
        block, t, design = self._block(b), self._tracks, self._design
        part, enter = block.part, t.enter[block.part]
        out = _Rows(block, enter, stay_rows.places(enter, t.leave[part]), self._weight[part])
        moving, offset = np.empty((0, 0)), np.empty(0)
        if self._kept is not None:
            here = slice(int(self._row_place[part.start]), int(self._row_place[part.stop]))
            moving, offset = self._kept[0][:, here], self._kept[1][here]
        elif self._reads_moving:
            moving, offset = self._moving(part)
        period = np.where(t.boundary[block.cells], 0, t.period[block.cells])
        for j in self._on_row:
            of = {side: int(at[j]) for side, at in design.index.items()}
            cell = np.ones(period.size)
            if of["age"] >= 0:
                cell *= self._age_factors[t.age[block.cells], of["age"]]
            if of["feature"] >= 0:
                cell *= self._period_factors[period, of["feature"]]
            plain = of["moving"] >= 0 and of["age"] < 0 and of["feature"] < 0 and of["loan"] < 0
            if plain:
                out.x.append(np.ascontiguousarray(moving[of["moving"]]))
                continue
            loan = np.ones(enter.size)
            if of["loan"] >= 0:
                loan = self._loan_factors[self._loan[part], of["loan"]]
            x = stay_rows.products(loan, cell, enter, block.base, out.place)
            if of["moving"] >= 0:
                x *= moving[of["moving"]]
            out.x.append(x)
        return out, offset

    def _predictor(self, b: int, at: Point) -> tuple[_Rows, Floats]:
        rows, offset = self._rows_of(b)
        block = rows.block
        eta = stay_rows.added(
            self._s(block.part, at), self._z_of(block.cells, at), rows.enter, block.base, rows.place
        )
        for x, coefficient in zip(rows.x, at.params[self._on_row], strict=True):
            eta += coefficient * x
        if offset.size:
            eta += offset
        return rows, eta

    def _terms(self, rows: _Rows, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        """(log-likelihood, score, information) of every row."""
        if self._link.log_hazard or not float(eta.max(initial=0.0)) <= PLAIN_ETA:
            loglik, score, information = self._link.survive(eta, kind)
        else:
            p, q, information = self._link.from_exp(np.exp(eta))
            loglik, score = np.log(q), -p
        at = rows.place[1:][self._event[rows.block.part]] - 1
        if at.size:
            loglik[at], score[at], information[at] = self._link.event(eta[at], kind)
        return loglik, score, information

    # ---- sums

    def _hazard_part(self, b: int, at: Point) -> Evaluation:
        return self._row_part(b, at, "observed")

    def _power_part(self, b: int, at: Point) -> Evaluation:
        return self._row_part(b, at, "expected")

    def _row_part(self, b: int, at: Point, kind: InformationKind) -> Evaluation:
        rows, eta = self._predictor(b, at)
        loglik, score, info = self._terms(rows, eta, kind)
        one_a = self._one_a[rows.block.part]
        out = self._placed(
            rows.block, float(rows.per_stay(loglik).sum()), rows.per_stay(score) @ one_a,
            one_a.T @ (one_a * rows.per_stay(info)[:, None]), rows.per_cell(score)[0], rows.per_cell(info, one_a).T,
        )  # fmt: skip
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
        return out

    def _scores_of(self, b: int, at: Point) -> tuple[Floats, Floats]:
        rows, eta = self._predictor(b, at)
        _, score, _ = self._terms(rows, eta, "observed")
        block, kl, kc = rows.block, self._on_loan.size, self._on_cell.size
        z, one_a = self._z[block.cells], self._one_a[block.part]
        stays = np.empty((rows.enter.size, self.k))
        stays[:, :kl] = one_a[:, 1:] * rows.per_stay(score)[:, None]
        stays[:, kl : kl + kc] = stay_rows.cell_columns(score, z, rows.enter, block.base, rows.place)
        stays[:, kl : kl + kc] *= rows.weight[:, None]
        cross = rows.per_cell(score, one_a)
        by_cell = np.empty((z.shape[0], self.k))
        by_cell[:, :kl] = cross[1:].T
        np.multiply(z, cross[0][:, None], out=by_cell[:, kl : kl + kc])
        for r, x in enumerate(rows.x, start=kl + kc):
            stays[:, r], by_cell[:, r] = rows.per_stay(score * x), rows.per_cell(score * x)[0]
        return stays, self._by_period(block, by_cell)

    def _cells_part(self, b: int, at: Point) -> tuple[slice, Floats]:
        rows, eta = self._predictor(b, at)
        return rows.block.cells, rows.per_cell(self._link.probability(eta))[0]

    def _expected_part(self, b: int, at: Point) -> Floats:
        rows, eta = self._predictor(b, at)
        p = self._link.probability(eta)
        return np.stack([stay_rows.per_stay(v, rows.place) for v in (p, p * (1.0 - p))])

    def column_totals(self) -> tuple[Floats, Floats]:
        at_risk, events = np.zeros(self.k), np.zeros(self.k)
        for b in range(self.blocks):
            rows, _ = self._rows_of(b)
            part, z = rows.block.part, self._z[rows.block.cells]
            weight, event = rows.weight * self._lengths[part], rows.weight * self._event[part]
            last = rows.place[1:] - 1
            cell = np.zeros((1, z.shape[0]))
            stay_rows.per_cell(
                np.ones(rows.place[-1]), rows.weight[:, None], rows.enter, rows.block.base, rows.place, cell
            )
            at_risk[self._on_loan] += weight @ self._a[part]
            at_risk[self._on_cell] += cell[0] @ z
            events[self._on_loan] += event @ self._a[part]
            events[self._on_cell] += event @ self._z[self._tracks.leave[part]]
            for j, x in zip(self._on_row, rows.x, strict=True):
                at_risk[j] += float(rows.per_stay(x).sum())
                events[j] += float(event @ x[last])
        return at_risk, events
