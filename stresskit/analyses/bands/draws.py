"""What is drawn: the sources that a study has, and the random numbers of each draw.

Numbers come in batches of BATCH draws, each source from a stream of its own (seed, source, batch), so a draw is the same
whatever other sources there are, however many draws follow, on any number of threads, and for every scenario.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.bands.coefficients import CoefficientSpread, coefficient_spread
from stresskit.analyses.bands.lgd import LgdSpread, lgd_spread
from stresskit.analyses.bands.macro import PathSpread, path_spread
from stresskit.analyses.bands.shocks import PeriodShocks, period_shocks
from stresskit.analyses.bands.tallies import period_slopes, tallies
from stresskit.core.errors import NumericError
from stresskit.core.values import ScenarioPath
from stresskit.runs.setting import Setting
from stresskit.spec.bands import Bands

Floats = NDArray[np.float64]

BATCH = 250
_COEFFICIENTS, _PERIODS, _MACRO = 1, 2, 3

#: Source -> its name in tables and pictures.
NAMES: Mapping[str, str] = {
    "coefficients": "coefficients",
    "periods": "period shocks",
    "macro": "macro path",
    "lgd": "LGD",
}


@dataclass(frozen=True, slots=True, eq=False)
class Spreads:
    """The sources of a study that vary, None where one does not; ``words``: source -> how it is drawn, or why not."""

    coefficients: CoefficientSpread | None
    periods: PeriodShocks | None
    macro: Mapping[str, PathSpread] | None
    lgd: LgdSpread | None
    words: Mapping[str, str]

    @property
    def sources(self) -> tuple[str, ...]:
        """Those that vary, in their order."""
        return tuple(s for s in NAMES if getattr(self, s) is not None)


@dataclass(frozen=True, slots=True, eq=False)
class Draw:
    """The random numbers of one draw; None for a source that does not vary."""

    normal: Floats | None
    chi2: float
    shocks: Mapping[str, Floats] | None
    path: Floats | None
    lgd: Any


def batch_of(spreads: Spreads, horizon: int, seed: int, batch: int) -> list[Draw]:
    """The BATCH draws of a batch; horizon: steps that shocks cover."""
    normals: Sequence[Any] = [None] * BATCH
    chi2, shocks, paths, lgd = (
        np.ones(BATCH),
        list[Any]([None] * BATCH),
        list[Any]([None] * BATCH),
        [None] * BATCH,
    )
    if spreads.coefficients is not None:
        rng = np.random.default_rng([seed, _COEFFICIENTS, batch])
        normals = list(rng.standard_normal((BATCH, spreads.coefficients.normals)))
        if np.isfinite(spreads.coefficients.df):
            chi2 = rng.chisquare(spreads.coefficients.df, BATCH)
    if spreads.periods is not None:
        rng = np.random.default_rng([seed, _PERIODS, batch])
        u = spreads.periods.paths(rng.standard_normal((BATCH, horizon, len(spreads.periods.causes))))
        shocks = [dict(zip(spreads.periods.causes, row, strict=True)) for row in u]
    if spreads.macro:
        rng = np.random.default_rng([seed, _MACRO, batch])
        paths = list(rng.standard_normal((BATCH, next(iter(spreads.macro.values())).factor.shape[2])))
    if spreads.lgd is not None:
        lgd = spreads.lgd.numbers(seed, batch, BATCH)
    return [Draw(*row) for row in zip(normals, map(float, chi2), shocks, paths, lgd, strict=True)]


def spreads_of(setting: Setting, paths: Sequence[ScenarioPath], spec: Bands) -> Spreads:
    """Every source asked for that the study can give. Raises NumericError when none varies."""
    risk_set, features = setting.data.loans.risk_set, setting.data.features
    words: dict[str, str] = {s: "not asked for" for s in NAMES if s not in spec.sources}
    coefficients, shocks, macro, lgd = None, None, None, None
    if {"coefficients", "periods"} & set(spec.sources):
        found = tallies(setting.fits, risk_set, features)
        shocks, told = _periods(found)
        if "coefficients" in spec.sources:
            coefficients, words["coefficients"] = _coefficients(setting, found, shocks, spec)
        if "periods" in spec.sources:
            words["periods"] = told
        else:
            shocks = None
    if "macro" in spec.sources:
        macro, words["macro"] = _macro(setting, paths, spec)
    if "lgd" in spec.sources:
        lgd, words["lgd"] = lgd_spread(setting, spec.lgd_se)
    out = Spreads(coefficients, shocks, macro, lgd, words)
    if not out.sources:
        why = "; ".join(f"{NAMES[s]}: {words[s]}" for s in NAMES if s in words)
        raise NumericError(f"nothing varies, so there is no band. {why}")
    return out


def _coefficients(
    setting: Setting, found: Any, shocks: PeriodShocks | None, spec: Bands
) -> tuple[CoefficientSpread | None, str]:
    slopes, remembers = None, shocks is not None and bool(shocks.memory.any()) and spec.covariance == "period"
    try:
        if remembers:
            data = setting.data
            slopes = {
                c: period_slopes(f, data.loans.risk_set, data.features) for c, f in setting.fits.items()
            }
        spread = coefficient_spread(setting.fits, found, spec.covariance, shocks=shocks, slopes=slopes)
    except NumericError as error:
        return None, f"left out: {error}"
    count = sum(c.size for c in spread.centre.values())
    of = f"{count} coefficients of {', '.join(spread.causes)}"
    if spec.covariance == "model":
        return (
            spread,
            f"{of}, each hazard by itself, loan-periods taken as independent: too narrow wherever periods have shocks",
        )
    if remembers:
        memory = ", the memory of shocks counted in"
        return (
            spread,
            f"{of}, jointly, clustered by calendar period{memory}; t with {spread.df:g} degrees of freedom",
        )
    robust = ", robust to serial correlation" if spec.covariance == "period_hac" else ""
    return (
        spread,
        f"{of}, jointly, clustered by calendar period{robust}; t with {spread.df:g} degrees of freedom",
    )


def _periods(found: Any) -> tuple[PeriodShocks | None, str]:
    try:
        shocks = period_shocks(found)
    except NumericError as error:
        return None, f"left out: {error}"
    told = [
        f"{c}: standard deviation {sd:.1%}, autocorrelation {memory:.2f}, from {shocks.periods[c]} periods"
        for c, sd, memory in zip(shocks.causes, shocks.sd, shocks.memory, strict=True)
    ]
    if len(shocks.causes) > 1:
        told.append(
            f"correlation {shocks.correlation[0, 1]:.2f} between {shocks.causes[0]} and {shocks.causes[1]}"
        )
    if not shocks.sd.any():
        return None, "periods differ no more than chance lets them: no shocks (" + "; ".join(told) + ")"
    return shocks, "; ".join(told) + "; mean kept, E[e^u] = 1"


def _macro(
    setting: Setting, paths: Sequence[ScenarioPath], spec: Bands
) -> tuple[Mapping[str, PathSpread] | None, str]:
    model = setting.data.var
    if model is None:
        return None, "left out: the study declares no macro.var, so nothing says how paths vary"
    made = {p.name: path_spread(model, p, vary_stated=spec.stated == "vary") for p in paths}
    if not any(s.varies for s in made.values()):
        return (
            None,
            "scenarios state every value of the path: nothing is left to vary (bands.stated: vary lets them)",
        )
    order = f"VAR({model.lags}) of {', '.join(model.names)}, {model.nobs} periods"
    if spec.stated == "vary":
        return made, f"{order}; the whole path varies around the scenario, stated values included"
    return (
        made,
        f"{order}; stated values are the condition and stay, filled ones and those after the last stated one vary",
    )
