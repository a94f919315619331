"""One specification: fitted to the common sample, refitted and scored on every window."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, NumericError
from stresskit.core.period import format_period
from stresskit.core.values import FeatureTable
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.kernels.blocks import totals
from stresskit.search.candidates import Option
from stresskit.search.measures import inflation
from stresskit.search.sample import Sample, Window
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]
Tick = Callable[[], None]


@dataclass(frozen=True, slots=True)
class TermFact:
    """A searched macro term as fitted; p_value two-sided, clustered by period; effect: of one standard deviation."""

    name: str
    expect: str
    coef: float
    se: float
    p_value: float
    vif: float
    effect: float

    @property
    def sign_ok(self) -> bool | None:
        return None if not self.expect else (self.coef > 0) == (self.expect == "positive")


@dataclass(frozen=True, slots=True, eq=False)
class Score:
    """Log-likelihood of a window's periods, (length,), under a refit up to its cut-off; why there is none."""

    llf: Floats
    error: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Trial:
    """A specification with everything measured on it.

    error   message of the fit that failed, "" when it did not; then terms are empty and figures NaN
    vif     largest variance inflation factor among all macro terms, kept ones included
    scores  one per window
    failed_gates  names of the gates that its fit to all rows does not pass (docs/gates.md); a study with it is not projected
            without a reason
    """

    chosen: tuple[Option, ...]
    terms: tuple[TermFact, ...]
    n_coefficients: int
    llf: float
    aic: float
    df: float
    vif: float
    scores: tuple[Score, ...]
    error: str = ""
    failed_gates: tuple[str, ...] = ()

    @property
    def p_value(self) -> float:
        """Largest of the searched terms: small only when every one of them is needed. NaN without one."""
        values = [t.p_value for t in self.terms]
        return float(np.max(values)) if values else float("nan")

    @property
    def score_error(self) -> str:
        return next((s.error for s in self.scores if s.error), "")

    @property
    def window_llf(self) -> Floats:
        """(windows,) total of each window; NaN where it has no score."""
        return np.array([s.llf.sum() for s in self.scores])

    @property
    def period_llf(self) -> Floats:
        """Log-likelihood of every scored period, window after window."""
        return np.concatenate([s.llf for s in self.scores])


@dataclass(frozen=True, slots=True, eq=False)
class Bench:
    """What all trials share: sample, features, cause, and per-period values and weights of the features."""

    sample: Sample
    features: FeatureTable
    cause: str
    threads: int = 1

    def fit(self, spec: HazardSpec) -> HazardFit:
        return fit_hazard(spec, self.sample.risk_set, self.features, cause=self.cause, threads=self.threads)

    def at_risk(self, names: Sequence[str]) -> tuple[Floats, Floats]:
        """(weight at risk (P,), feature values (P, k)) over the periods with rows of the cause."""
        weight, _ = self.sample.rows.by_period()
        used = np.flatnonzero(weight > 0)
        at = self.sample.rows.first_period - self.features.start + used
        columns = [self.features.column(n)[at] for n in names]
        return weight[used], np.column_stack(columns) if columns else np.empty((used.size, 0))


def try_specification(bench: Bench, spec: HazardSpec, chosen: tuple[Option, ...], tick: Tick) -> Trial:
    """Fit, refit, score. A NumericError becomes the trial's ``error`` or its score's."""
    fit: HazardFit | None = None
    error = ""
    try:
        fit = bench.fit(spec)
    except NumericError as e:
        error = str(e)
    tick()
    scores = []
    for window in bench.sample.windows:
        # What cannot be fitted to all rows is not scored: it could not be used.
        scores.append(score(bench, spec, window) if fit is not None else Score(_none(window), "not fitted"))
        tick()
    if fit is None:
        nan = float("nan")
        return Trial(chosen, (), 0, nan, nan, nan, _vif(bench, spec)[1], tuple(scores), error)
    terms, largest = _terms(bench, spec, fit, chosen)
    df = fit.covariances.degrees("period")
    failed = tuple(g.name for g in fit.failed_gates)
    return Trial(
        chosen, terms, len(fit.params), fit.llf, fit.aic, df, largest, tuple(scores), failed_gates=failed
    )


def _vif(bench: Bench, spec: HazardSpec) -> tuple[dict[str, float], float]:
    names = spec.macro_features()
    if not names:
        return {}, float("nan")
    weight, values = bench.at_risk(names)
    factors = inflation(values, weight)
    return dict(zip(names, map(float, factors), strict=True)), float(factors.max())


def _terms(
    bench: Bench, spec: HazardSpec, fit: HazardFit, chosen: Sequence[Option]
) -> tuple[tuple[TermFact, ...], float]:
    factors, largest = _vif(bench, spec)
    p, se = fit.p_values("period"), fit.standard_errors("period")
    out = []
    for option in chosen:
        weight, value = bench.at_risk((option.name,))
        mean = np.average(value[:, 0], weights=weight)
        spread = float(np.sqrt(np.average((value[:, 0] - mean) ** 2, weights=weight)))
        coef = float(fit.params[option.name])
        out.append(
            TermFact(
                name=option.name,
                expect=option.expect or "",
                coef=coef,
                se=float(se[option.name]),
                p_value=float(p[option.name]),
                vif=factors[option.name],
                effect=coef * spread,
            )
        )
    return tuple(out), largest


def score(bench: Bench, spec: HazardSpec, window: Window) -> Score:
    """Refit up to the window's cut-off; log-likelihood of each period after it."""
    try:
        fit = fit_hazard(spec, window.train, bench.features, cause=bench.cause, threads=bench.threads)
        return Score(log_likelihood(fit, window, bench.features))
    except (NumericError, DataError) as e:
        return Score(
            _none(window), f"refit up to {format_period(window.cutoff, bench.sample.frequency)}: {e}"
        )


def log_likelihood(fit: HazardFit, window: Window, features: FeatureTable) -> Floats:
    """(length,) log-likelihood of the window's periods under a fit that has not seen them.

    Raises DataError for a level that the fit does not know.
    """
    at = window.period - features.start
    eta = fit.predictor(window.frame.assign(**{n: features.column(n)[at] for n in fit.feature_names}))
    # On the predictor: a hazard that is 1 in floating point still has a likelihood of its own.
    llf, event = np.array(fit.link.survive(eta, "observed")[0]), np.flatnonzero(window.event)
    llf[event] = fit.link.event(eta[event], "observed")[0]
    return totals(window.period - window.cutoff - 1, window.weight * llf, window.length)


def _none(window: Window) -> Floats:
    return np.full(window.length, np.nan)
