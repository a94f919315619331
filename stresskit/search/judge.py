"""Rules applied to trials: reasons for refusal, and the order of those that satisfy every rule."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from stresskit.search.measures import StationarityTest, adjusted
from stresskit.search.trial import Trial
from stresskit.spec.search import Rules, SearchSpec

Floats = NDArray[np.float64]

#: Rules by code, in the order in which reasons are given.
RULES = ("fit", "sign", "p_value", "vif", "stationarity", "refit", "gain")


@dataclass(frozen=True, slots=True)
class Refusal:
    """Why a specification is not ranked: code of the rule, and the figures."""

    rule: str
    text: str


@dataclass(frozen=True, slots=True, eq=False)
class Judged:
    """A trial with its verdict.

    number      1, 2, ... in the order tried
    bonferroni, holm   its p-value, adjusted for the number tried
    gain        log-likelihood per row of all windows, less that of the hazard without the searched terms
    gain_total  the same difference, not divided by rows
    gain_se     its standard error from the spread between scored periods (periods taken as independent)
    better      windows in which the difference is above 0
    rank        1 for the best; None for refused ones
    """

    number: int
    trial: Trial
    bonferroni: float
    holm: float
    gain: float
    gain_total: float
    gain_se: float
    better: int
    refusals: tuple[Refusal, ...]
    rank: int | None = None


def difference_error(difference: Floats) -> float:
    """Standard error of the sum of per-period differences, (n,) (Diebold and Mariano 1995, without lags)."""
    n = difference.size
    return float(np.sqrt(n) * difference.std(ddof=1)) if n > 1 else float("nan")


def judge(
    trials: Sequence[Trial],
    base: Trial,
    rows: float,
    search: SearchSpec,
    tests: Mapping[str, StationarityTest],
) -> tuple[Judged, ...]:
    """Verdicts in order of rank, refused ones after, by the same criterion, failed ones last.

    base   the hazard without the searched terms
    rows   weight of all scored rows
    tests  feature -> stationarity of its history
    """
    p = np.array([t.p_value for t in trials])
    bonferroni, holm = adjusted(p, len(trials))
    out = []
    for i, trial in enumerate(trials):
        difference = trial.period_llf - base.period_llf
        total = float(difference.sum())
        used = {"raw": p[i], "bonferroni": bonferroni[i], "holm": holm[i]}[search.rules.p_value]
        out.append(
            Judged(
                number=i + 1,
                trial=trial,
                bonferroni=float(bonferroni[i]),
                holm=float(holm[i]),
                gain=total / rows,
                gain_total=total,
                gain_se=difference_error(difference),
                better=int((trial.window_llf > base.window_llf).sum()),
                refusals=tuple(_refusals(trial, search.rules, float(used), total / rows, tests)),
            )
        )
    return _ranked(out, search.rank_by == "aic")


def _ranked(verdicts: Sequence[Judged], by_aic: bool) -> tuple[Judged, ...]:
    def key(j: Judged) -> tuple[bool, bool, float, int]:
        value = j.trial.aic if by_aic else -j.gain
        unknown = not np.isfinite(value)
        return bool(j.refusals), unknown, 0.0 if unknown else value, j.number

    order = sorted(verdicts, key=key)
    return tuple(replace(j, rank=None if j.refusals else place) for place, j in enumerate(order, start=1))


def _refusals(
    trial: Trial, rules: Rules, p_used: float, gain: float, tests: Mapping[str, StationarityTest]
) -> list[Refusal]:
    out = [Refusal("fit", f"could not be fitted: {trial.error}")] if trial.error else []
    out += [
        Refusal("sign", f"{t.name} is {t.coef:.4g}, expected {t.expect}")
        for t in trial.terms
        if rules.sign == "require" and t.sign_ok is False
    ]
    if not trial.error and rules.max_p is not None and not p_used <= rules.max_p:
        out.append(Refusal("p_value", _p_text(trial, rules, p_used)))
    if rules.max_vif is not None and not trial.vif <= rules.max_vif:
        out.append(Refusal("vif", f"variance inflation {trial.vif:.3g} above {rules.max_vif:g}"))
    need = rules.stationarity
    for option in trial.chosen:
        test = tests[option.name]
        if not test.passes(need.require, need.level):
            out.append(Refusal("stationarity", f"{option.name}: {stationarity_text(test)}"))
    if trial.error:
        return out
    if trial.score_error:
        out.append(Refusal("refit", trial.score_error))
    elif rules.gain == "require" and not gain > 0:
        out.append(Refusal("gain", f"predicts worse out of time than no searched term: {gain:.3g} per row"))
    return out


def _p_text(trial: Trial, rules: Rules, p_used: float) -> str:
    if np.isnan(p_used):
        return "no p-value by period (too few periods)"
    worst = max(trial.terms, key=lambda t: t.p_value)
    if rules.p_value == "raw":
        return f"p of {worst.name} is {p_used:.3g}, above {rules.max_p:g}"
    return f"p of {worst.name} is {worst.p_value:.3g}, {p_used:.3g} by {rules.p_value.title()}, above {rules.max_p:g}"


def stationarity_text(test: StationarityTest) -> str:
    if test.verdict == "not tested":
        return f"not tested, {test.note}"
    ends = {0.01: "0.01 or less", 0.1: "0.1 or more"}
    return f"{test.verdict} (ADF p {test.adf_p:.3g}, KPSS p {ends.get(test.kpss_p, f'{test.kpss_p:.3g}')})"
