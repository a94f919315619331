"""Exact conditioning of a VAR's forecast on stated values: plain arrays in working values.

A path is y = m + F u with u standard normal (macro.var). Stating some entries S says F_S u = y_S - m_S.
With the thin factorisation F_S' = Q R, Q having orthonormal columns,

    w = R'^-1 (y_S - m_S)          u given S: mean Q w, covariance I - Q Q'
    y given S: mean m + F Q w, covariance F (I - Q Q') F'
    d^2 = |w|^2 = (y_S - m_S)' (F_S F_S')^-1 (y_S - m_S)

so Q w are the smallest shocks that make the stated path, and d^2 is their squared size. This is the
hard-condition forecast of Doan, Litterman & Sims (1984) and Waggoner & Zha (1999, sections II and III) at
given parameters; the covariance is never formed, which keeps half of the digits that it would lose.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from stresskit.macro.var import Forecast

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Basis:
    """Directions of the shocks that stated entries fix.

    entries  (m,) rows of the stacked path, ascending
    q        (H * k, m) orthonormal columns; None stands for the identity, where everything is stated
    r        (m, m) upper triangular
    """

    entries: NDArray[np.int64]
    q: Floats | None
    r: Floats

    def deviation(self, found: Forecast, stated: Floats) -> Floats:
        """w, (m,): independent standard normal numbers where the path is one that the VAR makes."""
        gap = stated.ravel()[self.entries] - found.mean.ravel()[self.entries]
        out: Floats = solve_triangular(self.r, gap, trans="T")
        return out


@dataclass(frozen=True, slots=True)
class Conditioned:
    """The path given its stated entries.

    mean  (H, k) working values; the stated ones are those stated, to the bit
    sd    (H, k), 0 where stated
    d2    squared distance of the stated entries from the forecast
    dof   number of stated entries
    """

    mean: Floats
    sd: Floats
    d2: float
    dof: int


def basis(found: Forecast, stated: NDArray[np.bool_]) -> Basis:
    """Basis of the entries that ``stated``, (H, k), marks; at least one."""
    entries = np.flatnonzero(stated.ravel())
    if entries.size == stated.size:
        # the factor is lower triangular, so its transpose is its own factorisation
        return Basis(entries, None, found.factor.T)
    q, r = np.linalg.qr(found.factor[entries].T)
    return Basis(entries, q, r)


def condition(found: Forecast, stated: Floats) -> Conditioned:
    """The path given the entries of ``stated``, (H, k), that are not NaN.

    Without any the result is the forecast itself, with d2 = 0.
    """
    known = np.isfinite(stated)
    if not known.any():
        spread = np.sqrt((found.factor**2).sum(axis=1))
        return Conditioned(found.mean, spread.reshape(stated.shape), 0.0, 0)
    made = basis(found, known)
    w = made.deviation(found, stated)
    mean, sd = stated.ravel().copy(), np.zeros(stated.size)
    if made.q is not None:
        free = np.flatnonzero(~known.ravel())
        through = found.factor[free] @ made.q
        mean[free] = found.mean.ravel()[free] + through @ w
        sd[free] = np.sqrt(((found.factor[free] - through @ made.q.T) ** 2).sum(axis=1))
    return Conditioned(mean.reshape(stated.shape), sd.reshape(stated.shape), float(w @ w), w.size)
