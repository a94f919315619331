"""Tails of the age baseline: grouped Weibull and log-logistic hazards beyond the last supported age.

A tail's cumulative hazard H(a), for a case whose other terms are at their mean over the tail's rows:

    weibull      H(a) = (a / scale)^shape                   hazard rises for shape > 1, falls for shape < 1
    loglogistic  H(a) = ln(1 + (a / scale)^shape)           hazard (shape/scale)(a/scale)^(shape-1) /
                                                            (1 + (a/scale)^shape): falls in the end, as 1/a

Ages are whole periods, so a period's hazard is L(a) = H(a) - H(a - 1) exactly (Prentice and Gloeckler
1978, Biometrics 34; Kalbfleisch and Prentice 2002, The Statistical Analysis of Failure Time Data, 2.4.2;
the two families: Lawless 2003, Statistical Models and Methods for Lifetime Data, 1.3). On the scale of the
linear predictor that is ln L for cloglog and ln(e^L - 1), the log odds, for logit.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Family = Literal["weibull", "loglogistic"]


def tail_curve(
    family: str, link: str, ages: NDArray[Any], log_shape: float, log_scale: float
) -> tuple[Floats, Floats]:
    """Linear predictor (m,) of a tail at whole ages >= 1 and its derivatives (m, 2) by log_shape and log_scale."""
    shape = np.exp(log_shape)
    end, start = np.asarray(ages, dtype=np.float64), np.asarray(ages, dtype=np.float64) - 1.0
    high, by_high = _cumulative(family, end, shape, log_scale)
    low, by_low = _cumulative(family, start, shape, log_scale)
    hazard = high - low
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        slope = (by_high - by_low) / hazard[:, None]
        if link == "logit":
            # d ln(e^L - 1) / dL = 1 / (1 - e^-L)
            return hazard + np.log(-np.expm1(-hazard)), slope * (hazard / -np.expm1(-hazard))[:, None]
        return np.log(hazard), slope


def _cumulative(family: str, age: Floats, shape: float, log_scale: float) -> tuple[Floats, Floats]:
    """H (m,) and its derivatives (m, 2) by log shape and log scale; 0 at age 0."""
    power = np.zeros_like(age)
    positive = age > 0.0
    log_ratio = np.zeros_like(age)
    log_ratio[positive] = np.log(age[positive]) - log_scale
    power[positive] = np.exp(np.minimum(shape * log_ratio[positive], 700.0))
    weight = power if family == "weibull" else power / (1.0 + power)
    value = power if family == "weibull" else np.log1p(power)
    return value, np.column_stack([weight * shape * log_ratio, -weight * shape])


@dataclass(frozen=True, slots=True)
class AgeTail:
    """A fitted tail, frozen. Errors are model-based and take the other coefficients as known.

    family, link      "weibull" or "loglogistic"; "cloglog" or "logit"
    shape, scale      see the module; scale in periods
    log_shape_se, log_scale_se, log_correlation   errors of ln shape and ln scale, and their correlation
    first, last       ages it was fitted on
    events            weight of the events at these ages
    join              age from which it replaces the held value, continuously
    step              baseline minus tail at the join on the linear predictor: what joining moves the tail by
    """

    family: str
    link: str
    shape: float
    scale: float
    log_shape_se: float
    log_scale_se: float
    log_correlation: float
    first: int
    last: int
    events: float
    join: int
    step: float

    def curve(self, ages: NDArray[Any]) -> Floats:
        """(m,) linear predictor of the fitted tail itself, before it is joined."""
        value, _ = tail_curve(
            self.family, self.link, ages, float(np.log(self.shape)), float(np.log(self.scale))
        )
        return value

    def shift(self, ages: NDArray[Any]) -> Floats:
        """(m,) what the linear predictor gains on the held value: 0 up to the join, tail(a) - tail(join) after it."""
        age = np.asarray(ages, dtype=np.float64)
        at = np.append(np.maximum(age, self.join), self.join)
        values = self.curve(at)
        return np.where(age > self.join, values[:-1] - values[-1], 0.0)
