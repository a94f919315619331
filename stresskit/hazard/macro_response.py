"""What a fitted hazard makes of one macro feature: the factor on it as the feature moves and all else stands.

The linear predictor is linear in the coefficients, so the difference between two values of a feature is a row of a design
times the coefficients, and its variance is that row around their covariance.
"""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.hazard.result import HazardFit

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class MacroResponse:
    """Differences of the linear predictor to its value at the reference, at m values of one feature; each (m,).

    mean          of the average loan: the logarithm of the factor on the hazard (cloglog) or on its odds (logit)
    se            standard error of ``mean`` by the fit's own kind; NaN where the fit withholds intervals
    least, most   smallest and largest over loans: they differ where the feature meets a loan column
    """

    mean: Floats
    se: Floats
    least: Floats
    most: Floats


def macro_response(
    fit: HazardFit,
    feature: str,
    values: Floats,
    *,
    at: Mapping[str, float],
    age: int,
    loans: Floats | None = None,
    counts: Floats | None = None,
) -> MacroResponse:
    """The response to ``feature`` at ``values`` (m,) against its value in ``at``, which has every feature of the fit.

    age    at which it is taken; matters only where age and feature meet in a term
    loans  (n, k) U of the loans to average over, from :meth:`HazardFit.loan_part`; None: a loan at every reference level.
           Where the feature acts on some of them only, those are averaged over
    counts (n,) for how many loans each of them stands, by default one
    """
    names = fit.feature_names
    rows = np.tile([at[name] for name in names], (values.size + 1, 1))
    rows[:-1, names.index(feature)] = values
    ages = np.full(values.size + 1, age, dtype=np.int64)
    alone, mixed = _difference(fit, ages, rows, names)
    u = np.zeros((1, mixed.shape[1]))
    if loans is not None:
        mine = _touched(loans, alone, mixed)
        u, counts = loans[mine], None if counts is None else counts[mine]
    # an exact sum, so that the order of the loans moves no bit
    middle = np.array([math.fsum(column) / u.shape[0] for column in u.T])
    if loans is not None and counts is not None:
        middle = np.array([math.fsum(column * counts) for column in u.T]) / math.fsum(counts)
    design = np.zeros((values.size, fit.design.k))
    for j in np.flatnonzero(fit.design.index["feature"] >= 0):
        unit = np.zeros(fit.design.k)
        unit[j] = 1.0
        own, with_loan = _difference(dataclasses.replace(fit, coefficients=unit), ages, rows, names)
        design[:, j] = own + with_loan @ middle
    # a coefficient at its bound has no error: NaN only where the response reads it
    read = (design != 0.0).any(axis=0)
    covariance = fit.cov_params().to_numpy()[np.ix_(read, read)]
    variance = np.einsum("mi,ij,mj->m", design[:, read], covariance, design[:, read])
    # fewer periods than coefficients leave directions of no variance, which may come out below 0 by rounding
    se = np.sqrt(np.maximum(variance, 0.0))
    if set(np.array(fit.design.labels, dtype=object)[read]) & set(fit.withheld):
        se = np.full(values.size, np.nan)
    spread = np.empty((values.size, 2))
    for m in range(values.size):
        each = alone[m] + u @ mixed[m]
        spread[m] = each.min(), each.max()
    return MacroResponse(alone + mixed @ middle, se, spread[:, 0], spread[:, 1])


def _difference(
    fit: HazardFit, ages: NDArray[np.int64], rows: Floats, names: tuple[str, ...]
) -> tuple[Floats, Floats]:
    """(m,) and (m, k): cell parts of all rows but the last, less those of the last."""
    part = fit.cell_part(ages, rows, names)
    return part.z[:-1] - part.z[-1], part.V[:-1] - part.V[-1]


def _touched(loans: Floats, alone: Floats, mixed: Floats) -> NDArray[np.bool_]:
    """(n,) the loans that the feature acts on; all of them when it acts on all or on none."""
    everyone = np.ones(loans.shape[0], dtype=np.bool_)
    if alone.any() or not loans.size:
        return everyone
    mine: NDArray[np.bool_] = (loans[:, mixed.any(axis=0)] != 0.0).any(axis=1)
    return mine if mine.any() else everyone
