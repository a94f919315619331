"""Draws projected: together, each source alone, all but one; compression chosen and measured; when to stop."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.bands.compress import compressed, importance, layout, stand
from stresskit.analyses.bands.draws import BATCH, Draw, Spreads, batch_of
from stresskit.analyses.bands.quantiles import monte_carlo_error
from stresskit.analyses.bands.world import Kept, World, edges_of, world_of
from stresskit.core.values import ScenarioPath
from stresskit.kernels.blocks import in_order, processors
from stresskit.loss.result import LossResult
from stresskit.runs.setting import Setting
from stresskit.spec.bands import Bands

Floats = NDArray[np.float64]
Say = Callable[[str], None]
Progress = Callable[[int, int], None]

TOGETHER = "together"
#: Measures of a segment, in this order.
MEASURES = ("pd_12m", "pd_lifetime", "el_12m", "el_lifetime")
#: Draws by which compression is measured, the first ones of the first batch.
CHECKED = 3
#: Fewest loans that stand for a book, and the share of it from which compression is not worth its error.
FEWEST, MOST_SHARE = 256, 0.5
#: Draws before which a sequential run does not end.
LEAST_DRAWS = 500


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """How figures of a draw are laid out: (S, D), D = 4 measures of each of G groups, then loss of the book by year.

    groups  (G,) pairs (by, segment), the whole book first
    member  (G, cells) 1 where a cell belongs to a group
    loans   (G,) number of loans; of all those for which entries of the portfolio stand
    years   (Y,) calendar years
    """

    groups: tuple[tuple[str, str], ...]
    member: Floats
    loans: Floats
    years: tuple[int, ...]

    def figures(self, columns: Floats) -> Floats:
        """(S, D) from (S, cells, 3 + Y)."""
        sums = np.einsum("gc,scm->sgm", self.member, columns)
        measures = np.stack(
            [
                sums[:, :, 0] / self.loans,
                sums[:, :, 1] / self.loans,
                sums[:, :, 2],
                sums[:, :, 3:].sum(axis=2),
            ],
            axis=2,
        )
        return np.concatenate([measures.reshape(sums.shape[0], -1), sums[:, 0, 3:]], axis=1)

    def place(self, group: int, measure: str) -> int:
        return 4 * group + MEASURES.index(measure)

    @property
    def first_year(self) -> int:
        """Place of the first year's loss."""
        return 4 * len(self.groups)


@dataclass(frozen=True, slots=True, eq=False)
class Compression:
    """loans: of the book; standing: projected in a draw; error, segment_error: largest relative error in a checked draw.

    used   whether some stand for others; if not, every one is projected, by the very figures that a run projects
    alike  for how many loans the entries of the book stand, which ``loans`` and ``standing`` then count; None: each for itself
    """

    loans: int
    standing: int
    error: float
    segment_error: float
    tolerance: float | None
    used: bool
    alike: float | None

    @property
    def unit(self) -> str:
        """What ``loans`` and ``standing`` count."""
        return "loans" if self.alike is None else "lines"


@dataclass(frozen=True, slots=True, eq=False)
class Drawn:
    """sets: name -> (N, S, D) figures; point (S, D) of the centre; ``whole``: names of all sources together."""

    layout: Layout
    scenarios: tuple[str, ...]
    reference: int
    point: Floats
    sets: Mapping[str, Floats]
    spreads: Spreads
    compression: Compression
    reached: float


