"""Collinearity, stationarity and significance after many trials."""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from statsmodels.tools.sm_exceptions import InterpolationWarning, SingularMatrixWarning
from statsmodels.tsa.stattools import adfuller, kpss

Floats = NDArray[np.float64]
Around = Literal["constant", "trend"]
Verdict = Literal["stationary", "unit root", "unclear", "not tested"]

#: Fewer values than this are not tested: the lag choice of both tests needs room.
SHORTEST = 20
_CODE = {"constant": "c", "trend": "ct"}


def inflation(values: Floats, weight: Floats) -> Floats:
    """(k,) variance inflation factors of columns (P, k), rows weighted by ``weight`` (P,).

    1 / (1 - R^2) of a column regressed on the others and a constant (Marquardt 1970, Technometrics 12).
    The features have one value per period, so weighing periods by their rows at risk is the same as
    regressing over all rows at risk. Infinite for a column that is a combination of the others.
    """
    k = values.shape[1]
    out = np.ones(k)
    root = np.sqrt(weight / weight.sum())[:, None]
    centred = root * (values - (weight[:, None] * values).sum(axis=0) / weight.sum())
    for j in range(k if k > 1 else 0):
        y, x = centred[:, j], np.delete(centred, j, axis=1)
        scale = np.sqrt((x * x).sum(axis=0))
        solution = np.linalg.lstsq(x / np.where(scale > 0, scale, 1.0), y, rcond=None)[0]
        rest = y - (x / np.where(scale > 0, scale, 1.0)) @ solution
        total, left = float(y @ y), float(rest @ rest)
        # A remainder of rounding size is none.
        out[j] = np.inf if left <= 1e-14 * total else total / left
    return out


@dataclass(frozen=True, slots=True)
class StationarityTest:
    """Tests of one series.

    adf_p      p-value of ADF, null: unit root (Dickey and Fuller 1979; p by MacKinnon 1994, lags by AIC)
    kpss_p     p-value of KPSS, null: stationary (Kwiatkowski and others 1992; its table ends at 0.01 and 0.1)
    verdict    stationary: ADF rejects, KPSS does not; unit root: the reverse; unclear: the tests disagree
    note       why it was not tested, else how to read a p-value at the end of its table
    """

    values: int
    adf: float
    adf_p: float
    adf_lags: int
    kpss: float
    kpss_p: float
    kpss_lags: int
    verdict: Verdict
    note: str = ""

    def passes(self, require: Literal["none", "adf", "kpss", "both"], level: float) -> bool:
        """Whether the rule is met; a series that was not tested meets none but "none"."""
        if require == "none":
            return True
        if self.verdict == "not tested":
            return False
        adf, stays = self.adf_p < level, self.kpss_p >= level
        return {"adf": adf, "kpss": stays, "both": adf and stays}[require]


def stationarity_of(series: Floats, *, level: float, around: Around) -> StationarityTest:
    """ADF and KPSS of a series without holes, (n,)."""
    x = np.asarray(series, dtype=np.float64)
    reason = ""
    if x.size < SHORTEST:
        reason = f"{x.size} values, fewer than {SHORTEST}"
    elif np.ptp(x) <= 1e-12 * max(float(np.abs(x).max()), 1e-300):
        reason = "it does not vary"
    if reason:
        return StationarityTest(x.size, np.nan, np.nan, 0, np.nan, np.nan, 0, "not tested", reason)
    code = _CODE[around]
    with warnings.catch_warnings():
        # KPSS beyond its table; said in the note instead.
        warnings.simplefilter("ignore", InterpolationWarning)
        # statsmodels 0.15 announces another shape of result; the positions read here stay.
        warnings.simplefilter("ignore", FutureWarning)
        # A regression without a unique solution is no test: a straight line, say, has nothing but its trend.
        warnings.simplefilter("error", SingularMatrixWarning)
        try:
            adf, adf_p, adf_lags = adfuller(x, regression=code, autolag="AIC")[:3]
            stat, stat_p, stat_lags = kpss(x, regression=code, nlags="auto")[:3]
        except (ValueError, np.linalg.LinAlgError, SingularMatrixWarning) as e:
            text = "its regression has no unique solution" if isinstance(e, SingularMatrixWarning) else str(e)
            return StationarityTest(x.size, np.nan, np.nan, 0, np.nan, np.nan, 0, "not tested", text)
    rejected, kept = adf_p < level, stat_p >= level
    verdict: Verdict = "unclear"
    if rejected == kept:
        verdict = "stationary" if kept else "unit root"
    note = ""
    if stat_p in (0.01, 0.1):
        note = f"KPSS p is {'below' if stat_p == 0.01 else 'above'} {stat_p}, where its table ends"
    return StationarityTest(
        x.size,
        float(adf),
        float(adf_p),
        int(adf_lags),
        float(stat),
        float(stat_p),
        int(stat_lags),
        verdict,
        note,
    )


def adjusted(p: Floats, tried: int) -> tuple[Floats, Floats]:
    """(Bonferroni, Holm) of p-values (n,), NaN for trials that gave none; ``tried`` >= n counts those too.

    Holm (1979, Scandinavian Journal of Statistics 6) rejects whatever Bonferroni rejects, and both hold for
    tests that depend on each other, as specifications with shared features do. A trial without p-value
    counts as one that was not significant.
    """
    bonferroni = np.minimum(1.0, tried * p)
    holm = np.full(p.shape, np.nan)
    order = [int(i) for i in np.argsort(p, kind="stable") if np.isfinite(p[i])]
    largest = 0.0
    for place, i in enumerate(order):
        largest = max(largest, min(1.0, (tried - place) * float(p[i])))
        holm[i] = largest
    return bonferroni, holm
