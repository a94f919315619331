"""Rank by pivoted Cholesky and solves of symmetric positive definite systems, on scaled matrices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve, lapack, solve_triangular

Floats = NDArray[np.float64]

#: A column whose part not explained by the others is below this share of its (centred) sum of squares
#: cannot be told apart from them in double precision sums.
RANK_TOLERANCE = 1e-10
#: Relative rounding error allowed to a sum of squares; a column far from 0 (a year, an ordinal) loses
#: digits when it is centred, so the tolerance grows with raw / centred sum of squares, up to the cap.
SUM_ERROR, TOLERANCE_CAP = 1e-13, 1e-5


def dependent_columns(
    information: Floats, *, constant: int | None, tolerance: float = RANK_TOLERANCE
) -> list[tuple[int, Floats]]:
    """Columns that are combinations of others: (column, weights over all columns), empty at full rank.

    information  (k, k) X'WX
    constant     index of the constant column, partialled out first so that a column's size is measured
                 around its mean; None when there is none

    ``weights`` are in units of the scaled columns, 1 at the dependent column itself.
    """
    k = information.shape[0]
    scale = np.sqrt(np.diag(information))
    zero = np.flatnonzero(scale == 0.0)
    if zero.size:
        return [(int(j), np.eye(k)[j]) for j in zero]
    scaled = information / np.outer(scale, scale)
    rest = np.arange(k)
    out: list[tuple[int, Floats]] = []
    if constant is not None:
        rest = np.delete(rest, constant)
        slope = scaled[rest, constant]
        centred = np.diag(scaled)[rest] - slope**2
        for j in rest[centred <= tolerance]:
            out.append((int(j), np.eye(k)[j] - scaled[j, constant] * np.eye(k)[constant]))
        keep = centred > tolerance
        rest, slope = rest[keep], slope[keep]
        spread = np.sqrt(centred[keep])
        if spread.size:
            tolerance = max(tolerance, min(SUM_ERROR / float(spread.min()) ** 2, TOLERANCE_CAP))
        scaled = (scaled[np.ix_(rest, rest)] - np.outer(slope, slope)) / np.outer(spread, spread)
    return out + [(int(rest[j]), _spread_out(w, rest, k)) for j, w in _pivoted(scaled, tolerance)]


def _spread_out(weights: Floats, rest: NDArray[np.int64], k: int) -> Floats:
    full = np.zeros(k)
    full[rest] = weights
    return full


def _pivoted(matrix: Floats, tolerance: float) -> list[tuple[int, Floats]]:
    k = matrix.shape[0]
    if k == 0:
        return []
    factor, pivot, rank, _ = lapack.dpstrf(matrix, tol=tolerance, lower=0)
    pivot = pivot - 1
    if rank == k:
        return []
    upper = np.triu(factor)
    out = []
    combination = solve_triangular(upper[:rank, :rank], upper[:rank, rank:])
    for column, weights in zip(pivot[rank:], combination.T, strict=True):
        full = np.zeros(k)
        full[pivot[:rank]] = -weights
        full[column] = 1.0
        out.append((int(column), full))
    return out


def solve_scaled(matrix: Floats, right: Floats) -> Floats:
    """Solution of a symmetric positive definite system, scaled to a unit diagonal first.

    Raises numpy.linalg.LinAlgError when the matrix is not positive definite.
    """
    diagonal = np.diag(matrix)
    if not np.isfinite(matrix).all() or (diagonal <= 0.0).any():
        raise np.linalg.LinAlgError("not positive definite")
    scale = np.sqrt(diagonal)
    factor = cho_factor(matrix / np.outer(scale, scale), lower=True)
    shape = scale if right.ndim == 1 else scale[:, None]
    solution: Floats = cho_solve(factor, right / shape) / shape
    return solution


def inverse_scaled(matrix: Floats) -> Floats:
    """Symmetric inverse of a positive definite matrix; LinAlgError as in :func:`solve_scaled`."""
    inverse = solve_scaled(matrix, np.eye(matrix.shape[0]))
    half: Floats = 0.5 * (inverse + inverse.T)
    return half
