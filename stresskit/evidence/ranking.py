"""Does the fit rank borrowers? Concordance within a horizon of a landmark, exact under late entry and censoring.

At a landmark T0 every loan at risk in T0 + 1 gets its marker: the linear predictor of T0 + 1. When one of
them has the event in T0 + h, h <= H, it is compared with those still at risk and free of the event in
that very period: the incident/dynamic AUC of Heagerty and Zheng 2005 (Biometrics 61) with the marker as
it stood at the landmark (Zheng and Heagerty 2007, Biometrics 63). See docs/evidence.md for the choice.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import UsageError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.rows import FitRows, fit_rows
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class _Placed:
    """Cases of one landmark and step: calendar period (ordinal), step, their share of controls below, weight."""

    period: int
    step: int
    value: Floats
    weight: Floats


def auc_by_horizon(
    fit: HazardFit,
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    horizons: Sequence[int] | None = None,
    every: int | None = None,
) -> pd.DataFrame:
    """cause, horizon, auc, se, lower, upper, cases, landmarks, event_periods: a row per horizon.

    horizons  in periods; default 1, 2 and 3 years. Horizon 1 is added: every period its own landmark
    every     periods between landmarks, counted back from the last period at risk; default a year

    auc: mean over cases of the share of controls whose marker is lower, ties count half; 0.5 is chance.
    se: cases clustered by the calendar period of their event. A loan with a gap in its observation
    counts up to the gap. NaN where there are no cases.
    """
    rows = fit_rows(fit, risk_set, features)
    year = rows.frequency.per_year
    wanted = [1, *(h for h in (horizons or (year, 2 * year, 3 * year)) if h != 1)]
    if min(wanted) < 1 or (every is not None and every < 1):
        raise UsageError(f"horizons {list(horizons or ())} and every {every} must be at least 1")
    last = int((rows.rows.origin + rows.rows.exit).max())
    first = rows.first_period - 1
    yearly = _placements(rows, range(last - 1, first - 1, -(every or year)), max(wanted), last)
    each = _placements(rows, range(last - 1, first - 1, -1), 1, last)
    out = []
    for horizon in wanted:
        used = each if horizon == 1 else [p for p in yearly if p.step <= horizon]
        out.append({"cause": fit.cause, "horizon": horizon} | _mean(used))
        out[-1]["landmarks"] = len({p.period - p.step for p in used})
    return pd.DataFrame(out)


def auc_from(
    fit: HazardFit,
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    landmark: int,
    horizons: Sequence[int],
) -> pd.DataFrame:
    """The table of :func:`auc_by_horizon` for markers of one date: the loans at risk in the period after ``landmark``.

    The rows are meant to be later than the fit's: ages past the supported one count as in a projection.
    """
    rows = fit_rows(fit, risk_set, features, as_predicted=True)
    last = int((rows.rows.origin + rows.rows.exit).max())
    placed = _placements(rows, range(landmark, landmark - 1, -1), max(horizons), last)
    out = []
    for horizon in horizons:
        used = [p for p in placed if p.step <= horizon]
        out.append({"cause": fit.cause, "horizon": horizon} | _mean(used) | {"landmarks": min(len(used), 1)})
    return pd.DataFrame(out)


def _placements(rows: FitRows, landmarks: range, horizon: int, last: int) -> list[_Placed]:
    r = rows.rows
    begin, end = r.origin + r.entry, r.origin + r.exit
    out: list[_Placed] = []
    for landmark in landmarks:
        at = np.flatnonzero((begin <= landmark) & (end > landmark))
        if at.size == 0:
            continue
        _, eta = rows.row_tables(at, landmark + 1 - r.origin[at])
        # The same loan terms can differ in the last bit; ties are meant to be ties.
        level, code = np.unique(np.round(eta, 12), return_inverse=True)
        for step in range(1, min(horizon, last - landmark) + 1):
            found = _one_step(end[at] - landmark - step, r.event[at], r.weight[at], code, level.size)
            if found is not None:
                out.append(_Placed(landmark + step, step, *found))
    return out


def _one_step(
    beyond: Ints, event: NDArray[np.bool_], weight: Floats, code: Ints, levels: int
) -> tuple[Floats, Floats] | None:
    """(share of controls below each case, its weight); ``beyond`` is the exit less this period."""
    case = (beyond == 0) & event
    control = (beyond >= 0) & ~case
    if not case.any() or not control.any():
        return None
    own = np.bincount(code[control], weights=weight[control], minlength=levels)
    below = np.cumsum(own) - 0.5 * own
    return below[code[case]] / own.sum(), weight[case]


def _mean(placed: Sequence[_Placed]) -> dict[str, float]:
    nothing = {"auc": np.nan, "se": np.nan, "lower": np.nan, "upper": np.nan}
    cases = float(sum(p.weight.sum() for p in placed))
    if cases == 0.0:
        return nothing | {"cases": 0.0, "event_periods": 0}
    auc = sum(float(p.weight @ p.value) for p in placed) / cases
    spread: dict[int, float] = {}
    for p in placed:
        spread[p.period] = spread.get(p.period, 0.0) + float(p.weight @ (p.value - auc))
    t = len(spread)
    if t < 2:
        return nothing | {"auc": auc, "cases": cases, "event_periods": t}
    se = float(np.sqrt(t / (t - 1.0) * sum(v * v for v in spread.values())) / cases)
    half = float(stats.t.ppf(0.975, t - 1)) * se
    return {
        "auc": auc,
        "se": se,
        "lower": max(auc - half, 0.0),
        "upper": min(auc + half, 1.0),
        "cases": cases,
        "event_periods": t,
    }