def layout_of(setting: Setting) -> Layout:
    """Groups of the study's breakdowns and calendar years."""
    groups, rows = [], []
    for by, labels, index in setting.cells.breakdowns:
        for k, label in enumerate(labels):
            groups.append((by, str(label)))
            rows.append((index == k).astype(np.float64))
    member = np.stack(rows)
    of_cell = np.bincount(
        setting.cells.codes, weights=setting.portfolio.count, minlength=setting.cells.count
    ).astype(np.float64)
    loans = np.einsum("gc,c->g", member, of_cell)
    edges, k = edges_of(setting), setting.file.frequency.per_year
    years = tuple(int((setting.portfolio.as_of + int(e)) // k) for e in edges)
    return Layout(tuple(groups), member, loans, years)


class Projector:
    """Figures of draws on a book in which loans stand for others, put right so that the centre is that of the whole book."""

    def __init__(self, world: World, how: Layout, whole: Floats) -> None:
        self._world, self._layout = world, how
        mine = self.columns(None, frozenset())
        self._ratio = np.divide(whole, mine, out=np.ones_like(whole), where=mine > 0.0)

    def columns(self, draw: Draw | None, active: frozenset[str], kept: Kept | None = None) -> Floats:
        return self._world.figures(self._world.results(draw, active, kept))

    def figures(self, draw: Draw | None, active: frozenset[str], kept: Kept | None = None) -> Floats:
        """(S, D)."""
        return self._layout.figures(self.columns(draw, active, kept) * self._ratio)


def sets_of(sources: Sequence[str]) -> dict[str, frozenset[str]]:
    """Name -> sources drawn: all together, each alone, all but each."""
    out = {TOGETHER: frozenset(sources)}
    if len(sources) > 1:
        out |= {f"only {s}": frozenset([s]) for s in sources}
    if len(sources) > 2:
        out |= {f"without {s}": frozenset(sources) - {s} for s in sources}
    return out


def run_draws(
    setting: Setting,
    paths: Sequence[ScenarioPath],
    spreads: Spreads,
    spec: Bands,
    *,
    reference: int = 0,
    threads: int | None = None,
    say: Say = lambda _: None,
    progress: Progress = lambda _, __: None,
) -> Drawn:
    """All draws of a study. The same bits for any number of threads."""
    how = layout_of(setting)
    whole = world_of(setting, paths, spreads, snap=False)
    say("projecting the whole book at the centre and in a few draws")
    centre = whole.results(None, frozenset())
    first = batch_of(spreads, setting.book.horizon, spec.seed, 0)
    projector, compression = _projector(whole, how, centre, first[:CHECKED], spec, reference)
    workers = threads or processors()
    point = projector.figures(None, frozenset())
    wanted = sets_of(spreads.sources)
    found: dict[str, list[Floats]] = {name: [] for name in wanted}
    most = spec.draws or max(spec.most_draws, LEAST_DRAWS)
    say(f"drawing on {compression.standing:,} {compression.unit} that stand for {compression.loans:,}")
    reached, done = np.inf, 0
    while done < most:
        batch = first if done == 0 else batch_of(spreads, setting.book.horizon, spec.seed, done // BATCH)
        size = min(BATCH, most - done)

        def work(i: int, batch: list[Draw] = batch, done: int = done) -> dict[str, Floats]:
            kept: Kept = {}
            names = wanted if done + i < spec.source_draws else (TOGETHER,)
            return {name: projector.figures(batch[i], wanted[name], kept) for name in names}

        for figures in in_order(work, size, workers):
            for name, values in figures.items():
                found[name].append(values)
            done += 1
            progress(done, most if spec.draws or done < LEAST_DRAWS else _expected(reached, done, spec, most))
        reached = precision_of(np.stack(found[TOGETHER]), point, how, spec.level)
        if spec.draws is None and done >= LEAST_DRAWS and reached <= spec.precision:
            break
    sets = {name: np.stack(rows) for name, rows in found.items() if rows}
    names = tuple(p.name for p in paths)
    return Drawn(how, names, reference, point, sets, spreads, compression, float(reached))


def _expected(reached: float, done: int, spec: Bands, most: int) -> int:
    """How many draws the precision will take, from what it is now: the error falls with the root of their number."""
    whole = (
        int(np.ceil(done * (max(reached, spec.precision) / spec.precision) ** 2))
        if np.isfinite(reached)
        else most
    )
    return min(most, max(done, -(-whole // BATCH) * BATCH))


def precision_of(draws: Floats, point: Floats, how: Layout, level: float) -> float:
    """Largest Monte Carlo error of the band's ends of the book's losses, as a fraction of the point estimate."""
    places = [how.place(0, m) for m in ("el_12m", "el_lifetime")]
    worst = 0.0
    for p in ((1.0 - level) / 2.0, (1.0 + level) / 2.0):
        error = monte_carlo_error(draws[:, :, places], p)
        base = point[:, places]
        worst = max(worst, float(np.divide(error, base, out=np.zeros_like(error), where=base > 0.0).max()))
    return worst


def _projector(
    whole: World,
    how: Layout,
    centre: Sequence[LossResult],
    checked: Sequence[Draw],
    spec: Bands,
    reference: int,
) -> tuple[Projector, Compression]:
    """The coarsest compression whose measured error is within the tolerance; the whole book where none is.

    How coarse it begins and how fine it may get goes by the number of loans that entries stand for: as if written out.
    """
    setting = whole.setting
    n, everything = setting.portfolio.n_loans, frozenset(whole.spreads.sources)
    alike = None if whole.counts is None else float(whole.counts.sum())
    most = MOST_SHARE * max(n, alike or 0.0)
    columns = whole.figures(centre)
    full, plain = Projector(whole, how, columns), Compression(n, n, 0.0, 0.0, spec.tolerance, False, alike)
    count = max(FEWEST, 4 * setting.cells.count)
    if spec.tolerance is None or count > most:
        return full, plain
    exact = [full.figures(draw, everything) for draw in checked]
    x = layout(setting, _extremes(centre, reference))
    weight = importance(setting, centre[reference])
    while count <= most:
        chosen = stand(setting, x, weight, centre[reference], count)
        small = world_of(compressed(setting, chosen), whole.paths, whole.spreads, snap=True)
        projector = Projector(small, how, columns)
        near = [projector.figures(draw, everything) for draw in checked]
        error, segment = _errors(exact, near, how)
        if error <= spec.tolerance:
            return projector, Compression(n, chosen.loan.size, error, segment, spec.tolerance, True, alike)
        if chosen.loan.size < count:
            break
        count *= 2
    return full, plain


def _extremes(centre: Sequence[LossResult], reference: int) -> list[LossResult]:
    """The reference and the scenario with the largest loss: between them loans differ most."""
    losses = [float(r.loans["el_lifetime"].sum()) for r in centre]
    worst = int(np.argmax(losses))
    return [centre[reference]] + ([centre[worst]] if worst != reference else [])


def _errors(exact: Sequence[Floats], near: Sequence[Floats], how: Layout) -> tuple[float, float]:
    """Largest relative error of the book's four measures, and of those of any segment with 1 % of its loss or more."""
    book, segment = 0.0, 0.0
    for a, b in zip(exact, near, strict=True):
        gap = np.abs(np.divide(b, a, out=np.ones_like(a), where=a > 0.0) - 1.0)[:, : how.first_year]
        by_group = gap.reshape(gap.shape[0], -1, 4)
        loss = a[:, : how.first_year].reshape(by_group.shape)[:, :, 3]
        counts = loss >= 0.01 * loss[:, :1]
        book = max(book, float(by_group[:, 0].max()))
        segment = max(segment, float((by_group * counts[:, :, None]).max()))
    return book, segment
