"""A fitted vector autoregression as a value, and the moments of its forecast.

    z_t = c + A_1 z_{t-1} + ... + A_p z_{t-p} + e_t,   e_t normal with mean 0 and covariance Sigma

z is what the study declares per variable: the level x, its change, or the change of log x. Everything
here speaks of the WORKING value y: x itself, or log x where log_difference is declared. Levels follow
from it by ``levels``. A path of y over H periods is, given history, exactly normal:

    y = mean + factor @ u,   u standard normal, (H * k,)

with the factor made of impulse responses (Luetkepohl 2005, 2.1.2 and 2.3), cumulated for changes.
Parameters count as known: their estimation error is in none of these figures.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency
from stresskit.core.values import frozen

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class VarModel:
    """A stable VAR of k variables with p >= 1 lags.

    names, transforms  (k,) in the order of the study; level, difference or log_difference
    frequency    of the macro calendar
    last         ordinal of the last period of history: the forecast's origin
    criterion    aic or bic where it chose the lags, fixed where the study did
    intercept    (k,) c
    coefs        (p, k, k), coefs[j - 1] = A_j
    sigma        (k, k), divided by n - (k p + 1): the unbiased estimate
    recent       (p, k) the last p rows of z, oldest first
    anchor       (k,) working value in period ``last``
    residuals    (n, k), of periods last - n + 1 .. last
    root         largest modulus of the companion matrix's eigenvalues, below 1
    floors       variable -> lowest value that may be filled in, variable's unit
    band         probability inside the bands shown
    """

    names: tuple[str, ...]
    transforms: tuple[str, ...]
    frequency: Frequency
    last: int
    criterion: str
    intercept: Floats
    coefs: Floats
    sigma: Floats
    recent: Floats
    anchor: Floats
    residuals: Floats
    root: float
    floors: Mapping[str, float]
    band: float = 0.9

    def __post_init__(self) -> None:
        k, p = len(self.names), self.coefs.shape[0]
        shapes = {
            "intercept": (k,), "coefs": (p, k, k), "sigma": (k, k), "recent": (p, k), "anchor": (k,),
            "residuals": (self.residuals.shape[0], k),
        }  # fmt: skip
        for name, shape in shapes.items():
            if getattr(self, name).shape != shape:
                raise ValueError(f"VarModel.{name} has shape {getattr(self, name).shape}, expected {shape}")
            object.__setattr__(self, name, frozen(np.asarray(getattr(self, name), dtype=np.float64)))
        object.__setattr__(self, "floors", MappingProxyType(dict(self.floors)))

    @property
    def k(self) -> int:
        return len(self.names)

    @property
    def lags(self) -> int:
        return int(self.coefs.shape[0])

    @property
    def nobs(self) -> int:
        """Periods that the estimation explains."""
        return int(self.residuals.shape[0])

    @property
    def first(self) -> int:
        """Ordinal of the first period that the estimation explains."""
        return self.last - self.nobs + 1

    @property
    def changes(self) -> NDArray[np.bool_]:
        """(k,) whether the variable enters as a change."""
        return np.array([t != "level" for t in self.transforms])

    def takes_log(self, variable: str) -> bool:
        """Whether the variable is one of the VAR's and enters by its logarithm."""
        return (variable, "log_difference") in zip(self.names, self.transforms, strict=True)


@dataclass(frozen=True, slots=True)
class Forecast:
    """Moments of the working values over H periods after history.

    mean    (H, k)
    factor  (H * k, H * k) lower block triangular, row h * k + i; covariance = factor @ factor.T
    """

    mean: Floats
    factor: Floats


def working(values: Floats, transform: str) -> Floats:
    """Levels as working values; log of values that the caller knows to be above zero."""
    return np.log(values) if transform == "log_difference" else values


def levels(y: Floats, transform: str) -> Floats:
    """Working values as levels."""
    return np.exp(y) if transform == "log_difference" else y


def forecast_mean(model: VarModel, periods: int) -> Floats:
    """Mean of the working values, (periods, k)."""
    z = np.concatenate([model.recent, np.empty((periods, model.k))])
    p = model.lags
    for h in range(p, p + periods):
        z[h] = model.intercept + sum(model.coefs[j] @ z[h - 1 - j] for j in range(p))
    ahead = z[p:]
    out: Floats = np.where(model.changes, model.anchor + np.cumsum(ahead, axis=0), ahead)
    return out


def responses(model: VarModel, periods: int) -> Floats:
    """Response of the working values in period h to a standard normal shock in period 0, (periods, k, k)."""
    psi = np.zeros((periods, model.k, model.k))
    psi[0] = np.eye(model.k)
    for h in range(1, periods):
        for j in range(1, min(h, model.lags) + 1):
            psi[h] += model.coefs[j - 1] @ psi[h - j]
    theta = psi @ np.linalg.cholesky(model.sigma)
    out: Floats = np.where(model.changes[:, None], np.cumsum(theta, axis=0), theta)
    return out


def forecast(model: VarModel, periods: int) -> Forecast:
    """Mean and factor of the next ``periods`` periods together."""
    theta, k = responses(model, periods), model.k
    blocks = np.zeros((periods, k, periods, k))
    for lag in range(periods):
        h = np.arange(lag, periods)
        blocks[h, :, h - lag, :] = theta[lag]
    return Forecast(forecast_mean(model, periods), blocks.reshape(periods * k, periods * k))


def forecast_sd(model: VarModel, periods: int) -> Floats:
    """Standard deviation of each working value, (periods, k)."""
    theta = responses(model, periods)
    out: Floats = np.sqrt(np.cumsum((theta**2).sum(axis=2), axis=0))
    return out


def standard_residuals(model: VarModel) -> Floats:
    """(n, k) residuals in units of u: what the forecast's factor multiplies."""
    out: Floats = np.linalg.solve(np.linalg.cholesky(model.sigma), model.residuals.T).T
    return out
