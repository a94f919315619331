"""Sums without rows: a static linear predictor is s_i + z_cell, and sums over a stay factor (METHOD 4).

cloglog: a survived row contributes -e^s e^z, so a stay costs two look-ups in the running sum of e^z along
its track; score and observed information follow from the same running sums. logit, and the expected
information of cloglog: stays whose e^eta stays small by running sums of its powers (:mod:`.powers`), the
others row by row, no exponential per row. Event rows are few and added one by one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.link import InformationKind
from stresskit.hazard.loan_columns import loan_columns
from stresskit.hazard.powers import LIMIT, TOP, link_powers
from stresskit.hazard.sums import BlockSums, Evaluation, HazardData
from stresskit.hazard.tracks import Tracks, feature_rows_of, mixed_products, tracks_of
from stresskit.kernels import cohorts, power_sums, row_values
from stresskit.kernels.blocks import in_order

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Flags = NDArray[np.bool_]

#: Stays per block; part of the result's definition, because sums are added per block.
BLOCK_STAYS = 1 << 13
#: Rows taken at a time of stays beyond the reach of powers: a few arrays of this size stay in the cache of one core.
AT_A_TIME = 1 << 14


@dataclass(frozen=True, slots=True, eq=False)
class Point:
    """A coefficient vector, split so that s is centred: neither e^s nor e^z overflows alone.

    loan    (1 + kl,) of the ones and the loan columns
    cell    (kc,), centre: added to every cell
    exp_s   (m,) e^s, written block by block in the first pass over the stays; ``filled`` afterwards
    stays   (2, m) expected events of each stay and their variance, without weights, written with the expected
            information: over the rows that it is a sum over
    """

    params: Floats
    loan: Floats
    cell: Floats
    centre: float
    exp_s: Floats
    stays: Floats
    filled: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class Known:
    """The last evaluation, kept because covariances and gates ask for more at the same coefficients."""

    at: Point
    information: Floats
    expected: Floats | None


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Consecutive stays and the cells of the tracks that they touch.

    part    the stays
    cells   the cells, which the kernels count from ``base``
    starts  (tracks + 1,) first cells of the tracks, counted from ``base``
    """

    part: slice
    cells: slice
    starts: Ints

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


