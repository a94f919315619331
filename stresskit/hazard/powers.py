"""Sums over the rows of a stay of a smooth function of e^eta, from running sums of powers of e^eta.

e^eta = e^s e^z is small for most loans of most books. There a function f with f(0) = 0 is a short polynomial
sum_j c_j (e^s)^j (e^z)^j, so its sum over a stay is sum_j c_j (e^s)^j times a difference of running sums of
(e^z)^j: a cost per stay, not per row. The polynomial interpolates f(x)/x at Chebyshev points of [0, LIMIT]
(Trefethen 2019, Approximation Theory and Approximation Practice, theorem 8.2: the error falls like rho^-n,
rho > 100 here because the nearest singularity, -1 for the logit, is far from the interval).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.polynomial import Chebyshev, Polynomial
from numpy.typing import NDArray

from stresskit.hazard.link import LINKS
from stresskit.kernels.cohorts import Ends, remaining, running

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

#: Largest e^eta of a stay whose sums are taken from powers; stays beyond it go row by row.
LIMIT = 0.03
#: Largest relative error of a polynomial on [0, LIMIT]; ERROR_JOINT for the information between loan and cell columns.
ERROR, ERROR_JOINT = 1e-13, 3e-10
MOST_POWERS = 12
#: e^z in tables of powers is cut here: its powers stay finite, and a stay that needs more goes row by row.
TOP = 1e25


def coefficients(function: Callable[[Floats], Floats], error: float) -> Floats:
    """(n,) c with function(x) = sum_j c[j - 1] x^j on [0, LIMIT] to ``error``, for a function that is 0 at 0.

    Raises ValueError when MOST_POWERS do not reach it.
    """
    x = LIMIT * np.linspace(1e-6, 1.0, 513)
    exact = function(x)
    for degree in range(1, MOST_POWERS + 1):
        fitted = Chebyshev.interpolate(lambda x: function(x) / x, degree - 1, domain=[0.0, LIMIT])
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
    """

    loglik: Floats
    probability: Floats
    information: Floats
    variance: Floats
    joint: Floats
    joint_score: Floats

    @property
    def degree(self) -> int:
        return int(self.loglik.size)

    @property
    def together(self) -> Floats:
        """(degree, 3) log-likelihood, score and information."""
        return np.column_stack([self.loglik, -self.probability, self.information])


@lru_cache(maxsize=8)
def link_powers(name: str) -> LinkPowers:
    """Of the link called ``name``; found once per process."""
    link = LINKS[name]

    def loglik(x: Floats) -> Floats:
        return np.log1p(-link.from_exp(x)[0])

    def probability(x: Floats) -> Floats:
        return link.from_exp(x)[0]

    def variance(x: Floats) -> Floats:
        p, q, _ = link.from_exp(x)
        return p * q

    def information(x: Floats) -> Floats:
        return link.from_exp(x)[2]

    return LinkPowers(
        *_padded([coefficients(f, ERROR) for f in (loglik, probability, information, variance)]),
        *_padded([coefficients(f, ERROR_JOINT) for f in (information, probability)]),
    )


def _padded(found: list[Floats]) -> list[Floats]:
    """With zeros to the length of the longest."""
    longest = max(c.size for c in found)
    return [np.concatenate([c, np.zeros(longest - c.size)]) for c in found]


@dataclass(frozen=True, slots=True, eq=False)
class PowerTables:
    """Powers of e^z and their running sums along the tracks.

    power   (cells, degree) (e^z)^j, 0 in boundary cells
    sums    (cells, degree) running sums of power
    top     (tracks,) largest e^z of each track
    """

    power: Floats
    sums: Floats
    top: Floats


def power_tables(exp_z: Floats, degree: int, starts: Ints) -> PowerTables:
    """exp_z (cells,), starts (tracks + 1,)."""
    power = powers_of(np.minimum(exp_z, TOP), degree)
    return PowerTables(power, running(power, starts), np.maximum.reduceat(exp_z, starts[:-1]))


@dataclass(frozen=True, slots=True, eq=False)
class CellPowers:
    """Powers of e^s of the stays that leave each cell less those that enter it.

    power   (size, degree)
    joint   (size, fewer, kl) times the loan columns
    """

    power: Floats
    joint: Floats

    @classmethod
    def zeros(cls, size: int, powers: LinkPowers, kl: int) -> CellPowers:
        return cls(np.zeros((size, powers.degree)), np.zeros((size, powers.joint.size, kl)))

    @classmethod
    def of_block(cls, power: Floats, columns: Floats, ends: Ends, fewer: int) -> CellPowers:
        """power (n, degree) weight times powers of e^s; columns (n, 1 + kl), the first one ones."""
        size = ends.matrix.shape[0]
        out = cls(np.empty((size, power.shape[1])), np.empty((size, fewer, columns.shape[1] - 1)))
        for j in range(fewer):
            both = ends.spread(power[:, j], columns)
            out.power[:, j] = both[:, 0]
            out.joint[:, j] = both[:, 1:]
        out.power[:, fewer:] = ends.add(power[:, fewer:])
        return out

    def add(self, here: slice, more: CellPowers) -> None:
        self.power[here] += more.power
        self.joint[here] += more.joint

    def at_risk(self, tables: PowerTables, starts: Ints) -> Floats:
        """(cells, degree) sums of powers of e^eta over the stays at risk in each cell."""
        return remaining(self.power, starts) * tables.power

    def joint_at_risk(self, tables: PowerTables, starts: Ints, c: Floats) -> Floats:
        """(cells, kl) sums of sum_j c_j (e^eta)^j times the loan columns over the stays at risk in each cell."""
        out = np.zeros((self.power.shape[0], self.joint.shape[2]))
        for j in range(c.size):
            out += (tables.power[:, j] * c[j])[:, None] * remaining(self.joint[:, j], starts)
        return out


def powers_of(x: Floats, degree: int) -> Floats:
    """(n, degree) x, x^2, ... x^degree."""
    out = np.empty((x.size, degree))
    out[:, 0] = x
    for j in range(1, degree):
        np.multiply(out[:, j - 1], x, out=out[:, j])
    return out


#: Stays whose joint sums are taken at a time: the gathered rows stay in the cache of one core.
AT_A_TIME = 1 << 10


def joint_table(tables: PowerTables, z: Floats, c: Floats, starts: Ints) -> Floats:
    """(cells, fewer, kc) running sums of c_j (e^z)^j times the cell columns z (cells, kc)."""
    return running((tables.power[:, : c.size] * c)[:, :, None] * z[:, None, :], starts)


def joint_sums(power: Floats, table: Floats, enter: Ints, last: Ints) -> Floats:
    """(n, kc) sums over each stay of sum_j c_j (e^eta)^j times the cell columns; power (n, >= fewer) of e^s."""
    n, (_, degree, kc) = power.shape[0], table.shape
    flat = table.reshape(table.shape[0], degree * kc)
    out = np.empty((n, kc))
    size = min(n, AT_A_TIME)
    rows, before = np.empty((size, degree * kc)), np.empty((size, degree * kc))
    for a in range(0, n, size):
        b = min(n, a + size)
        np.take(flat, last[a:b], axis=0, out=rows[: b - a], mode="clip")
        np.take(flat, enter[a:b], axis=0, out=before[: b - a], mode="clip")
        np.subtract(rows, before, out=rows)
        np.einsum("nj,njk->nk", power[a:b, :degree], rows[: b - a].reshape(b - a, degree, kc), out=out[a:b])
    return out
