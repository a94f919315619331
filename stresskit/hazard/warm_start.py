"""A start near the maximum for large books: the fit of a fixed sixteenth of the loans.

The answer does not depend on it. Newton runs on all rows from there until the same two inequalities hold
(hazard.newton), and the likelihood has one maximum; only the number of passes over all rows is smaller. The loans
are every 16th in canonical order, so that neither the order of loans nor threads have a say. Where the sample
cannot be fitted (no events in a level, say) the fit starts where it starts without one.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.newton import Watch, maximise
from stresskit.hazard.sums import HazardData, Sums

Floats = NDArray[np.float64]

#: Every so many loans.
STEP = 16
#: Fewer stays, or fewer rows where sums go over rows, are fitted before a sample is set up.
LEAST_STAYS, LEAST_ROWS = 1 << 19, 1 << 21
#: Events in the sample for each coefficient.
LEAST_EVENTS = 10


def warm_start(
    data: HazardData,
    start: Floats,
    *,
    by_row: bool,
    choose: Callable[[HazardData], Sums],
    watch: Watch,
) -> Floats:
    """(k,) where to start; ``start`` itself for small books and samples that say too little.

    by_row  sums go over rows, not stays
    """
    rows = data.rows
    if rows.n_rows < LEAST_ROWS or not (by_row or rows.loan.size >= LEAST_STAYS):
        return start
    stays = rows.loan % STEP == 0
    if not rows.event[stays].sum() >= LEAST_EVENTS * data.design.k:
        return start
    sums = choose(sample(data, stays))
    try:
        return maximise(sums, start, sums.evaluate(start), watch=watch).params
    except NumericError:
        return start


def sample(data: HazardData, stays: NDArray[np.bool_]) -> HazardData:
    """The data of the loans 0, STEP, 2 STEP, ... in canonical order, whose stays are marked."""
    whole = data.rows
    rows = CauseRows(
        loan_ids=whole.loan_ids[::STEP],
        static={},
        loan=whole.loan[stays] // STEP,
        origin=whole.origin[stays],
        entry=whole.entry[stays],
        exit=whole.exit[stays],
        event=whole.event[stays],
        weight=whole.weight[stays],
        moving=whole.moving,
        first_row=whole.first_row[stays],
        rows_without_feature=0.0,
        events_without_feature=0.0,
    )
    first = rows.first_period - whole.first_period
    keys = np.arange(data.design.keys.count)[:, None] * data.n_periods
    at = (keys + np.arange(first, first + rows.by_period()[0].size)).ravel()
    return HazardData(
        data.design, rows, data.link, data.loans[::STEP], data.offset[::STEP],
        {name: level[::STEP] for name, level in data.levels.items()}, data.key[::STEP],
        data.periods[at], data.seen[at],
    )  # fmt: skip
