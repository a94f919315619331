"""The table of responses: what each fitted hazard makes of each macro feature, over the range it was estimated on."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.values import Portfolio
from stresskit.hazard.covariance import known_kind
from stresskit.hazard.macro_response import macro_response
from stresskit.hazard.result import HazardFit

#: Values of a feature at which the response is taken, those of note besides.
POINTS = 41
#: exp of more is beyond the largest double.
_LARGEST = float(np.log(np.finfo(np.float64).max))
COLUMNS = (
    "cause", "feature", "link", "over", "reference", "lowest", "highest", "value", "factor", "lower", "upper", "least", "most",
)  # fmt: skip


def response_table(
    fits: Mapping[str, HazardFit], portfolio: Portfolio, features: pd.DataFrame, *, of_loans: frozenset[str]
) -> pd.DataFrame:
    """A row per cause, feature and value of it, in the order of the fits; see ``COLUMNS``.

    features  the feature table of the result: its last observed values are the reference, and the scenarios' values are
              reached too where they leave the range of estimation
    of_loans  causes whose loans are those of the portfolio; of other causes the case at every reference level is taken

    factor, lower, upper   on the hazard (cloglog) or its odds (logit) of the average loan, with its 95% interval (NaN where
                           the fit withholds it); least, most: over loans. What is beyond the largest double is infinite
    """
    observed = features[(features["scenario"] == "history") & features["value"].notna()]
    at = {str(name): float(rows["value"].iloc[-1]) for name, rows in observed.groupby("feature", sort=False)}
    rows: list[pd.DataFrame] = []
    for cause, fit in fits.items():
        names = fit.feature_names
        if not names or any(name not in at for name in names):
            continue
        ours = cause in of_loans
        u = None
        if ours and _meets_loans(fit):
            u = fit.loan_part(portfolio.static, portfolio.n_loans).U
        age = middle_age(portfolio) if ours else 1
        for name in names:
            low, high = fit.feature_ranges[name]
            ahead = (features["feature"] == name) & (features["scenario"] != "history")
            values = _grid(features.loc[ahead, "value"], low, high, at[name])
            found = macro_response(fit, name, values, at=at, age=max(1, age), loans=u, counts=portfolio.count)
            half = fit.covariances.quantile(known_kind(fit.covariance_kind), 0.975) * found.se
            logs = (found.mean, found.mean - half, found.mean + half, found.least, found.most)
            over = "book" if u is not None else "any" if ours else "reference"
            facts = (cause, name, fit.spec.link, over, at[name], low, high)
            parts = dict(zip(COLUMNS[:7], facts, strict=True)) | {"value": values}
            parts |= dict(zip(COLUMNS[8:], (_factor(x) for x in logs), strict=True))
            rows.append(pd.DataFrame(parts))
    return pd.concat(rows, ignore_index=True) if rows else pd.DataFrame(columns=list(COLUMNS))


def _factor(log: NDArray[np.float64]) -> NDArray[np.float64]:
    """e^log, infinite where no double holds it; NaN stays."""
    return np.where(log > _LARGEST, np.inf, np.exp(np.minimum(log, _LARGEST)))


def middle_age(portfolio: Portfolio) -> int:
    """The median age of the loans, in whole periods."""
    if portfolio.count is None:
        return int(np.median(portfolio.age))
    order = np.argsort(portfolio.age, kind="stable")
    ages, below = portfolio.age[order], np.cumsum(portfolio.count[order])
    half = 0.5 * below[-1]
    low, high = np.searchsorted(below, half, "left"), np.searchsorted(below, half, "right")
    return int(0.5 * (ages[low] + ages[min(int(high), ages.size - 1)]))


def _meets_loans(fit: HazardFit) -> bool:
    """Whether some macro feature acts on loans in different ways: in a product with a loan column, or by one."""
    index = fit.design.index
    crossed = (index["loan"] >= 0) & (index["feature"] >= 0)
    return bool(crossed.any() or fit.design.keyed_columns().any())


def _grid(reached: pd.Series, low: float, high: float, at: float) -> NDArray[np.float64]:
    """Evenly from the lowest to the highest value of interest, with both ends of the range and the reference among them."""
    ends = [float(reached.min()), float(reached.max()), low, high, at]
    return np.unique(np.concatenate([np.linspace(min(ends), max(ends), POINTS), [low, high, at]]))