class StaySums(BlockSums):
    """Sums of a design without moving columns.

    Blocks hold a fixed number of stays in the order of :class:`Tracks`; block results are added in block
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
        self._offset = data.offset[self._loan]
        self._z = _cell_columns(data, t, self._on_cell)
        self._periods = rows.by_period()[0]
        self._cuts = self._block_cuts()
        self._columns = loan_columns(data, np.flatnonzero(~on_cell & ~left), self._loan)
        self._on_loan = self._columns.design
        # Rows without event: the sums over them follow a pattern, event rows are added one by one. The log
        # odds of the logit are the same in both, so there all rows follow the pattern.
        self._last = t.survived if data.link.log_hazard else t.leave
        self._event_at = np.flatnonzero(self._event)
        self._event_x, self._event_offset = self._event_rows()
        everyone = slice(0, self._loan.size)
        self._means = self._columns.totals(everyone, np.ones(self._loan.size)) / self._loan.size
        self._mean_offset = float(self._offset.mean())
        self._powers = link_powers(data.link.name)
        self._known: Known | None = None

    def _block_cuts(self) -> Ints:
        return np.append(np.arange(0, self._loan.size, BLOCK_STAYS), self._loan.size)

    # ---- pieces of a block

    def _block(self, b: int) -> Block:
        t, part = self._tracks, slice(int(self._cuts[b]), int(self._cuts[b + 1]))
        first, last = int(t.stay_track[part.start]), int(t.stay_track[part.stop - 1])
        starts = t.starts[first : last + 2]
        return Block(part, slice(int(starts[0]), int(starts[-1])), starts - starts[0])

    def _point(self, params: Floats) -> Point:
        if self._known is not None and np.array_equal(self._known.at.params, params):
            return self._known.at
        loan = np.concatenate(([0.0], params[self._on_loan]))
        centre = float(self._means @ loan) + self._mean_offset
        loan[0] = -centre
        m = self._loan.size
        return Point(params.copy(), loan, params[self._on_cell], centre, np.empty(m), np.empty((2, m)))

    def _s(self, part: slice, at: Point, out: Floats) -> Floats:
        """(n,) s of the stays, written to ``out``."""
        self._columns.combined(part, at.loan, self._offset[part], out)
        return out

    def _exp_s(self, part: slice, at: Point) -> Floats:
        """(n,) e^s of the block's stays, to be read only."""
        out = at.exp_s[part]
        if not at.filled:
            np.exp(self._s(part, at, out), out=out)
        return out

    def _z_of(self, cells: slice | Ints, at: Point) -> Floats:
        z: Floats = self._z[cells] @ at.cell
        z += at.centre
        return z

    def _exp_z(self, block: Block, at: Point) -> Floats:
        """e^z of the block's cells, 0 in boundary cells."""
        z = self._z_of(block.cells, at)
        np.exp(z, out=z)
        z[self._tracks.boundary[block.cells]] = 0.0
        return z

    def _event_rows(self) -> tuple[Floats, Floats]:
        """The design of the rows with an event (events, k), and their offset."""
        at = self._event_at
        x = np.empty((at.size, self.k))
        x[:, self._on_loan] = self._columns.wide(at)[:, 1:]
        x[:, self._on_cell] = self._z[self._tracks.leave[at]]
        return x, self._offset[at]

    def _events_of(self, part: slice) -> slice:
        """The event rows of a block."""
        a, b = np.searchsorted(self._event_at, [part.start, part.stop])
        return slice(int(a), int(b))

    def _event_terms(
        self, here: slice, params: Floats, kind: InformationKind = "observed"
    ) -> tuple[Floats, Floats, Floats]:
        """What event rows add to the sums over survived rows (log hazard) or over all rows (logit)."""
        at = self._event_at[here]
        eta = self._event_x[here] @ params + self._event_offset[here]
        if self._link.log_hazard:
            loglik, score, information = self._link.event(eta, kind)
        else:
            loglik, score, information = eta, np.ones_like(eta), np.zeros_like(eta)
        weight = self._weight[at]
        return weight * loglik, weight * score, weight * information

    # ---- log-likelihood, score, information

    def evaluate(self, params: Floats) -> Evaluation:
        work, at = self._hazard_part if self._link.log_hazard else self._power_part, self._point(params)
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            found = self._summed(work, at, "observed")
        # Expected and observed information of the logit are one.
        expected = None if self._link.log_hazard else found.information
        self._known = Known(replace(at, filled=True), found.information, expected)
        return found

    def expected_information(self, params: Floats) -> Floats:
        return self._expected(params)[1]

    def _expected(self, params: Floats) -> tuple[Point, Floats]:
        """The point with its ``stays`` written, and (k, k) the expected information."""
        at = self._point(params)
        if self._known is None or self._known.at is not at:
            self.evaluate(params)
        assert self._known is not None
        known = self._known
        if known.expected is None:
            known = replace(known, expected=self._summed(self._power_part, known.at, "expected").information)
            self._known = known
        assert known.expected is not None
        return known.at, known.expected

    def _summed(
        self, work: Callable[[int, Point], Evaluation], at: Point, kind: InformationKind
    ) -> Evaluation:
        """The parts of all blocks in block order, and the events."""
        x = self._event_x
        loglik, score, info = self._event_terms(slice(0, self._event_at.size), at.params, kind)
        llf, total, matrix = float(loglik.sum()), x.T @ score, _weighted_square(x, info)
        for part in in_order(lambda b: work(b, at), self.blocks, self._threads):
            llf, total, matrix = llf + part.llf, total + part.score, matrix + part.information
        return Evaluation(llf, total, 0.5 * (matrix + matrix.T))

    def _hazard_part(self, b: int, at: Point) -> Evaluation:
        """Sums of a log hazard over the survived rows of a block from running sums."""
        block = self._block(b)
        part, last = block.part, self._last[block.part]
        enter = self._tracks.enter[part]
        mass, exp_z = self._exp_s(part, at) * self._weight[part], self._exp_z(block, at)
        c = cohorts.running(exp_z[:, None], block.starts)
        hazard = cohorts.differences(mass, c, enter, last, block.base)[:, 0]
        cross = self._spread(block, mass)
        cross *= exp_z[:, None]
        # The first row and column are the sums with the ones: hazard and hazard times loan columns.
        products = self._columns.square(part, hazard)
        return self._placed(block, -float(products[0, 0]), -products[0], products, -cross[:, 0], cross)

    def _spread(self, block: Block, mass: Floats) -> Floats:
        """(cells, 1 + kl) sums of mass times the loan columns over the stays at risk in each cell."""
        part, t, columns = block.part, self._tracks, self._columns
        cross = cohorts.spread(
            mass, columns.dense[part], columns.codes[part], columns.size + 1, t.enter[part], self._last[part],
            block.base, t.boundary[block.cells],
        )  # fmt: skip
        cohorts.at_risk(cross, block.starts)
        return cross[:, :-1]

    def _power_side(self, block: Block, at: Point) -> PowerSide:
        exp_s, exp_z, t = self._exp_s(block.part, at), self._exp_z(block, at), self._tracks
        power, sums, top = power_sums.tables(exp_z, self._powers.degree, block.starts, TOP)
        track = t.stay_track[block.part]
        return PowerSide(exp_s, exp_z, exp_s * top[track - track[0]] <= LIMIT, power, sums)

    def _power_part(self, b: int, at: Point) -> Evaluation:
        """Sums of the logit over the rows of a block; expected information of a log hazard over survived rows."""
        block, c, t = self._block(b), self._powers, self._tracks
        part, weight, columns = block.part, self._weight[block.part], self._columns
        enter, last, side = t.enter[part], self._last[part], self._power_side(block, at)
        # What is not needed makes room: the variance of the logit is its information, and the expected
        # information of a log hazard goes without log-likelihood and score.
        log_hazard = self._link.log_hazard
        first, expected, info = power_sums.of_stays(
            side.exp_s,
            side.sums,
            side.small,
            enter,
            last,
            block.base,
            c.for_log_hazard if log_hazard else c.for_logit,
        )
        found, cross = power_sums.at_risk(
            *self._leaving(block, side, last), side.power, block.starts, c.of_cells, c.joint
        )
        cell_score = -found[0]
        cross[:, 0] = found[1]
        for rest, place, x in self._beyond(block, side, last):
            p, q, w = self._link.from_exp(x)
            first[rest] = row_values.per_stay(p * q if log_hazard else np.log(q), place)
            expected[rest] = row_values.per_stay(p, place)
            info[rest] = row_values.per_stay(w, place)
            if not log_hazard:
                cell_score -= self._over_stays(p, block, rest, place, weight[rest, None])[:, 0]
            cross[:, :-1] += self._over_stays(
                w, block, rest, place, weight[rest, None] * self._wide(block, rest)
            )
        at.stays[0, part], at.stays[1, part] = expected, first if log_hazard else info
        return self._placed(
            block, float(weight @ first), -columns.totals(part, weight * expected), columns.square(part, weight * info),
            cell_score, cross[:, :-1],
        )  # fmt: skip

    def _wide(self, block: Block, rest: Ints) -> Floats:
        """(n, 1 + kl) loan columns of some stays of the block."""
        return self._columns.wide(block.part.start + rest)

    def _leaving(
        self, block: Block, side: PowerSide, last: Ints, *, alone: bool = False
    ) -> tuple[Floats, Floats]:
        """Of the kernel of that name; ``alone``: without loan columns."""
        part, t, c, columns = block.part, self._tracks, self._powers, self._columns
        dense, codes, size = columns.dense[part], columns.codes[part], columns.size + 1
        return power_sums.leaving(
            side.exp_s, self._weight[part], side.small, dense, codes, (c.degree, 0 if alone else c.joint.size, size),
            t.enter[part], last, block.base, t.boundary[block.cells],
        )  # fmt: skip

    def _beyond(self, block: Block, side: PowerSide, last: Ints) -> Iterator[tuple[Ints, Ints, Floats]]:
        """(stays, first row of each, e^eta of their rows) of the stays that powers do not carry, some at a time."""
        rest = np.flatnonzero(~side.small)
        if rest.size == 0:
            return
        enter = self._tracks.enter[block.part][rest]
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

    def _placed(
        self, block: Block, llf: float, score: Floats, products: Floats, cell_score: Floats, cross: Floats
    ) -> Evaluation:
        """The sums of a block.

        score (1 + kl,), products (1 + kl, 1 + kl)   score and information of the ones and the loan columns
        cell_score (cells,), cross (cells, 1 + kl)   score of z in each cell; information of z with the same columns
        """
        z, on, cell = self._z[block.cells], self._on_loan, self._on_cell
        out, matrix = np.empty(self.k), np.empty((self.k, self.k))
        out[on], out[cell] = score[1:], cell_score @ z
        joint = cross[:, 1:].T @ z
        across = on[:, None]
        matrix[across, on] = products[1:, 1:]
        matrix[across, cell] = joint
        matrix[cell[:, None], on] = joint.T
        matrix[cell[:, None], cell] = _weighted_square(z, cross[:, 0])
        return Evaluation(llf, out, matrix)


def _weighted_square(x: Floats, weight: Floats) -> Floats:
    """x' diag(weight) x."""
    out: Floats = x.T @ (x * weight[:, None])
    return out


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
