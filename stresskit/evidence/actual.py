"""Actual against expected events by calendar period, age, cohort and column, with bands and a total test."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.groups import (
    Grouped,
    Tally,
    by_age,
    by_cohort,
    by_column,
    by_period,
    by_prediction,
    equal_bands,
    period_columns,
    pooled,
    shock_variance,
    tally,
)
from stresskit.evidence.rows import FitRows, estimated_covariance, fit_rows
from stresskit.hazard.diagnostics import jeffreys
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]

#: Groups with fewer expected events are pooled before the total test (Cochran 1954's rule of five).
MINIMUM_EXPECTED = 5.0
AGE_BANDS = 10
#: Labels of groups left out that a note names.
_NAMED = 3
#: A direction whose variance is below this share of its binomial variance is fitted: nothing is left to test.
_RANK = 0.01


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """table: a row per group; totals: a row per grouping; shock_sd: sd of a period's common relative shock.

    no_shock  why ``shock_sd`` is NaN; "" where it is not
    """

    table: pd.DataFrame
    totals: pd.DataFrame
    shock_sd: float
    no_shock: str = ""


def compare(
    fit: HazardFit, risk_set: RiskSet, features: FeatureTable | None = None, *, columns: Sequence[str] = ()
) -> Comparison:
    """Actual against expected by period, age band, cohort, tenth of the prediction and static columns.

    The risk set is the one that the fit was estimated on: the total tests allow for that.

    table   cause, by, group, at_risk, events, expected, ratio, actual_rate, lower, upper, fitted_rate,
            z_binomial, z_shock, low_events, high_events, note
            lower, upper: 95 % Jeffreys interval of actual_rate; low_events, high_events: 95 % band of
            the expected events with the shocks of periods in it; z: (events - expected) / sd, alone
            binomial and with shocks; note: why z is NaN, where a group has no variance, else ""
    totals  cause, by, groups, pooled_to, chi2, df, p_value, f, f_df1, f_df2, p_clustered, contradicted, note,
            shock_sd; see :func:`total_test`
    """
    rows = fit_rows(fit, risk_set, features)
    return comparison(rows, period_tally(rows, columns))


def period_tally(rows: FitRows, columns: Sequence[str] = ()) -> Tally:
    """The sums that :func:`comparison` and the survival and residual tables read."""
    groupings = [by_period(rows), by_age(rows), by_cohort(rows), by_prediction(rows)]
    groupings += [by_column(rows, name) for name in dict.fromkeys(columns)]
    return tally(rows, groupings)


def comparison(rows: FitRows, sums: Tally) -> Comparison:
    """The tables of :func:`compare` from sums already made."""
    no_shock = ""
    try:
        shock = shock_variance(sums.groups["period"], period_columns(rows))
    except NumericError as error:
        shock, no_shock = float("nan"), str(error)
    tables, totals = [], []
    for by, grouped in sums.groups.items():
        shown = equal_bands(grouped, AGE_BANDS) if by == "age" else grouped
        tables.append(_table(shown, shock))
        totals.append(total_test(rows, sums, shown) | {"shock_sd": np.sqrt(shock)})
    table, total = pd.concat(tables, ignore_index=True), pd.DataFrame(totals)
    table.insert(0, "cause", rows.fit.cause)
    total.insert(0, "cause", rows.fit.cause)
    return Comparison(table, total, float(np.sqrt(shock)), no_shock)


def _table(g: Grouped, shock: float) -> pd.DataFrame:
    lower, upper = jeffreys(g.events, g.at_risk)
    with_shocks = np.sqrt(g.variance + shock * (g.expected_by_period**2).sum(axis=1))
    # Hazards that a shock multiplies leave a certain event certain, so it has no band either.
    half = np.where(g.certain, 0.0, stats.norm.ppf(0.975) * with_shocks)
    gap = g.events - g.expected
    return pd.DataFrame(
        {
            "by": g.by,
            "group": list(g.labels),
            "at_risk": g.at_risk,
            "events": g.events,
            "expected": g.expected,
            "ratio": _ratio(g.events, g.expected, g.expected > 0.0),
            "actual_rate": g.events / g.at_risk,
            "lower": lower,
            "upper": upper,
            "fitted_rate": g.expected / g.at_risk,
            "z_binomial": _ratio(gap, np.sqrt(g.variance), ~g.certain),
            "z_shock": _ratio(gap, with_shocks, ~g.certain),
            "low_events": np.maximum(g.expected - half, 0.0),
            "high_events": g.expected + half,
            "note": [_why(certain, wrong) for certain, wrong in zip(g.certain, g.contradicted, strict=True)],
        }
    )


def _ratio(above: Floats, below: Floats, where: NDArray[np.bool_]) -> Floats:
    return np.asarray(np.divide(above, below, out=np.full(above.shape, np.nan), where=where))


def _why(certain: bool, wrong: bool) -> str:
    if not certain:
        return ""
    return "no variance: the fit is certain of every row" + (", and wrong" if wrong else "")


def total_test(rows: FitRows, sums: Tally, grouped: Grouped) -> dict[str, object]:
    """Do the groups' events differ from those expected by more than chance?

    chi2, df, p_value    r' C^- r, r = events - expected and C = V - A I^-1 A' its covariance once the
        coefficients are estimated (A = d expected / d coefficients, I the expected information), chi-square
        with df = rank of C (Tsiatis 1980, Biometrika 67). With the logit it is Rao's score test of a level
        per group. Loan-periods independent. df = 0: the fit already has a level for every group.
    f, f_df1, f_df2, p_clustered    The same r against its spread between calendar periods: per period
        D_t = r_t - A H^-1 score_t, S = sum D_t D_t', Hotelling's T2 = (T - 1) q / (T - q), with
        q = r' S^- r, as an F of (df, T - df). NaN for groups that are periods, and where there
        are fewer than 4 periods per degree of freedom.

    contradicted, note    Groups without variance have nothing to test: they are left out and named in ``note``.
        contradicted: how many of them have other events than those expected, which the fit holds impossible.

    Groups with fewer than MINIMUM_EXPECTED expected events are pooled first.
    """
    left = {"contradicted": int(grouped.contradicted.sum()), "note": _left_out(grouped)}
    if grouped.certain.all():
        nothing = dict.fromkeys(("p_value", "f", "f_df1", "f_df2", "p_clustered"), np.nan)
        return (
            {"by": grouped.by, "groups": len(grouped.labels), "pooled_to": 0, "chi2": 0.0, "df": 0}
            | nothing
            | left
        )
    g = pooled(grouped.uncertain(), MINIMUM_EXPECTED)
    r = g.events - g.expected
    fit = rows.fit
    information = estimated_covariance(fit, "model_expected")
    c = np.diag(g.variance) - g.jacobian @ information @ g.jacobian.T
    scale = np.sqrt(g.variance)
    value, vector = np.linalg.eigh(c / np.outer(scale, scale))
    kept = value > _RANK
    df = int(kept.sum())
    direction = vector[:, kept] / scale[:, None]
    part = direction.T @ r
    chi2 = float((part**2 / value[kept]).sum())
    out: dict[str, object] = {
        "by": g.by,
        "groups": len(grouped.labels),
        "pooled_to": len(g.labels),
        "chi2": chi2,
        "df": df,
        "p_value": float(stats.chi2.sf(chi2, df)) if df else np.nan,
    }
    return out | _clustered(rows, sums, g, direction) | left


def _left_out(g: Grouped) -> str:
    """Names the groups that have no variance; "" where every group has some."""
    names = [g.labels[i] for i in np.flatnonzero(g.certain)]
    if not names:
        return ""
    rest = f" and {len(names) - _NAMED} more" if len(names) > _NAMED else ""
    return f"left out for want of variance: {', '.join(names[:_NAMED])}{rest}"


def _clustered(rows: FitRows, sums: Tally, g: Grouped, direction: Floats) -> dict[str, object]:
    t, df = sums.n_periods, direction.shape[1]
    empty: dict[str, object] = {"f": np.nan, "f_df1": np.nan, "f_df2": np.nan, "p_clustered": np.nan}
    if g.by == "period" or df == 0 or t < 4 * df:
        return empty
    bread = estimated_covariance(rows.fit, "model_observed")
    moved = g.residual_by_period - g.jacobian @ bread @ sums.scores.T
    d = direction.T @ moved
    total = d.sum(axis=1)
    # A direction that one period fills tells nothing about spread: pinv leaves it out, and its df with it.
    spread = d @ d.T
    rank = int(np.linalg.matrix_rank(spread, hermitian=True))
    q = float(total @ np.linalg.pinv(spread, hermitian=True) @ total)
    if rank == 0 or t <= rank or q >= t:
        return empty
    f = (t - rank) / rank * q / (t - q)
    return {"f": f, "f_df1": rank, "f_df2": t - rank, "p_clustered": float(stats.f.sf(f, rank, t - rank))}
