"""Sums without rows: a static linear predictor is s_i + z_cell, and sums over a stay factor (METHOD 4).

cloglog: a survived row contributes -e^s e^z, so a stay costs two look-ups in the running sum of e^z along
its track; score and observed information follow from the same running sums. logit, and the expected
information of cloglog: stays whose e^eta stays small by running sums of its powers (:mod:`.powers`), the
others row by row, no exponential per row. Event rows are few and added one by one, to the sums of their block.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.link import InformationKind
from stresskit.hazard.loan_columns import loan_columns
from stresskit.hazard.powers import TOP, link_powers
from stresskit.hazard.sums import BlockSums, Evaluation, HazardData, ScoreProducts
from stresskit.hazard.tracks import Tracks, feature_rows_of, mixed_products, tracks_of
from stresskit.kernels import event_rows, hazard_pass, power_pass, power_sums, row_values, stay_blocks, walks
from stresskit.kernels.blocks import in_order
from stresskit.kernels.vectors import WIDTH, whole

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]
Places = NDArray[np.int32]

#: Stays per block; part of the result's definition, because sums are added per block.
BLOCK_STAYS = 1 << 13
#: About so many stays tell where the predictor is centred; anywhere near is good enough.
MEANS_FROM = 1 << 12
#: Pieces of the work of a thread, so that the last one does not wait long for the other.
PIECES = 4
#: Numbers that a piece may hold until they are added up; more pieces where the sums of a block are many.
MOST_NUMBERS = 1 << 21
#: Rows taken at a time of stays beyond the reach of powers: a few arrays of this size stay in the cache of one core.
AT_A_TIME = 1 << 14


@dataclass(frozen=True, slots=True, eq=False)
class Point:
    """A coefficient vector, split so that s is centred: neither e^s nor e^z overflows alone.

    loan    of the ones and the loan columns, as :class:`LoanColumns` lays them out
    cell    (kc,), centre: added to every cell
    exp_s   (m,) e^s, written block by block in the first pass over the stays; ``filled`` afterwards
    event   (events,) linear predictor of the event rows, written with it
    stays   (2, m) expected events of each stay and their variance, without weights, written with the expected
            information: over the rows that it is a sum over
    """

    params: Floats
    loan: Floats
    cell: Floats
    centre: float
    exp_s: Floats
    event: Floats
    stays: Floats
    filled: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Known:
    """The last evaluation, kept because covariances and gates ask for more at the same coefficients."""

    at: Point
    evaluation: Evaluation
    expected: Floats | None
    products: ScoreProducts | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Consecutive stays and the cells of the tracks that they touch.

    part    the stays
    cells   the cells, which the kernels count from ``base``
    starts  (tracks + 1,) first cells of the tracks, counted from ``base``
    late    places of the stays that enter later than their track begins, as :mod:`stresskit.kernels.walks` wants them
    events  the event rows
    """

    part: slice
    cells: slice
    starts: Ints
    late: Places
    events: slice

    @property
    def base(self) -> int:
        return int(self.cells.start)


@dataclass(frozen=True, slots=True, eq=False)
class PowerSide:
    """What stays carried by powers have in common at a point; shapes as in :mod:`stresskit.kernels.power_sums`."""

    exp_s: Floats
    exp_z: Floats
    small: Flags
    power: Floats
    sums: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Sides:
    """Sums of a block by stay and by cell, from which score and information are put together.

    total (columns,), products (columns, columns)   score, and information of the ones and the loan columns
    by_cell (cells,), cross (cells, columns)        score of z in each cell; information of z with the same columns
    place (kl,)                                     which of the columns are those of loans
    """

    llf: float
    total: Floats
    products: Floats
    by_cell: Floats
    cross: Floats
    place: Ints


