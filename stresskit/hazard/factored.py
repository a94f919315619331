"""Sums without rows: a static linear predictor is s_i + z_cell, and sums over a stay factor (METHOD 4).

cloglog: a survived row contributes -e^s e^z, so a stay costs two look-ups in the running sum of e^z along
its track; score and observed information follow from the same running sums. logit: odds e^s e^z as tiles
of stays by cells, no exponential per row. Event rows are few and added one by one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.sums import Evaluation, HazardData, ScoreProducts, Tally
from stresskit.hazard.tracks import Tracks, build_tracks, mixed_products
from stresskit.kernels.blocks import in_order, totals
from stresskit.kernels.cohorts import Ends, ends, log_of_products, remaining, running, tiles

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Stays per block; part of the result's definition, because sums are added per block.
BLOCK_STAYS = 1 << 14
#: Cells may be at most this share of the rows, else the design is cheaper row by row.
LARGEST_SHARE = 0.5


@dataclass(frozen=True, slots=True, eq=False)
class _Point:
    """Both sides of the linear predictor at a coefficient vector.

    s, z      (m,), (cells,), shifted so that s is centred: neither e^s nor e^z overflows alone
    exp_s     (m,) e^s
    exp_z     (cells,) e^z, 0 in boundary cells
    """

    s: Floats
    z: Floats
    exp_s: Floats
    exp_z: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _Part:
    """What one block adds; cell arrays cover the cells of the tracks that the block touches.

    llf, score (k,), information (k, k)   loan columns and event rows
    score_cell (size,)                    score of z in each cell
    cell (size,), cross (size, kl)        information of z in each cell, and of z and each loan column
    """

    first: int
    llf: float
    score: Floats
    information: Floats
    score_cell: Floats
    cell: Floats
    cross: Floats


def why_impossible(design: Design) -> str:
    """Why factored sums cannot carry the design; empty when they can."""
    moving = design.sources("moving")
    return f"it reads columns that move along a stay: {', '.join(moving)}" if moving else ""


def tracks_of(data: HazardData) -> Tracks:
    """Tracks whose groups are the loans that the mixed columns treat alike."""
    return build_tracks(data.rows, data.loans[:, mixed_products(data.design)])


def worthwhile(tracks: Tracks, rows: CauseRows) -> bool:
    """Cells (group, cohort, age) are few against rows, so sums over cells are the cheaper ones."""
    return tracks.cells <= LARGEST_SHARE * rows.n_rows


class FactoredSums:
    """Sums of a design without moving columns.

    Blocks hold a fixed number of stays in the order of :class:`Tracks`; block results are added in block
    order, so the bits depend neither on ``threads`` nor on the order of loans.
    """

    def __init__(self, data: HazardData, tracks: Tracks | None = None, *, threads: int = 1) -> None:
        design, rows = data.design, data.rows
        t = tracks_of(data) if tracks is None else tracks
        self._design, self._rows, self._link, self._threads, self._tracks = design, rows, data.link, threads, t
        on_cell = (design.index["age"] >= 0) | (design.index["feature"] >= 0) | (design.index["loan"] < 0)
        self._on_loan, self._on_cell = np.flatnonzero(~on_cell), np.flatnonzero(on_cell)
        self._loan, self._weight, self._event = rows.loan[t.order], rows.weight[t.order], rows.event[t.order]
        self._a = np.empty((self._loan.size, self._on_loan.size))
        for c, j in enumerate(self._on_loan):
            self._a[:, c] = data.loans[:, design.index["loan"][j]][self._loan]
        self._offset = data.offset[self._loan]
        self._z = _cell_columns(design, t, self._on_cell, data.periods)
        self._periods = rows.by_period()[0]
        self._cuts = np.append(np.arange(0, self._loan.size, BLOCK_STAYS), self._loan.size)
        self._ends = [self._block_ends(b) for b in range(self.blocks)] if data.link.log_hazard else []

    @property
    def k(self) -> int:
        return self._design.k

    @property
    def blocks(self) -> int:
        return self._cuts.size - 1

    # ---- pieces of a block

    def _stays(self, b: int) -> slice:
        return slice(int(self._cuts[b]), int(self._cuts[b + 1]))

    def _cells(self, b: int) -> slice:
        """Cells of the tracks that block b touches."""
        part, t = self._stays(b), self._tracks
        return slice(int(t.starts[t.stay_track[part.start]]), int(t.starts[t.stay_track[part.stop - 1] + 1]))

    def _block_ends(self, b: int) -> Ends:
        cells, part, t = self._cells(b), self._stays(b), self._tracks
        return ends(t.enter[part] - cells.start, t.survived[part] - cells.start, t.boundary[cells])

    def _point(self, params: Floats) -> _Point:
        s = self._a @ params[self._on_loan] + self._offset
        z = self._z @ params[self._on_cell]
        centre = float(s.mean())
        s, z = s - centre, z + centre
        return _Point(s, z, np.exp(s), np.where(self._tracks.boundary, 0.0, np.exp(z)))

    def _event_rows(self, part: slice) -> tuple[Ints, Floats]:
        """Stays of the block that end in an event, and the design of those rows (events, k)."""
        at = np.flatnonzero(self._event[part]) + part.start
        x = np.empty((at.size, self.k))
        x[:, self._on_loan] = self._a[at]
        x[:, self._on_cell] = self._z[self._tracks.leave[at]]
        return at, x

    def _event_terms(self, at: Ints, point: _Point) -> tuple[Floats, Floats, Floats]:
        """What event rows add to the sums over survived rows (log hazard) or over all rows (logit)."""
        eta = point.s[at] + point.z[self._tracks.leave[at]]
        if self._link.log_hazard:
            loglik, score, information = self._link.event(eta, "observed")
        else:
            loglik, score, information = eta, np.ones_like(eta), np.zeros_like(eta)
        weight = self._weight[at]
        return weight * loglik, weight * score, weight * information

    # ---- log-likelihood, score, information

    def evaluate(self, params: Floats) -> Evaluation:
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            point = self._point(params)
            if self._link.log_hazard:
                return self._join(self._along_tracks(point))
            return self._join(self._added(lambda b: self._tiled_part(b, point)))

    def expected_information(self, params: Floats) -> Floats:
        point = self._point(params)
        return self._join(self._added(lambda b: self._tiled_part(b, point))).information

    def _along_tracks(self, point: _Point) -> _Part:
        """All sums of a log hazard from running sums."""
        starts = self._tracks.starts
        c = running(point.exp_z, starts)
        added = self._added(lambda b: self._running_part(b, point, c))
        cell = point.exp_z * remaining(added.cell, starts)
        cross = point.exp_z[:, None] * remaining(added.cross, starts)
        return replace(added, score_cell=-cell, cell=cell, cross=cross)

    def _running_part(self, b: int, point: _Point, c: Floats) -> _Part:
        """Cell arrays hold what leaves less what enters; _along_tracks makes it what is at risk."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        mass = self._weight[part] * point.exp_s[part]
        hazard = mass * (c[t.survived[part]] - c[t.enter[part]])
        leaving, cross = self._ends[b].spread(mass, self._a[part])
        score, information = self._loan_side(part, -hazard, hazard)
        llf = -float(hazard.sum())
        out = _Part(cells.start, llf, score, information, np.zeros_like(leaving), leaving, cross)
        return self._with_events(part, point, out)

    def _tiled_part(self, b: int, point: _Point) -> _Part:
        """Sums over all rows by tiles: everything for the logit, expected information for a log hazard."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        n, size, weight = part.stop - part.start, cells.stop - cells.start, self._weight[part]
        weighted = self._a[part] * weight[:, None]
        exp_s, exp_z = point.exp_s[part], point.exp_z[cells]
        logit, small = not self._link.log_hazard, bool(exp_s.max() * exp_z.max() > 1e29)
        loglik, score, info = np.zeros(n), np.zeros(n), np.zeros(n)
        score_cell, cell, cross = np.zeros(size), np.zeros(size), np.zeros((size, self._on_loan.size))
        for tile in tiles(t.enter[part] - cells.start, t.leave[part] - cells.start, t.stay_track[part]):
            p, q, w = self._link.from_exp(tile.outer(exp_s, exp_z))
            if logit:
                loglik[tile.rows] = log_of_products(q, small=small)
                score[tile.rows] -= p @ np.ones(p.shape[1])
                score_cell[tile.cells] -= weight[tile.rows] @ p
            info[tile.rows] = w @ np.ones(w.shape[1])
            cell[tile.cells] += weight[tile.rows] @ w
            cross[tile.cells] += w.T @ weighted[tile.rows]
        loan_score, loan_info = self._loan_side(part, weight * score, weight * info)
        out = _Part(cells.start, float(weight @ loglik), loan_score, loan_info, score_cell, cell, cross)
        return self._with_events(part, point, out) if logit else out

    def _loan_side(self, part: slice, score: Floats, info: Floats) -> tuple[Floats, Floats]:
        """(score (k,), information (k, k)) of the loan columns from each stay's sums."""
        a, on = self._a[part], self._on_loan
        out, matrix = np.zeros(self.k), np.zeros((self.k, self.k))
        out[on] = a.T @ score
        root = a * np.sqrt(info)[:, None]
        matrix[np.ix_(on, on)] = root.T @ root
        return out, matrix

    def _with_events(self, part: slice, point: _Point, add: _Part) -> _Part:
        at, x = self._event_rows(part)
        loglik, score, info = self._event_terms(at, point)
        return replace(
            add,
            llf=add.llf + float(loglik.sum()),
            score=add.score + x.T @ score,
            information=add.information + x.T @ (x * info[:, None]),
        )

    def _added(self, work: Callable[[int], _Part]) -> _Part:
        """The parts of all blocks in block order; cell arrays over all cells."""
        total = _Part(
            0, 0.0, np.zeros(self.k), np.zeros((self.k, self.k)), np.zeros(self._tracks.cells),
            np.zeros(self._tracks.cells), np.zeros((self._tracks.cells, self._on_loan.size)),
        )  # fmt: skip
        llf = 0.0
        for part in in_order(work, self.blocks, self._threads):
            here = slice(part.first, part.first + part.cell.size)
            llf += part.llf
            total.score[:] += part.score
            total.information[:] += part.information
            total.score_cell[here] += part.score_cell
            total.cell[here] += part.cell
            total.cross[here] += part.cross
        return replace(total, llf=llf)

    def _join(self, total: _Part) -> Evaluation:
        """Adds the cell columns to score and information."""
        z, on_loan, on_cell = self._z, self._on_loan, self._on_cell
        score, information = total.score.copy(), total.information.copy()
        score[on_cell] += z.T @ total.score_cell
        information[np.ix_(on_cell, on_cell)] += z.T @ (z * total.cell[:, None])
        cross = total.cross.T @ z
        information[np.ix_(on_loan, on_cell)] += cross
        information[np.ix_(on_cell, on_loan)] += cross.T
        return Evaluation(total.llf, score, 0.5 * (information + information.T))

    # ---- clusters, expected events, totals

    def score_products(self, params: Floats) -> ScoreProducts:
        t, rows = self._tracks, self._rows
        point = self._point(params)
        c = running(np.column_stack([point.exp_z, point.exp_z[:, None] * self._z]), t.starts)
        single = (totals(rows.loan, np.ones(rows.loan.size), rows.n_loans) == 1)[self._loan]
        work = self._running_scores if self._link.log_hazard else self._tiled_scores
        products, several = np.zeros((self.k, self.k)), np.zeros((int((~single).sum()), self.k))
        cell, cross = np.zeros(t.cells), np.zeros((t.cells, self._on_loan.size))
        by_period, filled = np.zeros((self._periods.size, self.k)), 0

        def scores(b: int) -> tuple[Floats, ...]:
            stays, block_cell, block_cross = work(b, point, c)
            at, x = self._event_rows(self._stays(b))
            x *= self._event_terms(at, point)[1][:, None]
            stays[at - self._stays(b).start] += x
            alone = stays[single[self._stays(b)]]
            events = _by_period(t.period[t.leave[at]], x, self._periods.size)
            return alone.T @ alone, stays[~single[self._stays(b)]], block_cell, block_cross, events

        for b, part in enumerate(in_order(scores, self.blocks, self._threads)):
            alone, rest, block_cell, block_cross, events = part
            products += alone
            several[filled : filled + rest.shape[0]] = rest
            filled += rest.shape[0]
            cell[self._cells(b)] += block_cell
            cross[self._cells(b)] += block_cross
            by_period += events
        if self._link.log_hazard:
            cell = point.exp_z * remaining(cell, t.starts)
            cross = point.exp_z[:, None] * remaining(cross, t.starts)
        products += _of_clusters(self._loan[~single], several)
        inside = ~t.boundary
        by_period[:, self._on_cell] -= _by_period(t.period[inside], (self._z * cell[:, None])[inside], self._periods.size)
        by_period[:, self._on_loan] -= _by_period(t.period[inside], cross[inside], self._periods.size)
        return ScoreProducts(products, rows.n_loans, by_period.T @ by_period, int((self._periods > 0).sum()))

    def _running_scores(self, b: int, point: _Point, c: Floats) -> tuple[Floats, Floats, Floats]:
        """Scores of stays (n, k) without event rows; mass leaving less entering, alone and times loan columns.

        c  running sums of e^z and of e^z times the cell columns
        """
        part, t = self._stays(b), self._tracks
        mass = self._weight[part] * point.exp_s[part]
        sums = -mass[:, None] * (c[t.survived[part]] - c[t.enter[part]])
        out = np.empty((mass.size, self.k))
        out[:, self._on_cell] = sums[:, 1:]
        out[:, self._on_loan] = self._a[part] * sums[:, :1]
        return (out, *self._ends[b].spread(mass, self._a[part]))

    def _tiled_scores(self, b: int, point: _Point, c: Floats) -> tuple[Floats, Floats, Floats]:
        """The same by tiles, all rows counted as without event; c is not needed."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        size, weight = cells.stop - cells.start, self._weight[part]
        weighted, z, exp_z = self._a[part] * weight[:, None], self._z[cells], point.exp_z[cells]
        out = np.zeros((weight.size, self.k))
        cell, cross = np.zeros(size), np.zeros((size, self._on_loan.size))
        for tile in tiles(t.enter[part] - cells.start, t.leave[part] - cells.start, t.stay_track[part]):
            p, _, _ = self._link.from_exp(tile.outer(point.exp_s[part], exp_z))
            own = weight[tile.rows, None]
            out[tile.rows, self._on_cell] = -own * (p @ z[tile.cells])
            out[tile.rows, self._on_loan] = -weighted[tile.rows] * (p @ np.ones((p.shape[1], 1)))
            cell[tile.cells] += weight[tile.rows] @ p
            cross[tile.cells] += p.T @ weighted[tile.rows]
        return out, cell, cross

    def tally(self, params: Floats) -> Tally:
        point = self._point(params)
        t, size = self._tracks, self._tracks.cells

        def work(b: int) -> tuple[slice, Floats]:
            part, cells = self._stays(b), self._cells(b)
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

    def column_totals(self) -> tuple[Floats, Floats]:
        t = self._tracks
        rows, events = np.zeros(self.k), np.zeros(self.k)
        at_risk = totals(t.leave, self._weight, t.cells) - totals(t.enter, self._weight, t.cells)
        rows[self._on_loan] = self._a.T @ (self._weight * (t.leave - t.enter))
        rows[self._on_cell] = self._z.T @ np.where(t.boundary, 0.0, remaining(at_risk, t.starts))
        for b in range(self.blocks):
            at, x = self._event_rows(self._stays(b))
            events += x.T @ self._weight[at]
        return rows, events


def _cell_columns(design: Design, t: Tracks, on_cell: Ints, by_period: Floats) -> Floats:
    """(cells, kc) columns of the design that are the same for all loans of a track."""
    by_age = design.age_matrix(np.arange(int(t.age.max()) + 1).clip(min=1))
    period = np.where(t.boundary, 0, t.period)
    mixed = {p: j for j, p in enumerate(mixed_products(design))}
    out = np.ones((t.cells, on_cell.size))
    for c, j in enumerate(on_cell):
        if design.index["age"][j] >= 0:
            out[:, c] *= by_age[:, design.index["age"][j]][t.age]
        if design.index["feature"][j] >= 0:
            out[:, c] *= by_period[:, design.index["feature"][j]][period]
        if design.index["loan"][j] >= 0:
            out[:, c] *= t.group_values[:, mixed[int(design.index["loan"][j])]][t.group[t.track]]
    return out


def _by_period(period: Ints, rows: Floats, size: int) -> Floats:
    """(size, k) sums of the rows (n, k) of each period."""
    return np.column_stack([totals(period, rows[:, j], size) for j in range(rows.shape[1])] or [np.empty((size, 0))])


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
