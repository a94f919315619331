"""Attribution: which macro variable, and which channel of the loss, the difference of two scenarios comes from.

The loss along a mixture of two paths makes a game: its players are the variables (whole paths, afterwards and all) or
the channels through which a path reaches the loss. Shapley values share out the difference exactly and without regard
to any order (Shapley 1953). Both splits meet in a matrix: for each coalition
of variables the channels' game splits its loss, and each channel's part is again a game of the variables; rows add up
to the variables' shares, columns to the channels', since Shapley values are linear in the game.
"""

from __future__ import annotations

from collections.abc import Mapping
from itertools import pairwise, product
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.attributed import Attributed
from stresskit.analyses.attribution_tables import attribution_answer, attribution_tables, notes_of
from stresskit.analyses.elasticity import elasticities
from stresskit.analyses.games import Mixtures, by_year, cast
from stresskit.analyses.reads import CHANNELS, channel_reads, read_variables
from stresskit.analyses.shapley import log_mean_split, shapley, split
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import ScenarioPath
from stresskit.loss.result import LossResult
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.spec.attribution import Attribution

if TYPE_CHECKING:
    # The register of analyses imports this module.
    from stresskit.analyses.ask import Question

Floats = NDArray[np.float64]

#: Most projections for which the matrix is made unasked.
MATRIX_PROJECTIONS = 256
#: Largest part of the difference (or of the loss, where there is hardly any) that splits may leave unexplained.
EXACT = 1e-9


def attribute(question: Question) -> Analysis:
    """The maker of the analysis ``attribution``."""
    found = attributed(question)
    return Analysis(
        key="attribution",
        title=f"Where the loss in {found.end.name} comes from",
        answer=attribution_answer(found),
        tables=attribution_tables(found),
        notes=notes_of(found),
        facts={
            "from": found.start.name,
            "to": found.end.name,
            "variables": [p.name for p in found.cast.players],
            "not_read": list(found.cast.not_read),
            "channels": list(found.moving),
            "projections": found.projections,
            "loss_from": float(found.before[:, :-1].sum()),
            "loss_to": float(found.after[:, :-1].sum()),
        },
    )


def attributed(question: Question) -> Attributed:
    """The splits as numbers.

    Raises UsageError for scenarios that are not there or do not differ in anything that is read, NumericError where parts
    do not add up to the difference (which is our bug).
    """
    setting, spec = question.setting, question.spec
    start, end = _ends(setting, spec)
    reads = channel_reads(setting)
    players = cast(start, end, read_variables(reads), spec.groups)
    if not players.players:
        differ = f" (they differ in {', '.join(players.not_read)})" if players.not_read else ""
        raise UsageError(
            f"scenarios {start.name} and {end.name} do not differ in any variable that a hazard, a contract or the LGD reads{differ}: "
            "there is nothing to split"
        )
    names = {v for p in players.players for v in p.variables}
    moving = tuple(c for c in CHANNELS if names & set(reads[c]))
    k, c = len(players.players), len(moving)
    whole = _cost(k, c)
    matrix = spec.matrix if spec.matrix is not None else whole <= MATRIX_PROJECTIONS
    # with one player or one channel the matrix is a table that stands there already
    matrix = matrix and k > 1 and c > 1
    total = (whole if matrix else (1 << k) + max(0, (1 << c) - 2)) + 1 + 4 * len(names)
    game = Mixtures(setting, start, end, players.players, moving, tell=lambda n: question.progress(n, total))
    question.say(f"splitting {end.name} less {start.name}: {total:,} projections")
    values = game.values((m, moving) for m in range(1 << k))
    channel = split(game.values((game.everybody, _chosen(moving, t)) for t in range(1 << c)))
    table = _matrix(game, k) if matrix else None
    variables = split(values)
    ends = setting.along([start, end])
    _demand_sums(values[0], by_year(setting, ends[1]), variables.shares, channel.shares)
    slopes, extra = elasticities(
        setting, (start, end), sorted(names), [float(x[:, :-1].sum()) for x in (values[0], values[-1])]
    )
    question.progress(total, total)
    return Attributed(
        setting, start, end, players, moving, game.years, values[0], values[-1], variables, channel, table,
        _factors(*ends), tuple(slopes), game.count + 2 + extra,
    )  # fmt: skip


def _cost(players: int, channels: int) -> int:
    """Projections of all mixtures: every coalition of variables through every set of channels."""
    return 1 + ((1 << players) - 1) * ((1 << channels) - 1)


def _chosen(channels: tuple[str, ...], mask: int) -> tuple[str, ...]:
    return tuple(c for i, c in enumerate(channels) if mask >> i & 1)


def _matrix(game: Mixtures, k: int) -> Floats:
    """(players, channels, cells, Y + 1); see the module."""
    parts = []
    for m in range(1 << k):
        asked = [_chosen(game.channels, t) for t in range(1 << len(game.channels))]
        parts.append(shapley(game.values(product([m], asked))))
    return shapley(np.array(parts))


def _ends(setting: Setting, spec: Attribution) -> tuple[ScenarioPath, ScenarioPath]:
    start = setting.path(spec.from_) if spec.from_ is not None else setting.reference()
    if spec.to is not None:
        end = setting.path(spec.to)
        if end.name == start.name:
            raise UsageError(
                f"attribution: {end.name} is both where to start and where to arrive; name another scenario"
            )
        return start, end
    others = [p for p in setting.data.paths if p.name != start.name]
    if not others:
        raise UsageError(
            f"attribution needs two scenarios, and the study has only {start.name}: add one, or give --what-if"
        )
    losses = [float(r.cells["el"].sum()) for r in setting.along(others)]
    return start, others[int(np.argmax(losses))]


def _demand_sums(before: Floats, after: Floats, *splits: Floats) -> None:
    """Every split adds up to the difference of the two scenarios as they are projected by themselves."""
    change = after - before
    scale = max(float(np.abs(change).sum()), 1e-3 * float(np.abs(after).sum()))
    for parts in splits:
        left = float(np.abs(parts.sum(axis=0) - change).max())
        if left > EXACT * scale:
            raise NumericError(f"attribution: parts miss the difference of the scenarios by {left:.3g}")


#: Factors of the log-mean split, and how each is made of the measures of cells.
FACTORS = ("defaults", "exposure at default", "discounting", "LGD")


def _factors(before: LossResult, after: LossResult) -> dict[str, tuple[float, float, float, float]]:
    """Factor -> its level before and after (of the totals), its part by totals, and by segment and period.

    EL = expected defaults x amount per default x discount factor x LGD (Ang 2005: LMDI is consistent in aggregation).
    """
    fine = [_levels(r.cells) for r in (before, after)]
    whole = [
        _levels({m: r.cells[m].sum(keepdims=True) for m in ("default", "default_amount", "exposed", "el")})
        for r in (before, after)
    ]
    totals, parts = log_mean_split(*whole), log_mean_split(*fine)
    return {
        f: (
            float(whole[0][f].sum()),
            float(whole[1][f].sum()),
            float(totals[f].sum()),
            float(parts[f].sum()),
        )
        for f in FACTORS
    }


def _levels(cells: Mapping[str, Floats]) -> dict[str, Floats]:
    """Factor -> level, 0 where there is nothing to divide by."""
    chain = [cells[m] for m in ("default", "default_amount", "exposed", "el")]
    ratios = [
        np.divide(top, bottom, out=np.zeros(top.shape), where=bottom > 0) for bottom, top in pairwise(chain)
    ]
    return dict(zip(FACTORS, [chain[0], *ratios], strict=True))
