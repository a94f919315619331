"""Distance of stated values from a VAR's forecast, period by period: the work grows with the horizon, not its cube.

With x_h the last p changes and the cumulated ones as deviations from their means, x_h = T x_{h-1} + G u_h, and working
values are rows of it. Given what is stated up to h - 1, x_h has mean a and covariance L L'. Stating rows C of it gives, by
one orthogonal factorisation of [(C L)', L'] (square-root filter: Durbin & Koopman 2012, 6.3),

    w_h = R'^-1 (y_h - C a)      independent standard normal,   d^2 = sum of |w_h|^2,

the same number as (y_S - m_S)' (F_S F_S')^-1 (y_S - m_S) of ``gaussian``: there one large factorisation, here many small
ones. No covariance is formed either way.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.macro.var import VarModel

Floats = NDArray[np.float64]


def squared_distances(model: VarModel, deviations: Floats, known: NDArray[np.bool_]) -> Floats:
    """d^2 of each of n paths, (n,), from the entries that ``known``, (H, k), marks.

    deviations  (H, k, n) working values less their forecast; what is not known may be NaN
    """
    step, shock, row = _system(model)
    size, n = step.shape[0], deviations.shape[2]
    mean, root, out = np.zeros((size, n)), np.zeros((size, 0)), np.zeros(n)
    for h in range(int(np.flatnonzero(known.any(axis=1)).max(initial=-1)) + 1):
        mean = step @ mean
        root = np.hstack([step @ root, shock])
        stated = np.flatnonzero(known[h])
        m, seen = stated.size, row[stated]
        r: Floats = np.asarray(np.linalg.qr(np.hstack([(seen @ root).T, root.T]), mode="r"))
        if m:
            w = np.linalg.solve(r[:m, :m].T, deviations[h, stated] - seen @ mean)
            mean = mean + r[:m, m:].T @ w
            out += (w**2).sum(axis=0)
        root = r[m:, m:].T
    return out


def _system(model: VarModel) -> tuple[Floats, Floats, Floats]:
    """T (s, s), G (s, k) and the rows (k, s) that give the working values; s = k p + number of changes."""
    k, p, changes = model.k, model.lags, np.flatnonzero(model.changes)
    size = k * p + changes.size
    step, shock, row = np.zeros((size, size)), np.zeros((size, k)), np.zeros((k, size))
    step[:k, : k * p] = np.concatenate(list(model.coefs), axis=1)
    step[k : k * p, : k * (p - 1)] = np.eye(k * (p - 1))
    shock[:k] = np.linalg.cholesky(model.sigma)
    row[:, :k] = np.eye(k)
    for at, i in enumerate(changes, start=k * p):
        # y_h = y_{h-1} + z_h
        step[at], shock[at] = step[i], shock[i]
        step[at, at] = 1.0
        row[i] = 0.0
        row[i, at] = 1.0
    return step, shock, row