class StaySums(BlockSums):
    """Sums of a design without moving columns.

    Blocks hold whole tracks where they can, in the order of :class:`Tracks`; block results are added in block
    order, so the bits depend neither on ``threads`` nor on the order of loans. Memory beyond the columns of
    stays and cells is that of one block per thread.
    """

    def __init__(
        self,
        data: HazardData,
        tracks: Tracks | None = None,
        *,
        threads: int = 1,
        on_row: Flags | None = None,
    ) -> None:
        """on_row (k,): columns left to a subclass, neither of the loan alone nor of the cell alone."""
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
        left = np.zeros(design.k, dtype=bool) if on_row is None else on_row
        self._on_cell = np.flatnonzero(on_cell & ~left)
        self._on_row = np.flatnonzero(left)
        self._loan, self._weight, self._event = rows.loan[t.order], rows.weight[t.order], rows.event[t.order]
        self._offset = data.offset[self._loan] if design.has_offset("loan") else np.zeros(self._loan.size)
        self._z_flat = _cell_columns(data, t, self._on_cell)
        self._z = self._z_flat[: t.cells * self._on_cell.size].reshape((t.cells, self._on_cell.size))
        self._periods = rows.by_period()[0]
        self._columns = loan_columns(data, np.flatnonzero(~on_cell & ~left), self._loan, threads)
        self._on_loan = self._columns.design
        self._of_loans = np.ix_(self._on_loan, self._on_loan)
        self._of_cells = np.ix_(self._on_cell, self._on_cell)
        self._of_both = np.ix_(self._on_loan, self._on_cell)
        # Rows without event: the sums over them follow a pattern, event rows are added one by one. The log
        # odds of the logit are the same in both, so there all rows follow the pattern.
        self._last = t.last
        self._event_at = np.flatnonzero(self._event)
        self._event_cell = t.leave[self._event_at]
        some = np.arange(0, self._loan.size, max(1, self._loan.size // MEANS_FROM))
        self._means = self._columns.totals(some, np.ones(some.size)) / some.size
        self._mean_offset = float(self._offset.mean())
        self._powers = link_powers(data.link.name)
        self._known: Known | None = None
        self._cuts = self._block_cuts()
        self._blocks = list(in_order(self._new_block, self.blocks, threads))
        self._stays, self._table = self._for_pass()

    def _block_cuts(self) -> Ints:
        track = self._tracks.stay_track
        first = np.flatnonzero(np.concatenate(([True], track[1:] != track[:-1])))
        wanted = np.arange(0, track.size, BLOCK_STAYS)
        cuts = np.unique(first[np.searchsorted(first, wanted).clip(max=first.size - 1)])
        ends = np.append(cuts, track.size)
        pieces = [
            np.linspace(a, b, 1 + max(1, (b - a) // BLOCK_STAYS)).astype(np.int64)[:-1]
            for a, b in zip(ends[:-1].tolist(), ends[1:].tolist(), strict=True)
        ]
        return np.append(np.concatenate(pieces), track.size)

    # ---- pieces of a block

    def _new_block(self, b: int) -> Block:
        t, part = self._tracks, slice(int(self._cuts[b]), int(self._cuts[b + 1]))
        first, last = int(t.stay_track[part.start]), int(t.stay_track[part.stop - 1])
        starts = t.starts[first : last + 2]
        cells = slice(int(starts[0]), int(starts[-1]))
        late = walks.late_entries(t.enter[part], cells.start, t.boundary[cells])
        a, z = np.searchsorted(self._event_at, [part.start, part.stop])
        return Block(part, cells, starts - starts[0], late, slice(int(a), int(z)))

    def _block(self, b: int) -> Block:
        return self._blocks[b]

    def _for_pass(self) -> tuple[stay_blocks.Stays, stay_blocks.Blocks]:
        """Stays and blocks as one call over many blocks wants them."""
        t, columns, blocks = self._tracks, self._columns, self._blocks
        late = [b.late + b.part.start for b in blocks]
        stays = stay_blocks.Stays(
            columns.dense, columns.codes, self._weight, self._offset, t.enter, self._last, np.concatenate(late),
            t.starts, self._z_flat, self._on_cell.size, self._event_at, self._event_cell,
        )  # fmt: skip
        table = stay_blocks.Blocks(
            self._cuts,
            np.array([0, *(b.events.stop for b in blocks)]),
            np.concatenate(([0], np.cumsum([x.size for x in late]))),
            t.stay_track[self._cuts[:-1]],
            t.stay_track[self._cuts[1:] - 1],
        )
        return stays, table

    def _point(self, params: Floats) -> Point:
        if self._known is not None and np.array_equal(self._known.at.params, params):
            return self._known.at
        of_loan = params[self._on_loan]
        centre = float(self._means @ of_loan) + self._mean_offset
        loan = self._columns.weights(-centre, of_loan)
        m = self._loan.size
        event = np.empty(self._event_at.size)
        return Point(params.copy(), loan, params[self._on_cell], centre, np.empty(m), event, np.empty((2, m)))

    def _s(self, part: slice, at: Point, out: Floats) -> Floats:
        """(n,) s of the stays, written to ``out``."""
        self._columns.combined(part, at.loan, self._offset[part], out)
        return out

    def _z_of(self, cells: slice | Ints, at: Point) -> Floats:
        z: Floats = self._z[cells] @ at.cell
        z += at.centre
        return z

    def _factors(self, block: Block, at: Point) -> tuple[Floats, Floats]:
        """e^s of the block's stays, to be read only, and e^z of its cells, 0 in boundary cells."""
        out, z = at.exp_s[block.part], self._z_of(block.cells, at)
        if not at.filled:
            self._s(block.part, at, out)
            stay, cell = self._events_in(block)
            at.event[block.events] = out[stay] + z[cell]
            np.exp(out, out=out)
        np.exp(z, out=z)
        z[self._tracks.boundary[block.cells]] = 0.0
        return out, z

    def _events_in(self, block: Block) -> tuple[Ints, Ints]:
        """Places in the block of the stays that end with an event, and the cells in which they do."""
        return self._event_at[block.events] - block.part.start, self._event_cell[block.events] - block.base

    def _event_terms(
        self, block: Block, at: Point, kind: InformationKind = "observed"
    ) -> tuple[Floats, Floats, Floats]:
        """What event rows add to the sums over survived rows (log hazard) or over all rows (logit)."""
        eta, weight = at.event[block.events], self._weight[self._event_at[block.events]]
        if self._link.log_hazard:
            return event_rows.log_hazard(eta, weight, kind == "expected")
        return weight * eta, weight, np.zeros_like(eta)

    # ---- log-likelihood, score, information

    def evaluate(self, params: Floats) -> Evaluation:
        at = self._point(params)
        if self._known is not None and self._known.at is at:
            return self._known.evaluation
        found = self._summed(at, range(self.blocks))
        # Expected and observed information of the logit are one.
        expected = None if self._link.log_hazard else found.information
        self._known = Known(replace(at, filled=True), found, expected)
        return found

    def evaluate_blocks(self, params: Floats, blocks: range) -> Evaluation:
        return self._summed(self._point(params), blocks)

    def events_in(self, blocks: range) -> float:
        return sum(float(self._weight[self._event_at[self._block(b).events]].sum()) for b in blocks)

    def _at(self, params: Floats) -> Known:
        """The evaluation at ``params``, made now unless it was the last one."""
        if self._known is None or self._known.at is not self._point(params):
            self.evaluate(params)
        assert self._known is not None
        return self._known

    def _summed(self, at: Point, blocks: range) -> Evaluation:
        """The parts of some blocks in their order."""
        llf, total, matrix = 0.0, np.zeros(self.k), np.zeros((self.k, self.k))
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            for part in self._parts(at, blocks):
                llf, total, matrix = llf + part.llf, total + part.score, matrix + part.information
        return Evaluation(llf, total, 0.5 * (matrix + matrix.T))

    def _parts(self, at: Point, blocks: range) -> Iterator[Evaluation]:
        """Whose sum is the one over the blocks."""
        yield self._put(self._passed(at, blocks, observed=self._link.log_hazard))

    def _passed(self, at: Point, blocks: range, *, observed: bool) -> stay_blocks.Sums:
        """Sums over some blocks and their events: of a log hazard, observed, from running sums of the hazard; from sums
        of powers the logit, and of a log hazard the expected information alone."""
        shape = self._columns.size, whole(self._on_cell.size)
        (z, of_events), powers = self._exp_z(at), self._powers.for_pass(self._link.log_hazard)

        def work(ids: Ints) -> Floats:
            some = ids, self._stays, self._table, shape
            if observed:
                return hazard_pass.hazard_pass(*some, at.loan, z, of_events, at.exp_s, at.event)
            return power_pass.power_pass(
                *some, powers, at.loan, z, of_events, at.exp_s, at.event, at.filled, at.stays
            )

        return stay_blocks.split(self._over_blocks(work, blocks, stay_blocks.width(*shape)), *shape)

    def _exp_z(self, at: Point) -> tuple[Floats, Floats]:
        """(cells,) e^z, 0 in boundary cells, and (events,) z of the cells of event rows."""
        z = self._z @ at.cell
        z += at.centre
        of_events = z[self._event_cell]
        np.exp(z, out=z)
        z[self._tracks.starts[:-1]] = 0.0
        return z, of_events

    def _over_blocks(self, work: Callable[[Ints], Floats], blocks: range, width: int) -> Floats:
        """(width,) sum of the rows (blocks, width) that ``work`` gives for some blocks at a time, added block by block."""
        pieces = max(PIECES * self._threads, -(-len(blocks) * width // MOST_NUMBERS))
        cuts = np.linspace(0, len(blocks), 1 + min(len(blocks), pieces)).astype(np.int64)
        ids, total = np.arange(blocks.start, blocks.stop, blocks.step), np.zeros(width)
        parts = [ids[a:b] for a, b in pairwise(cuts)]
        for rows in in_order(lambda i: work(parts[i]), len(parts), self._threads):
            for row in rows:
                total += row
        return total

    def _put(self, sums: stay_blocks.Sums) -> Evaluation:
        """In the order of the design."""
        place, kc = self._columns.place, self._on_cell.size
        out, matrix = np.empty(self.k), np.empty((self.k, self.k))
        out[self._on_loan], out[self._on_cell] = sums.loan[place], sums.cell[:kc]
        products = walks.mirrored(sums.loans, self._columns.used)
        matrix[self._of_loans] = products[place[:, None], place]
        joint = sums.both[:kc, place].T
        matrix[self._of_both] = joint
        matrix.T[self._of_both] = joint
        lower = np.tril(sums.cells[:kc, :kc])
        matrix[self._of_cells] = lower + np.tril(lower, -1).T
        return Evaluation(sums.llf, out, matrix)

    def _with_events(
        self,
        block: Block,
        events: tuple[Floats, Floats, Floats],
        sums: tuple[float, Floats, Floats, Floats, Floats],
    ) -> Evaluation:
        """From (llf, total, products, by_cell, cross) of the other rows as the kernels give them, which are used up.

        events  (log-likelihood, score, information) of the event rows
        """
        (loglik, score, information), (llf, total, products, by_cell, cross) = events, sums
        columns, part = self._columns, block.part
        walks.events(
            *self._events_in(block), score, information, columns.dense[part], columns.codes[part], columns.used,
            total, products, by_cell, cross,
        )  # fmt: skip
        both = walks.mirrored(products, columns.used)
        return self._placed(
            block, Sides(llf + float(loglik.sum()), total, both, by_cell, cross, columns.place)
        )

    def _power_side(self, block: Block, at: Point) -> PowerSide:
        (exp_s, exp_z), t = self._factors(block, at), self._tracks
        power, sums, top = power_sums.tables(exp_z, self._powers.degree, block.starts, TOP)
        track = t.stay_track[block.part]
        return PowerSide(exp_s, exp_z, exp_s * top[track - track[0]] <= self._powers.limit, power, sums)

    def _squares(self, block: Block, score: Floats, information: Floats) -> tuple[Floats, Floats]:
        """Of the kernel of that name, for score and information (n,) of the stays."""
        columns, part = self._columns, block.part
        return walks.squares(score, information, columns.dense[part], columns.codes[part], columns.size)

    def _powers_of_stays(self, block: Block, side: PowerSide, coefficients: Floats) -> Floats:
        """(r, n) Of the kernel of that name."""
        part, t = block.part, self._tracks
        out: Floats = power_sums.of_stays(
            side.exp_s, side.sums, side.small, t.enter[part], self._last[part], block.base, coefficients
        )
        return out

    def _powers_at_risk(
        self,
        block: Block,
        side: PowerSide,
        together: Floats,
        alone: Floats | None = None,
        weight: Floats | None = None,
    ) -> tuple[Floats, Floats]:
        """(2, cells) probability and information, or what ``alone`` says, and (cells, columns), of the kernel of that name."""
        part, t, columns = block.part, self._tracks, self._columns
        return walks.powers(
            side.exp_s, self._weight[part] if weight is None else weight, side.small, columns.dense[part],
            columns.codes[part], columns.size, t.enter[part], self._last[part], block.base, block.late, block.starts,
            side.power, self._powers.of_cells if alone is None else alone, together,
        )  # fmt: skip

    def _laid_out(self, block: Block, rest: Ints) -> Floats:
        """(n, columns) of some stays of the block."""
        return self._columns.laid_out(block.part.start + rest)

    def _beyond(self, block: Block, side: PowerSide) -> Iterator[tuple[Ints, Ints, Floats]]:
        """(stays, first row of each, e^eta of their rows) of the stays that powers do not carry, some at a time."""
        rest = np.flatnonzero(~side.small)
        if rest.size == 0:
            return
        enter, last = self._tracks.enter[block.part][rest], self._last[block.part]
        rows = np.cumsum(last[rest] - enter)
        cuts = np.unique(np.searchsorted(rows, np.arange(0, max(1, int(rows[-1])), AT_A_TIME)))
        for a, b in zip(cuts, [*cuts[1:], rest.size], strict=True):
            here = rest[a:b]
            place = row_values.places(enter[a:b], last[here])
            yield (
                here,
                place,
                row_values.products(side.exp_s[here], side.exp_z, enter[a:b], block.base, place),
            )

    def _over_stays(self, values: Floats, block: Block, rest: Ints, place: Ints, columns: Floats) -> Floats:
        """(cells, q) sums of the row values times the columns (n, q) of their stays."""
        out = np.zeros((columns.shape[1], block.cells.stop - block.cells.start))
        row_values.per_cell(values, columns, self._tracks.enter[block.part][rest], block.base, place, out)
        return out.T

    def _placed(self, block: Block, sides: Sides) -> Evaluation:
        z, place = self._z[block.cells], sides.place
        out, matrix = np.empty(self.k), np.empty((self.k, self.k))
        out[self._on_loan], out[self._on_cell] = sides.total[place], sides.by_cell @ z
        joint = (sides.cross.T @ z)[place]
        matrix[self._of_loans] = sides.products[place[:, None], place]
        matrix[self._of_both] = joint
        matrix.T[self._of_both] = joint
        matrix[self._of_cells] = _weighted_square(z, sides.cross[:, 0])
        return Evaluation(sides.llf, out, matrix)


def _weighted_square(x: Floats, weight: Floats) -> Floats:
    """x' diag(weight) x."""
    out: Floats = x.T @ (x * weight[:, None])
    return out


def _cell_columns(data: HazardData, t: Tracks, on_cell: Ints) -> Floats:
    """(cells * kc + WIDTH,) columns of the design that are the same for all loans of a track, cell after cell, and zeros."""
    design, by_period = data.design, data.periods
    by_age = design.age_matrix(np.arange(int(t.age.max()) + 1).clip(min=1))
    period = feature_rows_of(data, t)
    mixed = {p: j for j, p in enumerate(mixed_products(design))}
    flat = np.zeros(t.cells * on_cell.size + WIDTH)
    out = flat[:-WIDTH].reshape((t.cells, on_cell.size))
    out[:] = 1.0
    for c, j in enumerate(on_cell):
        if design.index["age"][j] >= 0:
            out[:, c] *= by_age[:, design.index["age"][j]][t.age]
        if design.index["feature"][j] >= 0:
            out[:, c] *= by_period[:, design.index["feature"][j]][period]
        if design.index["loan"][j] >= 0:
            out[:, c] *= t.group_values[:, mixed[int(design.index["loan"][j])]][t.group[t.track]]
    return flat
