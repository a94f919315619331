"""Sums over the rows of a stay of a smooth function of e^eta, from running sums of powers of e^eta.

e^eta = e^s e^z is small for most loans of most books. There a function f with f(0) = 0 is a short polynomial
sum_j c_j (e^s)^j (e^z)^j, so its sum over a stay is sum_j c_j (e^s)^j times a difference of running sums of
(e^z)^j: a cost per stay, not per row. The polynomial interpolates f(x)/x at Chebyshev points of [0, limit]
(Trefethen 2019, Approximation Theory and Approximation Practice, theorem 8.2: the error falls like rho^-n,
rho > 100 here because the nearest singularity, -1 for the logit and 2 pi i for the cloglog, is far from the interval).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.polynomial import Chebyshev, Polynomial
from numpy.typing import NDArray

from stresskit.hazard.link import LINKS
from stresskit.kernels.power_pass import Powers
from stresskit.kernels.score_pass import ScorePowers
from stresskit.kernels.vectors import whole

Floats = NDArray[np.float64]

#: Largest e^eta of a stay whose sums are taken from powers, by link: eight powers reach ERROR. Stays beyond it go row by row.
LIMITS = {"logit": 0.03, "cloglog": 0.15}
#: Largest relative error of a polynomial on [0, limit]; ERROR_JOINT for the information between loan and cell columns.
ERROR, ERROR_JOINT = 1e-13, 3e-10
MOST_POWERS = 12
#: e^z in tables of powers is cut here: its powers stay finite, and a stay that needs more goes row by row.
TOP = 1e25


def coefficients(function: Callable[[Floats], Floats], error: float, limit: float) -> Floats:
    """(n,) c with function(x) = sum_j c[j - 1] x^j on [0, limit] to ``error``, for a function that is 0 at 0.

    Raises ValueError when MOST_POWERS do not reach it.
    """
    x = limit * np.linspace(1e-6, 1.0, 513)
    exact = function(x)
    for degree in range(1, MOST_POWERS + 1):
        fitted = Chebyshev.interpolate(lambda x: function(x) / x, degree - 1, domain=[0.0, limit])
        plain = fitted.convert(kind=Polynomial, domain=[-1.0, 1.0], window=[-1.0, 1.0]).coef
        c = np.concatenate([plain, np.zeros(degree - plain.size)])
        if float(np.abs(powers_of(x, degree) @ c / exact - 1.0).max()) <= error:
            return c
    raise ValueError("a function that few powers do not describe")


@dataclass(frozen=True, slots=True, eq=False)
class LinkPowers:
    """What a link's sums over rows without event are in powers of e^eta: coefficients of x, x^2, ...

    loglik, probability, information, variance   (degree,); information is the expected one, variance P (1 - P)
    joint, joint_score                           (fewer,) information and probability to ERROR_JOINT
    squared                                      (about as many,) squared score of a row without event to ERROR_JOINT
    limit                                        largest e^eta for which they hold
    """

    loglik: Floats
    probability: Floats
    information: Floats
    variance: Floats
    joint: Floats
    joint_score: Floats
    squared: Floats
    limit: float

    @property
    def degree(self) -> int:
        return int(self.loglik.size)

    def for_pass(self, log_hazard: bool) -> Powers:
        """As :func:`stresskit.kernels.power_pass.power_pass` wants them."""
        d = whole(self.degree)
        stays = [self.variance if log_hazard else self.loglik, self.probability, self.information]
        flat = np.concatenate([_to(c, d) for c in stays])
        return Powers(log_hazard, flat, _to(self.joint, d), self.joint.size, self.limit, TOP)

    def for_scores(self) -> ScorePowers:
        """As :func:`stresskit.kernels.score_pass.score_pass` wants them."""
        d = whole(self.degree)
        few = self.joint_score
        return ScorePowers(_to(self.probability, d), _to(few, d), few.size, self.limit, TOP)

    @property
    def of_cells(self) -> Floats:
        """(2, degree) probability and information."""
        return np.stack([self.probability, self.information])


@lru_cache(maxsize=8)
def link_powers(name: str) -> LinkPowers:
    """Of the link called ``name``; found once per process."""
    link, limit = LINKS[name], LIMITS[name]

    def loglik(x: Floats) -> Floats:
        return np.log1p(-link.from_exp(x)[0])

    def probability(x: Floats) -> Floats:
        return link.from_exp(x)[0]

    def variance(x: Floats) -> Floats:
        p, q, _ = link.from_exp(x)
        return p * q

    def information(x: Floats) -> Floats:
        return link.from_exp(x)[2]

    def squared_over_x(x: Floats) -> Floats:
        return x if link.log_hazard else link.from_exp(x)[0] ** 2 / x

    loglik_c, probability_c, information_c, variance_c = _padded(
        [coefficients(f, ERROR, limit) for f in (loglik, probability, information, variance)]
    )
    joint, joint_score = _padded([coefficients(f, ERROR_JOINT, limit) for f in (information, probability)])
    squared = np.concatenate([[0.0], coefficients(squared_over_x, ERROR_JOINT, limit)])
    return LinkPowers(loglik_c, probability_c, information_c, variance_c, joint, joint_score, squared, limit)


def _to(c: Floats, size: int) -> Floats:
    """With zeros to that length."""
    return np.concatenate([c, np.zeros(size - c.size)])


def _padded(found: list[Floats]) -> list[Floats]:
    """With zeros to the length of the longest."""
    longest = max(c.size for c in found)
    return [_to(c, longest) for c in found]


def powers_of(x: Floats, degree: int) -> Floats:
    """(n, degree) x, x^2, ... x^degree."""
    out = np.empty((x.size, degree))
    out[:, 0] = x
    for j in range(1, degree):
        np.multiply(out[:, j - 1], x, out=out[:, j])
    return out
