"""Estimation of the VAR on macro history: least squares by statsmodels, refusals in words."""

from __future__ import annotations

import importlib

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, NumericError
from stresskit.core.period import format_period, parse_period
from stresskit.core.values import MacroHistory
from stresskit.macro.var import VarModel, working
from stresskit.spec.var import Var

Floats = NDArray[np.float64]

#: Errors' degrees of freedom demanded per equation, besides at least one per variable.
LEAST_FREE = 10
#: Ratio of smallest to largest singular value below which variables count as tied to each other.
TIED = 1e-7
#: A root this near to 1 or above it makes forecasts wander off.
UNSTABLE = 1.0 - 1e-9


def fit_var(spec: Var, history: MacroHistory, *, end: int) -> VarModel:
    """The VAR of ``spec`` on history from ``spec.from`` (or where all variables are known) to period ``end``.

    end  ordinal of the last period used, the one before scenarios start

    Columns are divided by their standard deviation first, so that units change nothing but rounding.
    The number of lags minimises the criterion over 1 .. max_lags on the rows that all of them have
    (Luetkepohl 2005, 4.3); the chosen one is then estimated on all rows that it has.

    Raises DataError for history that is too short or has values that a logarithm cannot take,
    NumericError for variables that are tied to each other and for a fit that is not stable.
    """
    y, start = _working_rows(spec, history, end)
    changes = np.array([t != "level" for t in spec.variables.values()])
    z = np.where(changes, np.diff(y, axis=0, prepend=np.nan), y)[1 if changes.any() else 0 :]
    fixed = spec.lags if isinstance(spec.lags, int) else None
    _demand_rows(spec, z, fixed or spec.max_lags, first=format_period(start, history.frequency))
    scale = _scale(spec, z)
    names = tuple(spec.variables)
    # Loaded here: a study without macro.var should not wait for it.
    estimator = importlib.import_module("statsmodels.tsa.vector_ar.var_model").VAR(z / scale)
    chosen = fixed or max(1, int(estimator.select_order(spec.max_lags).selected_orders[spec.lags]))
    found = estimator.fit(chosen, trend="c")
    coefs, sigma = np.asarray(found.coefs), np.asarray(found.sigma_u)
    _demand_regular(names, sigma, "what the lags leave unexplained")
    root = _demand_stable(names, coefs)
    return VarModel(
        names=names,
        transforms=tuple(spec.variables.values()),
        frequency=history.frequency,
        last=end,
        criterion="fixed" if fixed else str(spec.lags),
        intercept=np.asarray(found.intercept) * scale,
        coefs=coefs * (scale[:, None] / scale),
        sigma=sigma * np.outer(scale, scale),
        recent=z[z.shape[0] - chosen :],
        anchor=y[-1],
        residuals=np.asarray(found.resid) * scale,
        root=root,
        floors=spec.floors,
        band=spec.band,
    )


def _working_rows(spec: Var, history: MacroHistory, end: int) -> tuple[Floats, int]:
    """Working values (n, k) of the periods used, and the ordinal of the first."""
    stop = end - history.start + 1
    if not 0 < stop <= history.n_periods:
        needed, begins, ends = (
            format_period(p, history.frequency) for p in (end, history.start, history.end)
        )
        raise DataError(f"macro history runs from {begins} to {ends}; macro.var needs it up to {needed}")
    columns = [history.values[name][:stop] for name in spec.variables]
    table = np.column_stack(columns)
    known = np.isfinite(table).all(axis=1)
    first = int(np.argmax(known)) if known.any() else table.shape[0]
    if spec.from_ is not None:
        first = max(first, parse_period(spec.from_, history.frequency) - history.start)
    table = table[first:]
    for name, transform, column in zip(spec.variables, spec.variables.values(), table.T, strict=True):
        bad = np.flatnonzero(column <= 0)
        if transform == "log_difference" and bad.size:
            when = format_period(history.start + first + int(bad[0]), history.frequency)
            raise DataError(
                f"macro.var takes logarithms of {name}, which is {column[bad[0]]:g} in {when} "
                f"({bad.size} values at or below zero); declare {name}: difference"
            )
    y = np.column_stack([working(c, t) for c, t in zip(table.T, spec.variables.values(), strict=True)])
    return y, history.start + first


def _demand_rows(spec: Var, z: Floats, lags: int, *, first: str) -> None:
    k = len(spec.variables)
    has, needed = z.shape[0] - lags, k * lags + 1 + max(k, LEAST_FREE)
    if has < needed:
        what = "lags" if isinstance(spec.lags, int) else "max_lags"
        raise DataError(
            f"macro.var cannot be estimated: {k} variables with {lags} lags need at least {needed} periods besides the "
            f"lags, history from {first} on has {max(0, has)}; supply a longer history, or lower {what}"
        )


def _scale(spec: Var, z: Floats) -> Floats:
    """Standard deviations (k,); raises when a variable does not move or variables are tied to each other."""
    names = tuple(spec.variables)
    spread = np.ptp(z, axis=0)
    still = [n for n, s, size in zip(names, spread, np.abs(z).max(axis=0), strict=True) if s <= 1e-12 * size]
    if still:
        raise NumericError(
            f"macro.var cannot be estimated: {', '.join(still)} ({spec.variables[still[0]]}) never moves over the "
            "periods used; leave it out, or choose another transform"
        )
    scale: Floats = z.std(axis=0)
    _demand_regular(names, np.asarray(np.corrcoef(z.T)), "what enters the VAR")
    return scale


def _demand_regular(names: tuple[str, ...], covariance: Floats, what: str) -> None:
    """Refuse a covariance with a direction of no variance; the variables in it are named."""
    sd = np.sqrt(np.diag(covariance))
    flat = sd <= TIED
    if flat.any():
        tied = [n for n, f in zip(names, flat, strict=True) if f]
    else:
        value, vector = np.linalg.eigh(covariance / np.outer(sd, sd))
        if value[0] > TIED * value[-1]:
            return
        tied = [n for n, v in zip(names, np.abs(vector[:, 0]), strict=True) if v > 1e-3]
    raise NumericError(
        f"macro.var cannot be estimated: {', '.join(tied)} {'are' if len(tied) > 1 else 'is'} an exact combination of "
        f"each other or of the lags ({what} has no variance in one direction); leave one of them out"
    )


def _demand_stable(names: tuple[str, ...], coefs: Floats) -> float:
    """Largest modulus of the companion matrix's eigenvalues; raises at 1 or above."""
    p, k, _ = coefs.shape
    companion = np.zeros((p * k, p * k))
    companion[:k] = np.concatenate(list(coefs), axis=1)
    companion[k:, :-k] = np.eye((p - 1) * k)
    value, vector = np.linalg.eig(companion)
    worst = int(np.argmax(np.abs(value)))
    root = float(np.abs(value[worst]))
    if root >= UNSTABLE:
        carrier = names[int(np.argmax(np.abs(vector[:k, worst])))]
        raise NumericError(
            f"the VAR under macro.var is not stable: its largest root has modulus {root:.4f}, so a forecast would run away "
            f"(mostly in {carrier}); declare difference or log_difference for what trends, or use fewer lags"
        )
    return root
