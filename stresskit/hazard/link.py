"""Links of a binary hazard: log-likelihood, score and information of a row, on the linear predictor.

Conventions: ``eta`` any shape, float64; y = 1 is an event. For a row with log-likelihood l(eta):
score = dl/deta, observed = -d2l/deta2, expected = the mean of observed over y. Everything is computed
from eta in forms that keep full relative precision for eta in [-745, 700]; nothing is clipped.

Complementary log-log: P = 1 - exp(-L), L = e^eta, the grouped proportional hazards model (Prentice and
Gloeckler 1978, Biometrics 34). Logit: P = e^eta / (1 + e^eta).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar, Literal, Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit

Floats = NDArray[np.float64]
InformationKind = Literal["observed", "expected"]


class Link(Protocol):
    """What sums and predictions need from a link."""

    @property
    def name(self) -> str: ...

    @property
    def log_hazard(self) -> bool:
        """e^eta is the hazard: minus log-likelihood, minus score and observed information of a survived row."""

    def probability(self, eta: Floats) -> Floats:
        """P(event)."""

    def linear(self, probability: float) -> float:
        """eta at a probability in (0, 1)."""

    def odds(self, eta: Floats) -> Floats:
        """P / (1 - P)."""

    def from_exp(self, exp_eta: Floats) -> tuple[Floats, Floats, Floats]:
        """(P, 1 - P, expected information) from e^eta >= 0, for sums whose e^eta is a product of two tables."""

    def bend(self, eta: Floats) -> Floats:
        """d2P/deta2 over dP/deta."""

    def survive(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        """(log-likelihood, score, information) of rows without event."""

    def event(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        """(log-likelihood, score, information) of event rows."""


#: Coefficients of x / (1 - e^-x) - 1 = x/2 + sum B_2k x^2k / (2k)!, ascending powers of x^2 from x^2.
_BERNOULLI = (1 / 12, -1 / 720, 1 / 30240, -1 / 1209600, 1 / 47900160, -691 / 1307674368000, 1 / 74724249600)


def _excess(x: Floats) -> Floats:
    """x / (1 - e^-x) - 1 for x >= 0 without cancellation near 0."""
    small = x < 0.5
    out = np.empty_like(x)
    s = x[small]
    square = s * s
    series = np.zeros_like(s)
    for c in reversed(_BERNOULLI):
        series = (series + c) * square
    out[small] = 0.5 * s + series
    b = x[~small]
    out[~small] = b / -np.expm1(-b) - 1.0
    return out


def _event_ratio(x: Floats) -> Floats:
    """x / (e^x - 1) for x >= 0: 1 at 0, without overflow."""
    with np.errstate(invalid="ignore"):
        ratio = x * np.exp(-x) / -np.expm1(-x)
    return np.where(x == 0.0, 1.0, ratio)


@dataclass(frozen=True, slots=True)
class CLogLog:
    """Complementary log-log."""

    name: ClassVar[str] = "cloglog"
    log_hazard: ClassVar[bool] = True

    def probability(self, eta: Floats) -> Floats:
        out: Floats = -np.expm1(-np.exp(eta))
        return out

    def linear(self, probability: float) -> float:
        return float(np.log(-np.log1p(-probability)))

    def odds(self, eta: Floats) -> Floats:
        with np.errstate(over="ignore"):
            out: Floats = np.expm1(np.exp(eta))
        return out

    def from_exp(self, exp_eta: Floats) -> tuple[Floats, Floats, Floats]:
        p, q = -np.expm1(-exp_eta), np.exp(-exp_eta)
        ratio = exp_eta * q
        np.divide(ratio, p, out=ratio, where=p > 0.0)
        ratio *= exp_eta
        return p, q, ratio

    def bend(self, eta: Floats) -> Floats:
        with np.errstate(over="ignore"):
            out: Floats = -np.expm1(eta)
        return out

    def survive(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        with np.errstate(over="ignore"):
            hazard = np.exp(eta)
        if kind == "observed":
            return -hazard, -hazard, hazard
        return -hazard, -hazard, hazard * _event_ratio(hazard)

    def event(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        with np.errstate(over="ignore"):
            x = np.exp(eta)
        ratio = _event_ratio(x)
        tiny = x < 1e-3
        square = np.where(tiny, x, 0.0) ** 2
        near_zero = eta - 0.5 * x + square / 24.0 - square * square / 2880.0
        with np.errstate(divide="ignore", invalid="ignore"):
            plain = np.where(x < np.log(2.0), np.log(-np.expm1(-x)), np.log1p(-np.exp(-x)))
        loglik = np.where(tiny, near_zero, plain)
        information = ratio * (_excess(x) if kind == "observed" else x)
        return loglik, ratio, information


@dataclass(frozen=True, slots=True)
class Logit:
    """Log odds."""

    name: ClassVar[str] = "logit"
    log_hazard: ClassVar[bool] = False

    def probability(self, eta: Floats) -> Floats:
        out: Floats = expit(eta)
        return out

    def linear(self, probability: float) -> float:
        return float(np.log(probability) - np.log1p(-probability))

    def odds(self, eta: Floats) -> Floats:
        with np.errstate(over="ignore"):
            out: Floats = np.exp(eta)
        return out

    def from_exp(self, exp_eta: Floats) -> tuple[Floats, Floats, Floats]:
        q = 1.0 / (1.0 + exp_eta)
        p = exp_eta * q
        return p, q, p * q

    def bend(self, eta: Floats) -> Floats:
        out: Floats = -np.tanh(0.5 * eta)
        return out

    def survive(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        p, q = expit(eta), expit(-eta)
        return -np.logaddexp(0.0, eta), -p, p * q

    def event(self, eta: Floats, kind: InformationKind) -> tuple[Floats, Floats, Floats]:
        p, q = expit(eta), expit(-eta)
        return -np.logaddexp(0.0, -eta), q, p * q


LINKS: dict[str, Link] = {"cloglog": CLogLog(), "logit": Logit()}
