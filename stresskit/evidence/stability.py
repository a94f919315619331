"""Do the coefficients hold before and after a date?"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.refit import Refit, refit
from stresskit.evidence.rows import FitRows, fit_rows, window
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.result import HazardFit
from stresskit.kernels.linalg import dependent_columns, solve_scaled

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

#: Fewer periods than this on one side of the date are no evidence.
FEWEST_PERIODS = 8


def stability(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None, *, split: int | None = None
) -> pd.DataFrame:
    """Refit of the frozen design (same knots, levels, scales) before and after a date, a row per coefficient.

    split  last period (ordinal) of the first part; default: that of the median event

    Columns cause, term, macro, before, se_before, after, se_after, difference, z, p_value, joint_p, held,
    events_before, events_after, periods_before, periods_after. The two
    parts share no period, so their estimates are independent and z = difference / sqrt(se^2 + se^2).
    With few periods a clustered error can come out too small, so each se is the larger of the clustered
    and the model one (Angrist and Pischke 2009, section 8.2.3). p_value: t with the degrees of the part with
    fewer periods. joint_p: all macro coefficients together (Wald, F with the same degrees, the larger
    p-value of the two covariances; NaN without macro terms). held: kept at the estimate of all rows because a part
    cannot estimate it: a level without events, a column without variation, the age baseline where it
    does not converge free; or because the fit holds it at its bound.

    Raises NumericError when a part has no events, too few periods, or does not converge.
    """
    whole = fit_rows(fit, risk_set, features)
    last = median_event_period(whole.rows) if split is None else split
    sides = (
        fit_rows(fit, window(risk_set, last=last), features),
        fit_rows(fit, window(risk_set, first=last + 1), features),
    )
    for side, words in zip(sides, ("up to", "after"), strict=True):
        n, events = int((side.rows.by_period()[0] > 0).sum()), side.rows.event_weight
        if n < FEWEST_PERIODS or events == 0.0:
            raise NumericError(
                f"{words} the date there are {n} periods with {events:,.0f} events of {fit.cause!r}; "
                f"{FEWEST_PERIODS} periods and some events are needed"
            )
    free = estimable(sides) & ~np.isin(np.array(fit.design.labels), np.array(fit.at_bound, dtype=str))
    try:
        before, after = (refit(side, free) for side in sides)
    except NumericError:
        # A part that saw few ages cannot place the baseline; the question is about the other terms.
        free = free & np.array([owner != "age" for owner in fit.design.owner])
        before, after = (refit(side, free) for side in sides)
    return _table(fit, free, before, after)


def median_event_period(rows: CauseRows) -> int:
    """Ordinal of the period by which half of the events have happened."""
    if rows.event_weight == 0.0:
        raise UsageError("no events, so no median event period")
    running = np.cumsum(rows.by_period()[1])
    return rows.first_period + int(np.searchsorted(running, 0.5 * running[-1], side="left"))


def estimable(sides: tuple[FitRows, ...]) -> Flags:
    """(k,) coefficients that every side can estimate: levels with events and survivors, columns of full rank."""
    design = sides[0].fit.design
    indicator = design.indicators()
    constant = np.ones(design.k, dtype=bool)
    for index in design.index.values():
        constant &= index < 0
    free = np.ones(design.k, dtype=bool)
    for side in sides:
        at_risk, events, information = _column_sums(side)
        free &= ~(indicator & ((events <= 0.0) | (events >= at_risk)))
        at = np.flatnonzero(free)
        place = np.flatnonzero(constant[at])
        found = dependent_columns(information[np.ix_(at, at)], constant=int(place[0]) if place.size else None)
        free[[at[column] for column, _ in found]] = False
    return free


def _column_sums(side: FitRows) -> tuple[Floats, Floats, Floats]:
    """Weighted column sums over rows and over events, each (k,), and the information (k, k) by p (1 - p)."""
    rows, events, information = np.zeros(side.k), np.zeros(side.k), np.zeros((side.k, side.k))
    for block in side.blocks():
        rows += block.x.T @ block.weight
        events += block.x.T @ (block.weight * block.event)
        information += block.x.T @ (block.x * block.variance[:, None])
    return rows, events, information


def _table(fit: HazardFit, free: Flags, before: Refit, after: Refit) -> pd.DataFrame:
    k = fit.design.k
    base, nothing = np.array(fit.coefficients), np.full(k, np.nan)

    def spread(values: Floats, otherwise: Floats) -> Floats:
        out = otherwise.copy()
        out[free] = values
        return out

    se = [np.sqrt(np.maximum(np.diag(p.covariance), np.diag(p.model))) for p in (before, after)]
    difference = after.params - before.params
    z = difference / np.hypot(*se)
    degrees = min(before.periods, after.periods) - 1
    return pd.DataFrame(
        {
            "cause": fit.cause,
            "term": list(fit.design.labels),
            "macro": fit.design.index["feature"] >= 0,
            "before": spread(before.params, base),
            "se_before": spread(se[0], nothing),
            "after": spread(after.params, base),
            "se_after": spread(se[1], nothing),
            "difference": spread(difference, np.zeros(k)),
            "z": spread(z, nothing),
            "p_value": spread(2.0 * stats.t.sf(np.abs(z), degrees), nothing),
            "joint_p": _joint(fit, free, before, after),
            "held": ~free,
            "events_before": before.events,
            "events_after": after.events,
            "periods_before": before.periods,
            "periods_after": after.periods,
        }
    )


def _joint(fit: HazardFit, free: Flags, before: Refit, after: Refit) -> float:
    """p-value of no change in any coefficient with a macro feature."""
    at = np.flatnonzero((fit.design.index["feature"] >= 0)[free])
    degrees = min(before.periods, after.periods) - 1
    rest = degrees - at.size + 1
    if at.size == 0 or rest <= 0:
        return float("nan")
    gap = (after.params - before.params)[at]
    pick = np.ix_(at, at)
    both = (before.covariance + after.covariance, before.model + after.model)
    try:
        w = min(float(gap @ solve_scaled(c[pick], gap)) for c in both)
    except np.linalg.LinAlgError:
        # Fewer periods than macro coefficients on a side: the clustered covariance has no inverse.
        return float("nan")
    return float(stats.f.sf(w * rest / (at.size * degrees), at.size, rest))
