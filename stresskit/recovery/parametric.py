"""Weibull and log-logistic recovery times (lifelines), and Cox as a comparison: amounts grouped by workout period.

Recovery in workout period u is known to lie in (u - 1, u]; what is still owed when observation ends is right-censored
there. The likelihood of such grouped data is that of the interval-censored units of currency (Lawless 2003, ch. 3.5).
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
import pandas as pd
from lifelines import CoxPHFitter, LogLogisticFitter, WeibullFitter
from numpy.typing import NDArray

from stresskit.core.errors import NumericError, UsageError
from stresskit.recovery.cases import Workouts
from stresskit.recovery.regression import RECOVERED, risk_set_of

Floats = NDArray[np.float64]

#: A right-censored unit's upper end.
_NEVER = np.inf


@dataclass(frozen=True, slots=True)
class ParametricCurve:
    """A parametric curve of the share still owed.

    family      "weibull" (S = exp(-(u/scale)^shape)) or "loglogistic" (S = 1 / (1 + (u/scale)^shape))
    unresolved  (U + 1,) S(0) = 1, .. S(U)
    """

    family: str
    scale: float
    shape: float
    unresolved: Floats

    @property
    def lgd(self) -> float:
        return float(self.unresolved[-1])


def parametric_curve(w: Workouts, family: str) -> ParametricCurve:
    """Maximum likelihood over amounts; cures leave as censored. Raises UsageError, NumericError."""
    fitters = {"weibull": WeibullFitter, "loglogistic": LogLogisticFitter}
    if family not in fitters:
        raise UsageError(f"family is weibull or loglogistic, not {family!r}")
    lower, upper, weight = grouped_units(w)
    if not np.isfinite(upper).any():
        raise NumericError("nothing has been recovered, so there is no recovery time to fit")
    with warnings.catch_warnings():
        # The fitter takes weights that are no whole numbers for probability weights and warns; they are amounts.
        warnings.simplefilter("ignore")
        fitter = fitters[family]().fit_interval_censoring(lower, upper, weights=weight)
    scale = float(fitter.lambda_ if family == "weibull" else fitter.alpha_)
    shape = float(fitter.rho_ if family == "weibull" else fitter.beta_)
    time = np.arange(w.end + 1, dtype=np.float64)
    ratio = (time / scale) ** shape
    return ParametricCurve(
        family, scale, shape, np.exp(-ratio) if family == "weibull" else 1.0 / (1.0 + ratio)
    )


def grouped_units(w: Workouts) -> tuple[Floats, Floats, Floats]:
    """(lower, upper, weight) of units of currency by the interval in which they were recovered; upper inf: censored."""
    stays = risk_set_of(w)
    hit = stays.stay_cause == stays.causes.index(RECOVERED) + 1
    lower = np.where(hit, stays.stay_exit - 1, stays.stay_exit).astype(np.float64)
    upper = np.where(hit, stays.stay_exit, _NEVER).astype(np.float64)
    pairs, code = np.unique(np.column_stack([lower, upper]), axis=0, return_inverse=True)
    weight = np.bincount(np.ravel(code), weights=stays.weight, minlength=pairs.shape[0]).astype(np.float64)
    return pairs[:, 0], pairs[:, 1], weight


def cox_table(w: Workouts, columns: tuple[str, ...]) -> pd.DataFrame:
    """Cox proportional hazards (Efron ties) of recovery on static case columns, amounts as weights, errors clustered by case.

    Columns term, coef, se. A comparison for the discrete fit, whose cloglog coefficients mean the same thing.
    Numbers enter as they are, text by its levels, the most frequent one left out. Raises UsageError.
    """
    missing = [c for c in columns if c not in w.static]
    if missing or not columns:
        raise UsageError(
            f"no case column {', '.join(map(repr, missing)) or '(none named)'}; there are {', '.join(w.static)}"
        )
    stays = risk_set_of(w)
    frame = pd.DataFrame(
        {
            "time": stays.stay_exit.astype(np.float64),
            "event": (stays.stay_cause == 1).astype(np.int64),
            "weight": stays.weight,
            "case": stays.stay_loan,
        }
    )
    terms = []
    for name in columns:
        values = w.static[name][stays.stay_loan]
        if values.dtype != object:
            frame[name] = values.astype(np.float64)
            terms.append(name)
            continue
        levels, count = np.unique(w.static[name].astype(str), return_counts=True)
        for level in np.delete(levels, int(count.argmax())):
            frame[f"{name}[{level}]"] = (values == level).astype(np.float64)
            terms.append(f"{name}[{level}]")
    fitter = CoxPHFitter()
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # weights that are no whole numbers; here they are amounts
        fitter.fit(frame, "time", "event", weights_col="weight", cluster_col="case", robust=True)
    return pd.DataFrame(
        {
            "term": terms,
            "coef": fitter.params_[terms].to_numpy(),
            "se": fitter.standard_errors_[terms].to_numpy(),
        }
    )
