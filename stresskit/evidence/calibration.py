"""Calibration: predicted against actual on rows that the coefficients may not have seen."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.groups import predictor_quantiles
from stresskit.evidence.rows import (
    FitRows,
    estimated_covariance,
    fit_rows,
    survives_the_certain,
    within_reach,
)
from stresskit.hazard.diagnostics import jeffreys
from stresskit.hazard.link import Link
from stresskit.hazard.result import HazardFit
from stresskit.kernels.linalg import inverse_scaled, solve_scaled

Floats = NDArray[np.float64]

_ITERATIONS = 50
_HALVINGS = 30


@dataclass(frozen=True, slots=True, eq=False)
class _Seen:
    """Every row's linear predictor less its mean ``centre``, event, weight and period (25 bytes a row).

    column_sums  (2, k) sum of information * (1, eta)' * design row: how a refit moves with the fit's coefficients
    """

    centre: float
    eta: Floats
    event: NDArray[np.bool_]
    weight: Floats
    period: NDArray[np.int64]
    column_sums: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _Point:
    """Log-likelihood; score by row (n, f) and observed information (f, f) of the free coefficients."""

    llf: float
    scores: Floats
    information: Floats


@dataclass(frozen=True, slots=True, eq=False)
class _Refit:
    """params (2,) on the centred predictor, less the ideal (0, 1).

    model and period-clustered covariance (f, f) of the free ones, NaN with one period
    """

    params: Floats
    model: Floats
    clustered: Floats


def calibration(fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None) -> pd.DataFrame:
    """Refit of g(p) = intercept + slope * eta on the fit's own predictor and link (Cox 1958, Biometrika 45).

    Rows: ``intercept`` and ``slope`` estimated together, and ``level``, the intercept with the slope kept at
    1 (calibration in the large). Columns cause, term, ideal, estimate, se, se_period, se_fit, lower,
    upper, p_value, joint_p, events, expected, periods.

    se: model, observed information; se_period: clustered by period; se_fit: what the error of the fit's own
    coefficients adds, as they were estimated on other rows (delta method, the fit's covariance by model or
    by period, whichever is larger). Interval and p_value take the larger of the first two together with
    the third, and t with periods - 1 degrees of freedom; joint_p: intercept and slope together,
    F(2, periods - 2). Slope below 1: predictions too far apart; level above 0: more events than
    expected. On the rows that the coefficients were estimated on the answer is 0 and 1 by construction.

    An error that cancels to below 0 in the sums is NaN, and what rests on it.

    Raises NumericError when there are no events, the predictions do not vary, or the refit has no finite answer.
    """
    rows = fit_rows(fit, risk_set, features)
    seen = _collect(rows)
    events = float((seen.weight * seen.event).sum())
    if events == 0.0:
        raise NumericError(f"no events of {fit.cause!r} on these rows, so nothing to calibrate against")
    t = int((np.bincount(seen.period) > 0).sum())
    both = _refit(seen, fit.link, np.array([True, True]))
    level = _refit(seen, fit.link, np.array([True, False]))
    ideal = np.array([0.0, 1.0, 0.0])
    # The predictor is centred, or intercept and slope are nearly the same direction: a = a0 - (b - 1) centre.
    back = np.array([[1.0, -seen.centre], [0.0, 1.0]])
    estimate = ideal + np.append(back @ both.params, level.params[0])
    own = [_from_fit(fit, part.model, seen.column_sums[: part.model.shape[0]]) for part in (both, level)]

    def errors(kind: tuple[Floats, Floats]) -> Floats:
        square = np.append(np.diag(back @ kind[0] @ back.T), kind[1][0, 0])
        return np.asarray(np.sqrt(np.where(square >= 0.0, square, np.nan)))

    model, period = errors((both.model, level.model)), errors((both.clustered, level.clustered))
    from_fit = errors((own[0], own[1]))
    used = np.hypot(np.fmax(model, period), from_fit)
    half = stats.t.ppf(0.975, max(t - 1, 1)) * used
    return pd.DataFrame(
        {
            "cause": fit.cause,
            "term": ["intercept", "slope", "level"],
            "ideal": ideal,
            "estimate": estimate,
            "se": model,
            "se_period": period,
            "se_fit": from_fit,
            "lower": estimate - half,
            "upper": estimate + half,
            "p_value": 2.0 * stats.t.sf(np.abs((estimate - ideal) / used), max(t - 1, 1)),
            "joint_p": _joint(both, own[0], t),
            "events": events,
            "expected": float((seen.weight * _probability(fit.link, seen.eta + seen.centre)).sum()),
            "periods": t,
        }
    )


def _from_fit(fit: HazardFit, bread: Floats, column_sums: Floats) -> Floats:
    """Covariance of the refit's coefficients that comes from those of the fit: G C G', G = bread Z'WX."""
    moves = bread @ column_sums
    kinds = [moves @ estimated_covariance(fit, kind) @ moves.T for kind in ("model_observed", "period")]
    known = [c for c in kinds if np.isfinite(c).all()]
    if not known:
        raise NumericError(
            "the covariance of the fit's own coefficients is not finite, so neither is the refit's"
        )
    return max(known, key=lambda c: float(np.trace(c)))


