"""Sums without rows: a static linear predictor is s_i + z_cell, and sums over a stay factor (METHOD 4).

cloglog: a survived row contributes -e^s e^z, so a stay costs two look-ups in the running sum of e^z along
its track; score and observed information follow from the same running sums. logit, and the expected
information of cloglog: stays whose e^eta stays small by running sums of its powers (:mod:`.powers`), the
others as tiles of stays by cells, no exponential per row. Event rows are few and added one by one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.link import InformationKind
from stresskit.hazard.powers import (
    LIMIT,
    CellPowers,
    PowerTables,
    link_powers,
    power_tables,
    powers_of,
)
from stresskit.hazard.sums import BlockSums, Evaluation, HazardData
from stresskit.hazard.tracks import Tracks, feature_rows_of, mixed_products, tracks_of
from stresskit.kernels.blocks import in_order, stay_rows, totals
from stresskit.kernels.cohorts import Ends, ends, log_of_products, remaining, running, tiles

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Stays per block; part of the result's definition, because sums are added per block.
BLOCK_STAYS = 1 << 14
#: Stays beyond the reach of powers go by tiles when they have more rows than this for each track they lie on.
ROWS_A_TRACK = 1000


@dataclass(frozen=True, slots=True, eq=False)
class Point:
    """Both sides of the linear predictor at a coefficient vector.

    s, z      (m,), (cells,), shifted so that s is centred: neither e^s nor e^z overflows alone
    exp_s     (m,) e^s
    exp_z     (cells,) e^z, 0 in boundary cells
    loan      (1 + kl,) coefficients of the ones and the loan columns

    s and exp_s are filled block by block (:meth:`StaySums._filled`), by the thread that reads them next.
    """

    s: Floats
    z: Floats
    exp_s: Floats
    exp_z: Floats
    loan: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Part:
    """What one block adds; cell arrays cover the cells of the tracks that the block touches.

    llf, score (k,), information (k, k)   loan columns and event rows
    score_cell (size,)                    score of z in each cell
    cell (size,), cross (size, kl)        information of z in each cell, and of z and each loan column
    powers                                what stays carried by powers add to cells; None without
    """

    first: int
    llf: float
    score: Floats
    information: Floats
    score_cell: Floats
    cell: Floats
    cross: Floats
    powers: CellPowers | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Known:
    """The last evaluation, kept because covariances ask for more at the same coefficients."""

    params: Floats
    point: Point
    total: Part
    found: Evaluation


class StaySums(BlockSums):
    """Sums of a design without moving columns.

    Blocks hold a fixed number of stays in the order of :class:`Tracks`; block results are added in block
    order, so the bits depend neither on ``threads`` nor on the order of loans.
    """

    def __init__(self, data: HazardData, tracks: Tracks | None = None, *, threads: int = 1) -> None:
        design, rows = data.design, data.rows
        t = tracks_of(data) if tracks is None else tracks
        self._design, self._rows, self._link, self._threads, self._tracks = (
            design,
            rows,
            data.link,
            threads,
            t,
        )
        on_cell = (design.index["age"] >= 0) | (design.index["feature"] >= 0) | (design.index["loan"] < 0)
        self._on_loan, self._on_cell = np.flatnonzero(~on_cell), np.flatnonzero(on_cell)
        self._loan, self._weight, self._event = rows.loan[t.order], rows.weight[t.order], rows.event[t.order]
        self._offset = data.offset[self._loan]
        self._z = _cell_columns(data, t, self._on_cell)
        self._periods = rows.by_period()[0]
        self._cuts = np.append(np.arange(0, self._loan.size, BLOCK_STAYS), self._loan.size)
        self._one_a = self._loan_columns(data.loans)
        # Rows without event: the sums over them follow a pattern, event rows are added one by one. The log
        # odds of the logit are the same in both, so there all rows follow the pattern.
        self._last = t.survived if data.link.log_hazard else t.leave
        self._ends = [self._block_ends(b) for b in range(self.blocks)]
        self._late = [self._late_stays(self._stays(b)) for b in range(self.blocks)]
        self._event_at, self._event_x = self._event_rows()
        self._means, self._mean_offset = self._one_a.mean(axis=0), float(self._offset.mean())
        self._powers = link_powers(data.link.name)
        self._known: Known | None = None

    def _loan_columns(self, loans: Floats) -> Floats:
        """(m, 1 + kl) ones and the loan columns of every stay."""
        columns = [np.ascontiguousarray(loans[:, p]) for p in self._design.index["loan"][self._on_loan]]
        out = np.empty((self._loan.size, 1 + len(columns)))
        across = np.ones((1 + len(columns), BLOCK_STAYS))
        for b in range(self.blocks):
            part = self._stays(b)
            for c, column in enumerate(columns, start=1):
                np.take(column, self._loan[part], out=across[c, : part.stop - part.start], mode="clip")
            out[part] = across[:, : part.stop - part.start].T
        return out

    @property
    def _a(self) -> Floats:
        """(m, kl) loan columns of every stay."""
        return self._one_a[:, 1:]

    # ---- pieces of a block

    def _stays(self, b: int) -> slice:
        return slice(int(self._cuts[b]), int(self._cuts[b + 1]))

    def _cells(self, b: int) -> slice:
        """Cells of the tracks that block b touches."""
        part, t = self._stays(b), self._tracks
        return slice(int(t.starts[t.stay_track[part.start]]), int(t.starts[t.stay_track[part.stop - 1] + 1]))

    def _block_ends(self, b: int) -> Ends:
        cells, part, t = self._cells(b), self._stays(b), self._tracks
        return ends(t.enter[part] - cells.start, self._last[part] - cells.start, t.boundary[cells])

    def _late_stays(self, part: slice) -> Ints:
        """Stays of the block that enter after the first age of their track; the others start from sums that are 0."""
        return np.flatnonzero(~self._tracks.boundary[self._tracks.enter[part]])

    def _point(self, params: Floats) -> Point:
        loan = np.concatenate(([0.0], params[self._on_loan]))
        centre = float(self._means @ loan) + self._mean_offset
        loan[0] = -centre
        z = self._z @ params[self._on_cell]
        z += centre
        s, exp_s = np.empty(self._loan.size), np.empty(self._loan.size)
        return Point(s, z, exp_s, np.where(self._tracks.boundary, 0.0, np.exp(z)), loan)

    def _filled(self, part: slice, point: Point) -> Floats:
        """exp_s of the block, after s and exp_s were written into the point."""
        s = np.matmul(self._one_a[part], point.loan, out=point.s[part])
        s += self._offset[part]
        return np.exp(s, out=point.exp_s[part])

    def _event_rows(self) -> tuple[Ints, Floats]:
        """Stays that end in an event, and the design of those rows (events, k)."""
        at = np.flatnonzero(self._event)
        x = np.empty((at.size, self.k))
        x[:, self._on_loan] = self._a[at]
        x[:, self._on_cell] = self._z[self._tracks.leave[at]]
        return at, x

    def _events_of(self, part: slice) -> slice:
        """The event rows of a block."""
        a, b = np.searchsorted(self._event_at, [part.start, part.stop])
        return slice(int(a), int(b))

    def _event_terms(
        self, at: Ints, point: Point, kind: InformationKind = "observed"
    ) -> tuple[Floats, Floats, Floats]:
        """What event rows add to the sums over survived rows (log hazard) or over all rows (logit)."""
        eta = point.s[at] + point.z[self._tracks.leave[at]]
        if self._link.log_hazard:
            loglik, score, information = self._link.event(eta, kind)
        else:
            loglik, score, information = eta, np.ones_like(eta), np.zeros_like(eta)
        weight = self._weight[at]
        return weight * loglik, weight * score, weight * information

    # ---- log-likelihood, score, information

    def evaluate(self, params: Floats) -> Evaluation:
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            point = self._point(params)
            total = self._along_tracks(point) if self._link.log_hazard else self._by_powers(point)
            found = self._join(total)
        self._known = Known(params.copy(), point, total, found)
        return found

    def expected_information(self, params: Floats) -> Floats:
        # Expected and observed information of the logit are one.
        if (
            not self._link.log_hazard
            and self._known is not None
            and np.array_equal(self._known.params, params)
        ):
            return self._known.found.information
        return self._join(self._by_powers(self._point(params))).information

    def _along_tracks(self, point: Point) -> Part:
        """All sums of a log hazard from running sums."""
        starts = self._tracks.starts
        c = running(point.exp_z, starts)
        added = self._with_events(point, self._added(lambda b: self._running_part(b, point, c)))
        leaving = remaining(np.column_stack([added.cell, added.cross]), starts)
        leaving *= point.exp_z[:, None]
        return replace(added, score_cell=-leaving[:, 0], cell=leaving[:, 0], cross=leaving[:, 1:])

    def _running_part(self, b: int, point: Point, c: Floats) -> Part:
        """Cell arrays hold what leaves less what enters; _along_tracks makes it what is at risk."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        mass = self._weight[part] * self._filled(part, point)
        hazard, late = c[self._last[part]], self._late[b]
        hazard[late] -= c[t.enter[part][late]]
        hazard *= mass
        leaving = self._ends[b].spread(mass, self._one_a[part])
        root = self._one_a[part] * np.sqrt(hazard)[:, None]
        # Its first row and column are the sums with the ones: hazard and hazard times loan columns.
        products = root.T @ root
        score, information = self._placed(-products[0], products)
        return Part(
            cells.start, -float(products[0, 0]), score, information,
            np.zeros(leaving.shape[0]), leaving[:, 0], leaving[:, 1:],
        )  # fmt: skip

    def _by_powers(self, point: Point) -> Part:
        """All sums over rows of the logit, expected information of a log hazard."""
        starts, c = self._tracks.starts, self._powers
        tables = power_tables(point.exp_z, c.degree, starts)
        kind: InformationKind = "expected" if self._link.log_hazard else "observed"
        added = self._with_events(point, self._added(lambda b: self._row_part(b, point, tables)), kind)
        assert added.powers is not None
        alone = added.powers.at_risk(tables, starts)
        return replace(
            added,
            score_cell=added.score_cell - alone @ c.probability,
            cell=added.cell + alone @ c.information,
            cross=added.cross + added.powers.joint_at_risk(tables, starts, c.joint),
        )

    def _small_powers(
        self, part: slice, point: Point, tables: PowerTables
    ) -> tuple[NDArray[np.bool_], Floats]:
        """(n,) stays that powers carry, and (n, degree) powers of their e^s, 0 for the others."""
        exp_s = self._filled(part, point)
        small = exp_s * tables.top[self._tracks.stay_track[part]] <= LIMIT
        return small, powers_of(np.where(small, exp_s, 0.0), self._powers.degree)

    def _power_sums(self, b: int, power: Floats, tables: PowerTables, last: Ints) -> Floats:
        """(n, degree) sums of powers of e^eta over each stay, up to the cells ``last``."""
        late = self._late[b]
        sums = np.take(tables.sums, last, axis=0)
        sums[late] -= tables.sums[self._tracks.enter[self._stays(b)][late]]
        sums *= power
        return sums

    def _row_part(self, b: int, point: Point, tables: PowerTables) -> Part:
        part, cells, c = self._stays(b), self._cells(b), self._powers
        weight, one_a = self._weight[part], self._one_a[part]
        small, power = self._small_powers(part, point, tables)
        sums = self._power_sums(b, power, tables, self._last[part])
        loglik, score, info = np.ascontiguousarray((sums @ c.together).T)
        power *= weight[:, None]
        leaving = CellPowers.of_block(power, one_a, self._ends[b], c.joint.size)
        size = cells.stop - cells.start
        out = Part(
            cells.start, 0.0, np.zeros(self.k), np.zeros((self.k, self.k)), np.zeros(size), np.zeros(size),
            np.zeros((size, self._on_loan.size)), leaving,
        )  # fmt: skip
        rest = np.flatnonzero(~small)
        joint: Floats | None = None
        if rest.size:
            stays = (loglik, score, info)
            if self._few_rows(part, rest):
                joint = self._add_rows(rest, b, point, stays, out)
            else:
                self._add_tiles(rest, b, point, stays, out)
        root = one_a * np.sqrt(weight * info)[:, None]
        loan_score, information = self._placed(one_a.T @ (weight * score), root.T @ root, joint)
        return replace(out, llf=float(weight @ loglik), score=loan_score, information=information)

    def _few_rows(self, part: slice, rest: Ints) -> bool:
        t = self._tracks
        rows = int((self._last[part][rest] - t.enter[part][rest]).sum())
        return rows <= ROWS_A_TRACK * np.unique(t.stay_track[part][rest]).size

    def _add_rows(
        self, rest: Ints, b: int, point: Point, stays: tuple[Floats, Floats, Floats], out: Part
    ) -> Floats:
        """Stays ``rest`` of block b, row by row: as :meth:`_add_tiles`, with few calls where rows are few.

        Returns the information between loan and cell columns (kl, kc).
        """
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        enter, last = t.enter[part][rest], self._last[part][rest]
        stay, cell = stay_rows(enter, last)
        p, q, w = self._link.from_exp(point.exp_s[part][rest][stay] * point.exp_z[cell])
        own, size = self._weight[part][rest][stay], cells.stop - cells.start
        for whole, values in zip(stays, (np.log(q), -p, w), strict=True):
            whole[rest] = totals(stay, values, rest.size)
        out.score_cell[:] -= totals(cell - cells.start, own * p, size)
        out.cell[:] += totals(cell - cells.start, own * w, size)
        joint: Floats = (self._a[part][rest][stay] * (own * w)[:, None]).T @ self._z[cell]
        return joint

    def _add_tiles(
        self, rest: Ints, b: int, point: Point, stays: tuple[Floats, Floats, Floats], out: Part
    ) -> None:
        """Stays ``rest`` of block b by tiles: writes log-likelihood, score and information of each, adds to cells."""
        part, cells, t = self._stays(b), self._cells(b), self._tracks
        weight, exp_s, exp_z = self._weight[part][rest], point.exp_s[part][rest], point.exp_z[cells]
        weighted = self._a[part][rest] * weight[:, None]
        small = bool(exp_s.max() * exp_z.max() > 1e29)
        loglik, score, info = (np.zeros(rest.size) for _ in stays)
        enter, last = t.enter[part][rest] - cells.start, self._last[part][rest] - cells.start
        for tile in tiles(enter, last, t.stay_track[part][rest]):
            p, q, w = self._link.from_exp(tile.outer(exp_s, exp_z))
            if not self._link.log_hazard:
                loglik[tile.rows] = log_of_products(q, small=small)
                score[tile.rows] = -(p @ np.ones(p.shape[1]))
                out.score_cell[tile.cells] -= weight[tile.rows] @ p
            info[tile.rows] = w @ np.ones(w.shape[1])
            out.cell[tile.cells] += weight[tile.rows] @ w
            out.cross[tile.cells] += w.T @ weighted[tile.rows]
        for whole, some in zip(stays, (loglik, score, info), strict=True):
            whole[rest] = some

    def _placed(self, score: Floats, products: Floats, joint: Floats | None = None) -> tuple[Floats, Floats]:
        """(score (k,), information (k, k)) of the loan columns.

        score (1 + kl,), products (1 + kl, 1 + kl)   of the ones and the loan columns
        joint (kl, kc)                               information between loan and cell columns
        """
        on = self._on_loan
        out, matrix = np.zeros(self.k), np.zeros((self.k, self.k))
        out[on] = score[1:]
        matrix[np.ix_(on, on)] = products[1:, 1:]
        if joint is not None:
            matrix[np.ix_(on, self._on_cell)] = joint
            matrix[np.ix_(self._on_cell, on)] = joint.T
        return out, matrix

    def _with_events(self, point: Point, add: Part, kind: InformationKind = "observed") -> Part:
        x = self._event_x
        loglik, score, info = self._event_terms(self._event_at, point, kind)
        return replace(
            add,
            llf=add.llf + float(loglik.sum()),
            score=add.score + x.T @ score,
            information=add.information + x.T @ (x * info[:, None]),
        )

    def _added(self, work: Callable[[int], Part]) -> Part:
        """The parts of all blocks in block order; cell arrays over all cells."""
        size = self._tracks.cells
        total = Part(
            0, 0.0, np.zeros(self.k), np.zeros((self.k, self.k)), np.zeros(size),
            np.zeros(size), np.zeros((size, self._on_loan.size)),
            CellPowers.zeros(size, self._powers, self._on_loan.size),
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
            if part.powers is not None and total.powers is not None:
                total.powers.add(here, part.powers)
        return replace(total, llf=llf)

    def _join(self, total: Part) -> Evaluation:
        """Adds the cell columns to score and information."""
        z, on_loan, on_cell = self._z, self._on_loan, self._on_cell
        score, information = total.score.copy(), total.information.copy()
        score[on_cell] += z.T @ total.score_cell
        information[np.ix_(on_cell, on_cell)] += z.T @ (z * total.cell[:, None])
        cross = total.cross.T @ z
        information[np.ix_(on_loan, on_cell)] += cross
        information[np.ix_(on_cell, on_loan)] += cross.T
        return Evaluation(total.llf, score, 0.5 * (information + information.T))


def _cell_columns(data: HazardData, t: Tracks, on_cell: Ints) -> Floats:
    """(cells, kc) columns of the design that are the same for all loans of a track."""
    design, by_period = data.design, data.periods
    by_age = design.age_matrix(np.arange(int(t.age.max()) + 1).clip(min=1))
    period = feature_rows_of(data, t)
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
