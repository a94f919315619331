"""Age, period and cohort where a held spline would hide that they are dependent."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.hazard.sums import HazardData
from stresskit.hazard.terms import AgeSpline, Side

Floats = NDArray[np.float64]

#: Share of variance left unexplained below which a column is a linear function of others.
EXACT = 1e-10


def check_held_age(data: HazardData) -> None:
    """NumericError when age, cohort and period would be told apart by an accident of how they are written.

    Linear age = period - origination. A design that contains all three is singular and refused, with two exceptions
    that are refused here (Holford 1983, Biometrics 39):
    - a spline that is held beyond its last knot contains linear age only up to there, so the matrix has full rank, and
      the kink at that knot would part the three effects;
    - a quarterly trend that is placed on months by steps is a staircase, so that the place of a month within its
      quarter would part them.
    """
    design, rows = data.design, data.rows
    spline = next((t for t in design.terms if isinstance(t, AgeSpline)), None)
    held = spline is not None and spline.knots[-1] < rows.largest_age
    used = np.flatnonzero(data.seen)
    features = _alone(data, "feature")
    values = data.periods[used][:, [p for _, p in features]]
    period = rows.first_period + used % data.n_periods
    trends = _explains(values, period.astype(np.float64))
    what = "the age from which the spline is held"
    if trends is None and (held or _linear_age(data)):
        trends = _explains(values, (period // 3).astype(np.float64))
        what = "the steps by which quarters were placed on months"
    elif not held:
        return
    if trends is None:
        return
    loans = _alone(data, "loan")
    columns = np.empty((rows.loan.size, len(loans)))
    for i, (_, p) in enumerate(loans):
        columns[:, i] = data.loan_side.column(p)[rows.loan]
    cohorts = _explains(columns, rows.origin.astype(np.float64))
    if cohorts is None:
        return
    names = sorted(
        {design.owner[loans[i][0]] for i in cohorts}
        | {design.owner[features[i][0]] for i in trends}
        | {"age"}
    )
    raise NumericError(
        f"terms that cannot be told apart: {', '.join(names)}. Only {what} would part them. "
        "Age, calendar period and origination are linearly dependent (period = origination + age): Leave one of them out."
    )


def _linear_age(data: HazardData) -> bool:
    """Whether the age baseline contains a straight line over all ages at risk."""
    at_risk, _ = data.rows.by_age()
    ages = np.flatnonzero(at_risk > 0)
    index = _alone(data, "age")
    matrix = data.design.age_matrix(ages)[:, [p for _, p in index]]
    return _explains(matrix, ages.astype(np.float64)) is not None


def _alone(data: HazardData, side: Side) -> list[tuple[int, int]]:
    """(column, product) of the columns that read one side only."""
    index = data.design.index
    others = [s for s in ("loan", "age", "feature", "moving") if s != side]
    return [
        (j, int(index[side][j]))
        for j in range(data.design.k)
        if index[side][j] >= 0 and all(index[s][j] < 0 for s in others)  # type: ignore[index]
    ]


def _explains(x: Floats, y: Floats) -> list[int] | None:
    """Columns of x (n, k) of which y (n,) is a linear function, with a constant; None when it is not."""
    if x.shape[1] == 0 or np.ptp(y) == 0.0:
        return None
    centred = x - x.mean(axis=0)
    size = np.sqrt((centred * centred).sum(axis=0))
    keep = np.flatnonzero(size > 0.0)
    centred, target = centred[:, keep] / size[keep], y - y.mean()
    target = target / np.sqrt((target * target).sum())
    weights = np.linalg.lstsq(centred.T @ centred, centred.T @ target, rcond=1e-12)[0]
    left = target - centred @ weights
    if float(left @ left) > EXACT:
        return None
    return [int(keep[i]) for i in np.flatnonzero(np.abs(weights) > 1e-3)]