def _joint(both: _Refit, own: Floats, t: int) -> float:
    if t < 4:
        return float("nan")
    try:
        w = min(float(both.params @ solve_scaled(c + own, both.params)) for c in (both.model, both.clustered))
    except np.linalg.LinAlgError:
        return float("nan")
    # Hotelling: scores sum to 0 at the refit, so their spread has t - 1 degrees of freedom.
    return float(stats.f.sf(w * (t - 2.0) / (2.0 * (t - 1.0)), 2, t - 2))


def deciles(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None, *, bands: int = 10
) -> pd.DataFrame:
    """cause, band, at_risk, events, expected, predicted, actual, lower, upper: equal parts of the rows by prediction.

    lower, upper: 95 % Jeffreys interval of the actual rate.
    """
    rows = fit_rows(fit, risk_set, features)
    edges = predictor_quantiles(rows, bands)
    sums = np.zeros((3, edges.size + 1))
    for block in rows.blocks():
        code = np.searchsorted(edges, block.eta, side="right")
        for i, value in enumerate((block.weight, block.weight * block.event, block.weight * block.p)):
            sums[i] += np.bincount(code, weights=value, minlength=edges.size + 1)
    band = np.flatnonzero(sums[0] > 0.0)
    n, d, e = sums[:, band]
    lower, upper = jeffreys(d, n)
    return pd.DataFrame(
        {
            "cause": fit.cause,
            "band": band + 1,
            "at_risk": n,
            "events": d,
            "expected": e,
            "predicted": e / n,
            "actual": d / n,
            "lower": lower,
            "upper": upper,
        }
    )


def _collect(rows: FitRows) -> _Seen:
    parts, sums = [], np.zeros((2, rows.k))
    for b in rows.blocks():
        parts.append((b.eta, b.event, b.weight, b.period))
        information = b.weight * rows.fit.link.survive(within_reach(rows.fit.link, b.eta), "expected")[2]
        sums += np.stack([information, information * b.eta]) @ b.x
    eta, event, weight, period = (np.concatenate(column) for column in zip(*parts, strict=True))
    share = weight * _probability(rows.fit.link, eta)
    if not share.sum() > 0.0:
        raise NumericError(f"no event of {rows.fit.cause!r} is expected on these rows: every prediction is 0")
    centre = float(np.average(eta, weights=share))
    sums[1] -= centre * sums[0]
    return _Seen(centre, eta - centre, event, weight, period, sums)


def _probability(link: Link, eta: Floats) -> Floats:
    return link.probability(within_reach(link, eta))


def _refit(seen: _Seen, link: Link, free: NDArray[np.bool_]) -> _Refit:
    """Newton with step halving from the ideal in the free coefficients."""
    params = np.zeros(2)
    point = _evaluate(seen, link, params, free)
    if not np.isfinite(point.llf):
        raise NumericError(
            "a row without event has a predicted probability of 1, so its log-likelihood is not finite and there is no refit"
        )
    for _ in range(_ITERATIONS):
        try:
            step = solve_scaled(point.information, point.scores.sum(axis=0))
        except np.linalg.LinAlgError:
            raise NumericError(_no_inverse(seen)) from None
        if np.abs(step).max() < 1e-9:
            return _finished(seen, params, point)
        params, point = _halving(seen, link, params, free, step, point)
    raise NumericError(
        f"the calibration refit did not converge in {_ITERATIONS} iterations (slope {1.0 + params[1]:.3g})"
    )


def _halving(
    seen: _Seen, link: Link, params: Floats, free: NDArray[np.bool_], step: Floats, point: _Point
) -> tuple[Floats, _Point]:
    for _ in range(_HALVINGS):
        trial = params.copy()
        trial[free] += step
        following = _evaluate(seen, link, trial, free)
        if following.llf >= point.llf - 1e-12 * abs(point.llf):
            return trial, following
        step = 0.5 * step
    raise NumericError(
        f"the calibration refit found no step that improves its log-likelihood in {_HALVINGS} halvings "
        f"(slope {1.0 + params[1]:.3g}): too many predictions are certain to tell level and slope"
    )


def _no_inverse(seen: _Seen) -> str:
    if np.ptp(seen.eta) > 1e-9 * max(1.0, abs(seen.centre)):
        return "too many predictions are certain to tell level and slope, so a calibration has no estimate"
    return "the predictions do not vary, so a calibration slope has no estimate"


def _finished(seen: _Seen, params: Floats, point: _Point) -> _Refit:
    bread = inverse_scaled(point.information)
    by_period = np.column_stack([np.bincount(seen.period, weights=s) for s in point.scores.T])
    t = int((np.bincount(seen.period) > 0).sum())
    clustered = np.full_like(bread, np.nan)
    if t > 1:
        clustered = t / (t - 1.0) * bread @ (by_period.T @ by_period) @ bread
    return _Refit(params, bread, clustered)


def _evaluate(seen: _Seen, link: Link, params: Floats, free: NDArray[np.bool_]) -> _Point:
    eta = seen.centre + params[0] + (1.0 + params[1]) * seen.eta
    if survives_the_certain(link, eta, seen.event):
        return _Point(-np.inf, np.empty((0, 0)), np.empty((0, 0)))
    loglik, score, info = link.survive(eta, "observed")
    at = np.flatnonzero(seen.event)
    loglik[at], score[at], info[at] = link.event(within_reach(link, eta[at]), "observed")
    w = seen.weight
    x = np.column_stack([np.ones_like(eta), seen.eta])[:, free]
    return _Point(float(w @ loglik), x * (w * score)[:, None], x.T @ (x * (w * info)[:, None]))
