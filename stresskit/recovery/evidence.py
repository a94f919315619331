"""What a validator asks about recoveries: how open workouts were treated, what that changed, and whether it predicts."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.core.period import Frequency
from stresskit.recovery.cases import CURE, KINDS, OPEN, Workouts
from stresskit.recovery.curves import RecoveryCurve, recovery_curve

Floats = NDArray[np.float64]


def resolved_by_year(w: Workouts) -> pd.DataFrame:
    """A row per default year: cases and amounts, closed shares, cases by kind, amount recovered and still owed."""
    year, left = w.default_year, w.unrecovered()
    rest = left[np.arange(w.n_cases), w.observed]
    rows = []
    for y in np.unique(year):
        here = year == y
        amount = float(w.amount[here].sum())
        closed = here & (w.kind != OPEN)
        rows.append(
            {
                "default_year": int(y),
                "cases": int(here.sum()),
                "amount": amount,
                "closed_share_cases": float(closed.sum() / here.sum()),
                "closed_share_amount": float(w.amount[closed].sum() / amount),
                **{name: int((here & (w.kind == k)).sum()) for k, name in enumerate(KINDS)},
                "recovered_share": float(w.recovered[here].sum() / amount),
                "still_owed_open_share": float(rest[here & (w.kind == OPEN)].sum() / amount),
            }
        )
    return pd.DataFrame(rows)


def treatments(w: Workouts, curve: RecoveryCurve) -> pd.DataFrame:
    """LGD of one set of cases under three treatments, ours first, with the difference to ours.

    all cases, open ones censored   the curve
    closed cases only               loss over amount, open cases dropped
    open cases as finished          what open cases still owe counts as lost
    """
    left = w.unrecovered()
    rest = left[np.arange(w.n_cases), w.observed]
    cured = (w.kind == CURE) & (w.closed > 0)
    loss = np.where(cured, curve.cure_loss * rest, rest)
    closed = w.kind != OPEN
    only = float(loss[closed].sum() / w.amount[closed].sum()) if closed.any() else float("nan")
    rows = [
        ("all cases, open ones censored", curve.lgd, w.n_cases),
        ("closed cases only", only, int(closed.sum())),
        ("open cases as finished", float(loss.sum() / w.amount.sum()), w.n_cases),
    ]
    table = pd.DataFrame(rows, columns=["treatment", "lgd", "cases"])
    table["against_ours"] = table["lgd"] / curve.lgd - 1.0 if curve.lgd > 0 else np.nan
    return table


def triangle(w: Workouts) -> pd.DataFrame:
    """Cumulative recovered share of the amount at default: default year x workout year, as far as every case was observed.

    Columns default_year, workout_year, cases, amount, recovered_share. A cell stands only where all cases of the
    default year have been under observation for the whole workout year.
    """
    k, year = w.frequency.per_year, w.default_year
    rows = []
    for y in np.unique(year):
        here = year == y
        amount, observed = float(w.amount[here].sum()), w.observed[here]
        for j in range(1, -(-w.end // k) + 1):
            upto = min(j * k, w.end)
            if (observed < upto).any():
                break
            share = float(w.recovered[here, :upto].sum() / amount)
            rows.append((int(y), j, int(here.sum()), amount, share))
    return pd.DataFrame(rows, columns=["default_year", "workout_year", "cases", "amount", "recovered_share"])


def hold_out(w: Workouts, *, cure_loss: float, support: int, years: int = 5) -> pd.DataFrame:
    """Predicted against realised share still owed, for default years held out with the information of that date only.

    For each of the last ``years`` default years y: a curve from what was known at the end of y, for cases that
    defaulted before y; against the same share of the cases of y, product limit to the last workout period in which all of them
    are observed. Years without cases before them are left out, and counted by nobody else.
    """
    k = w.frequency.per_year
    rows = []
    for y in np.unique(w.default_year)[-years:]:
        cohort = w.select(w.default_year == int(y))
        upto = int(cohort.observed.min())
        known_until = _last_of(int(y), w.frequency)
        before = w.select(w.default_year < int(y))
        if upto < k or known_until >= w.until or before.n_cases == 0:
            continue
        past = before.known_at(known_until)
        if past.n_cases == 0:
            continue
        try:
            predicted = recovery_curve(past, cure_loss=cure_loss, support=support)
        except NumericError:
            continue
        realised = recovery_curve(cohort, cure_loss=cure_loss)
        at = min(upto, predicted.last_supported)
        rows.append(
            {
                "default_year": int(y),
                "cases": cohort.n_cases,
                "cases_known": past.n_cases,
                "workout_periods": at,
                "predicted_unresolved": float(predicted.unresolved[at]),
                "realised_unresolved": float(realised.unresolved[at]),
                "difference": float(realised.unresolved[at] - predicted.unresolved[at]),
            }
        )
    columns = [
        "default_year",
        "cases",
        "cases_known",
        "workout_periods",
        "predicted_unresolved",
        "realised_unresolved",
        "difference",
    ]
    return pd.DataFrame(rows, columns=columns)


def worst_years(w: Workouts, curve: RecoveryCurve, *, years: int = 2, least_cases: int = 20) -> pd.DataFrame:
    """The default years with the highest LGD: a downturn beside the long-run average.

    One row per year with at least ``least_cases`` cases that were all observed for a year, worst first, ``years`` of them. What
    a year has not been observed for is completed by ``curve``, the one of all cases: LGD = S_y(u) * (loss rate from u on).
    """
    k = w.frequency.per_year
    rows = []
    for y in np.unique(w.default_year):
        cohort = w.select(w.default_year == int(y))
        upto = int(cohort.observed.min())
        if cohort.n_cases < least_cases or upto < min(k, w.end):
            continue
        own = recovery_curve(cohort, cure_loss=curve.cure_loss)
        rest = curve.loss_rate_from(upto)
        rest = 0.0 if np.isnan(rest) else rest
        lgd = own.unresolved[upto] * rest + curve.cure_loss * own.cured_share[upto]
        rows.append((int(y), cohort.n_cases, float(lgd), upto))
    table = pd.DataFrame(rows, columns=["default_year", "cases", "lgd", "observed_periods"])
    return (
        table.sort_values(["lgd", "default_year"], ascending=[False, True]).head(years).reset_index(drop=True)
    )


def long_run_average(w: Workouts, curve: RecoveryCurve) -> float:
    """Mean over default years of the curve's kind of LGD, each year counting alike, years observed for the whole workout only.

    NaN when no default year has been observed to the end of workout.
    """
    values = []
    for y in np.unique(w.default_year):
        cohort = w.select(w.default_year == int(y))
        if int(cohort.observed.min()) >= w.end:
            values.append(recovery_curve(cohort, cure_loss=curve.cure_loss).lgd)
    return float(np.mean(values)) if values else float("nan")


def _last_of(year: int, frequency: Frequency) -> int:
    return year * frequency.per_year + frequency.per_year - 1
