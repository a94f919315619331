"""Product-limit curve of a cause against the fitted average survival of the same loans on the same risk sets."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import stats

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.groups import Grouped, by_age, by_period, period_columns, shock_variance, tally
from stresskit.evidence.rows import FitRows, fit_rows
from stresskit.hazard.curves import product_limit
from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]

#: Loans that must be at risk at every age of the comparison.
MINIMUM_AT_RISK = 30.0
#: 95 % simultaneous critical value of an equal-precision band over the middle 90 % of a curve's
#: information (Nair 1984, Technometrics 26): the root x of
#: 4 phi(x)/x + phi(x) (x - 1/x) log(0.95^2 / 0.05^2) = 0.05.
SIMULTANEOUS = 3.15


def survival_against_fit(
    fit: HazardFit,
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    minimum_at_risk: float = MINIMUM_AT_RISK,
) -> pd.DataFrame:
    """cause, age, at_risk, events, observed, lower, upper, fitted, gap, z_binomial, z_shock: a row per age.

    observed   product limit of the cause, other exits as censoring, late entry, conditional on being
               alive at the first age from which ``minimum_at_risk`` are at risk; ends where fewer are
    fitted     product over ages of 1 - (mean fitted hazard of the loans at risk at that age): the same
               loans enter and leave, so late entry and censoring touch both curves alike
    gap        observed - fitted
    z          (log observed - log fitted) / sd; binomial: Greenwood's; shock: with the periods' shocks;
               NaN where a curve is at 0 or no event has been seen yet

    Raises NumericError when no age has ``minimum_at_risk`` loans.
    """
    rows = fit_rows(fit, risk_set, features)
    groups = tally(rows, [by_period(rows), by_age(rows)]).groups
    shock = shock_variance(groups["period"], period_columns(rows))
    return survival_table(rows, groups["age"], shock, minimum_at_risk=minimum_at_risk)


def survival_table(
    rows: FitRows, age: Grouped, shock: float, *, minimum_at_risk: float = MINIMUM_AT_RISK
) -> pd.DataFrame:
    """The table of :func:`survival_against_fit` from the sums by single ages."""
    condition, use = supported(np.array([int(a) for a in age.labels]), age.at_risk, minimum_at_risk)
    r = rows.rows
    ages = np.array([int(a) for a in age.labels])[use]
    curve = product_limit(r.entry, r.exit, r.event, condition_on=float(condition), weight=r.weight)
    n, d, e = age.at_risk[use], age.events[use], age.expected[use]
    observed = curve.at(ages)["survival"].to_numpy()
    fitted = np.cumprod(1.0 - e / n)
    with np.errstate(divide="ignore", invalid="ignore"):
        greenwood = np.cumsum(d / (n * (n - d)))
        # d log(1 - e/n): a shock of a period moves all its hazards by the same share.
        shares = np.cumsum(age.expected_by_period[use] / (n - e)[:, None], axis=0)
        both = greenwood + shock * (shares**2).sum(axis=1)
        log_gap = np.log(observed) - np.log(fitted)
        half = stats.norm.ppf(0.975) * np.sqrt(greenwood) / np.log(observed)
        lower, upper = observed ** np.exp(-half), observed ** np.exp(half)
        z_binomial, z_shock = log_gap / np.sqrt(greenwood), log_gap / np.sqrt(both)
    none_yet = np.cumsum(d) == 0.0
    no_interval = none_yet | ~(observed > 0.0)
    unknown = no_interval | ~(fitted > 0.0)
    return pd.DataFrame(
        {
            "cause": rows.fit.cause,
            "age": ages,
            "at_risk": n,
            "events": d,
            "observed": observed,
            "lower": np.where(no_interval, np.nan, np.minimum(lower, upper)),
            "upper": np.where(no_interval, np.nan, np.maximum(lower, upper)),
            "fitted": fitted,
            "gap": observed - fitted,
            "z_binomial": np.where(unknown, np.nan, z_binomial),
            "z_shock": np.where(unknown, np.nan, z_shock),
        }
    )


def supported(ages: NDArray[np.int64], at_risk: Floats, minimum: float) -> tuple[int, NDArray[np.intp]]:
    """(age to be alive at, positions of the ages compared): an unbroken run of ages around the largest risk set."""
    peak = int(np.argmax(at_risk))
    if at_risk[peak] < minimum:
        raise NumericError(f"at most {at_risk[peak]:g} loans are at risk at any age, fewer than {minimum:g}")
    enough = at_risk >= minimum
    first, last = peak, peak
    while first > 0 and enough[first - 1] and ages[first - 1] == ages[first] - 1:
        first -= 1
    while last + 1 < ages.size and enough[last + 1] and ages[last + 1] == ages[last] + 1:
        last += 1
    return int(ages[first]) - 1, np.arange(first, last + 1)


def middle(table: pd.DataFrame) -> pd.DataFrame:
    """Ages that hold the middle 90 % of the curve's events: where the simultaneous value applies."""
    share = table["events"].cumsum() / max(float(table["events"].sum()), 1.0)
    inside: pd.DataFrame = table[(share >= 0.05) & (share <= 0.95)]
    return inside
