"""The recovery part of a study: workouts read, curves and bands, regressions fitted, LGD for the loss stage, tables."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from types import MappingProxyType

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import NumericError, UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, MacroHistory, Portfolio, no_features
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.loss.lgd import LgdSource, StaticLgd
from stresskit.macro.features import build_features
from stresskit.recovery import evidence
from stresskit.recovery.cases import CURE, OPEN, Workouts, crossed_labels
from stresskit.recovery.curves import Bands, RecoveryCurve, curves_by, open_case_estimates, resampled
from stresskit.recovery.lgd import HazardLgd, curve_lgd
from stresskit.recovery.parametric import cox_table, parametric_curve
from stresskit.recovery.read import WorkoutData, read_workouts
from stresskit.recovery.regression import CURED, RECOVERED, REGRESSIONS, risk_set_of
from stresskit.spec.recovery import Recovery
from stresskit.spec.study import RecoveryLgd, Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Say = Callable[[str], None]

ALL_CASES = "all cases"
LEVEL = 0.9


def reach_of_recovery(study: Study) -> int:
    """Periods beyond the last projected step that a path has to reach: a default in the last step is worked out after it."""
    lgd = study.loss.lgd
    hazard = isinstance(lgd, RecoveryLgd) and lgd.recovery == "hazard"
    return study.recovery.end if hazard and study.recovery is not None else 0


def workout_files(study: Study) -> tuple[str, ...]:
    """Case table, then the table of cash flows where there is one."""
    spec = _spec(study)
    return (spec.cases,) if spec.flows is None else (spec.cases, spec.flows.file)


@dataclass(frozen=True, slots=True)
class RecoveryResult:
    """Workouts and everything estimated from them.

    data    workouts with reconciliation and findings
    curves  "" for all cases, then a curve per segment
    bands   the same keys; empty without resampling
    tables  name -> table, see :func:`recovery_tables`
    """

    spec: Recovery
    data: WorkoutData
    curves: Mapping[str, RecoveryCurve]
    bands: Mapping[str, Bands]
    tables: Mapping[str, pd.DataFrame]


def estimate_recovery(
    study: Study, data: WorkoutData, *, say: Say | None = None, tables: bool = True
) -> RecoveryResult:
    """Curves by segment; with ``tables`` their bands and all tables. Raises NumericError for a segment without support."""
    spec, w = _spec(study), data.workouts
    curves = curves_by(w, spec.by, cure_loss=spec.cure_loss, support=spec.support)
    bands: dict[str, Bands] = {}
    if not tables:
        return RecoveryResult(
            spec, data, MappingProxyType(curves), MappingProxyType(bands), MappingProxyType({})
        )
    if spec.resamples:
        if say is not None:
            say(f"resampling {w.n_cases:,} workouts, {spec.resamples} times")
        labels = w.labels(spec.by)
        for k, (name, curve) in enumerate(curves.items()):
            part = w if not name else w.select(labels == name)
            rng = np.random.default_rng([spec.seed, k])
            bands[name] = resampled(part, curve, resamples=spec.resamples, rng=rng, level=LEVEL)
    made = recovery_tables(spec, data, curves, bands)
    return RecoveryResult(
        spec, data, MappingProxyType(curves), MappingProxyType(bands), MappingProxyType(made)
    )


def recovery_tables(
    spec: Recovery, data: WorkoutData, curves: Mapping[str, RecoveryCurve], bands: Mapping[str, Bands]
) -> dict[str, pd.DataFrame]:
    """Tables for folder, report and workbook.

    summary         segment, cases, open_cases, amount, lgd, lower, upper, se, cost, lgd_by_cases, weibull, loglogistic,
                    long_run_average, last_supported
    curves          a row per segment and workout period, with the band of the unresolved share
    treatments      segment, treatment, lgd, cases, against_ours
    cox             term, coef, se of a Cox regression on the case columns that recovery.hazard reads: a comparison; empty without any
    resolved, triangle, hold_out, worst_years, open_cases, reconciliation, findings
    """
    w, labels = data.workouts, data.workouts.labels(spec.by)
    by_case = curves_by(w, spec.by, cure_loss=spec.cure_loss, support=spec.support, by="cases")
    rows, frames, treated = [], [], []
    for name, curve in curves.items():
        part = w if not name else w.select(labels == name)
        shown, band = name or ALL_CASES, bands.get(name)
        rows.append(
            {
                "segment": shown,
                "cases": curve.cases,
                "open_cases": curve.open_cases,
                "amount": curve.amount,
                "lgd": curve.lgd,
                "lower": band.lgd_lower if band else np.nan,
                "upper": band.lgd_upper if band else np.nan,
                "se": band.lgd_se if band else np.nan,
                "cost": float(curve.cost[-1]),
                "lgd_by_cases": by_case[name].lgd,
                "weibull": _parametric(part, "weibull"),
                "loglogistic": _parametric(part, "loglogistic"),
                "long_run_average": evidence.long_run_average(part, curve),
                "last_supported": curve.last_supported,
            }
        )
        frame = curve.frame().assign(segment=shown)
        frame["lower"] = band.lower if band else np.nan
        frame["upper"] = band.upper if band else np.nan
        frames.append(frame)
        treated.append(evidence.treatments(part, curve).assign(segment=shown))
    whole = curves[""]
    support = spec.support
    return {
        "summary": pd.DataFrame(rows),
        "curves": pd.concat(frames, ignore_index=True),
        "treatments": pd.concat(treated, ignore_index=True)[
            ["segment", "treatment", "lgd", "cases", "against_ours"]
        ],
        "resolved": evidence.resolved_by_year(w),
        "triangle": evidence.triangle(w),
        "hold_out": evidence.hold_out(w, cure_loss=spec.cure_loss, support=support),
        "worst_years": evidence.worst_years(w, whole),
        "cox": _cox(spec, w),
        "open_cases": open_case_estimates(w, dict(curves), spec.by),
        "reconciliation": data.reconciliation,
        "findings": data.findings,
    }


def _cox(spec: Recovery, w: Workouts) -> pd.DataFrame:
    """A Cox fit on the case columns of the regression; no rows where there are none, or nothing was recovered."""
    columns = () if spec.hazard is None else tuple(c for c in spec.hazard.loan_columns() if c in w.static)
    varied = tuple(c for c in columns if np.unique(w.static[c].astype(str)).size > 1)
    if not varied or not w.recovered.any():
        return pd.DataFrame({"term": [], "coef": [], "se": []})
    return cox_table(w, varied)


def _parametric(part: Workouts, family: str) -> float:
    try:
        return parametric_curve(part, family).lgd
    except NumericError:
        return float("nan")


def read_study_workouts(
    study: Study,
    *,
    base: Path,
    frequency: Frequency,
    as_of: int,
    cases: pd.DataFrame | None = None,
    flows: pd.DataFrame | None = None,
) -> WorkoutData:
    """Workouts of a study. Raises what :func:`stresskit.recovery.read.read_workouts` raises."""
    return read_workouts(_spec(study), base=base, frequency=frequency, as_of=as_of, cases=cases, flows=flows)


def fit_recovery(
    study: Study, data: WorkoutData, history: MacroHistory | None, *, frequency: Frequency
) -> dict[str, HazardFit]:
    """The regressions that the study declares: "recovered", "cured". Raises what :func:`fit_hazard` raises."""
    w = data.workouts
    stays = risk_set_of(w)
    first, last = int((w.default + w.entered).min()) + 1, w.until
    if study.macro is None or history is None:
        features = no_features(frequency, first, last - first + 1)
    else:
        features = build_features(study.macro, history, model=frequency, start=first, end=last)
    fits = {}
    for key, regression in study.recovery_hazards().items():
        cause = REGRESSIONS[key]
        fits[cause] = fit_hazard(regression, stays, features, cause=cause)
    return fits


def lgd_in_default(recovery: RecoveryResult, lgd: RecoveryLgd, book: Portfolio) -> Floats:
    """(k,) loss per unit owed at default of loans in default already, costs and floor as the study declares.

    A loan with an open workout of its own identifier takes the best estimate of that case: what it has not recovered, times the loss rate
    of its segment's curve from there on. Others take the LGD of a new default.
    """
    spec, table = recovery.spec, recovery.tables["open_cases"]
    own = dict(zip(table["case"], table["loss_rate"], strict=True))
    labels = _book_labels(book, spec.by)
    curves = recovery.curves
    found = np.array(
        [
            own.get(str(name), curves.get(str(label), curves[""]).lgd)
            for name, label in zip(book.loan_ids, labels, strict=True)
        ],
        dtype=np.float64,
    )
    out: Floats = np.clip(found + _book_costs(lgd, recovery, book), lgd.floor, 1.0)
    return out


class CostedLgd:
    """LGD of another source plus costs (n,), not below a floor and not above 1."""

    def __init__(self, source: LgdSource, cost: Floats, floor: float) -> None:
        self._source, self._cost, self._floor = source, cost, floor

    def tile(self, loans: Ints, steps: int, exposure: Floats) -> Floats:
        found = self._source.tile(loans, steps, exposure)
        cost = self._cost[loans]
        out: Floats = np.clip(found + (cost if found.ndim == 1 else cost[:, None]), self._floor, 1.0)
        return out


def recovery_lgd(
    lgd: RecoveryLgd,
    recovery: RecoveryResult,
    fits: Mapping[str, HazardFit],
    portfolio: Portfolio,
    features: FeatureTable,
    *,
    horizon: int,
) -> LgdSource:
    """The LGD source of one path. Raises UsageError when the regression was not fitted, DataError for loans without a curve."""
    spec = recovery.spec
    cost = _book_costs(lgd, recovery, portfolio)
    if lgd.recovery == "curve":
        return CostedLgd(StaticLgd(curve_lgd(recovery.curves, portfolio, spec.by)), cost, lgd.floor)
    if RECOVERED not in fits:
        raise UsageError(
            f"loss.lgd takes the recovery hazard, and no fit of {RECOVERED!r} was given; fits: {', '.join(fits) or 'none'}"
        )
    if bool((recovery.data.workouts.kind == CURE).any()) and CURED not in fits:
        raise UsageError(
            "some workouts cured, so loss.lgd from the recovery hazard needs recovery.cure_hazard beside it"
        )
    source = HazardLgd(
        {c: fits[c] for c in (RECOVERED, CURED) if c in fits}, portfolio, features,
        end=spec.end, horizon=horizon, cure_loss=spec.cure_loss,
    )  # fmt: skip
    return CostedLgd(source, cost, lgd.floor)


def _book_labels(portfolio: Portfolio, columns: tuple[str, ...]) -> NDArray[np.object_]:
    known = all(c in portfolio.static for c in columns)
    return crossed_labels(portfolio.static, columns if known else (), portfolio.n_loans)


def _book_costs(lgd: RecoveryLgd, recovery: RecoveryResult, portfolio: Portfolio) -> Floats:
    """(n,) costs of a workout per unit owed at default, by the loan's segment; 0 where the study leaves them out."""
    if not lgd.costs:
        return np.zeros(portfolio.n_loans)
    costs = {name: float(curve.cost[-1]) for name, curve in recovery.curves.items()}
    return np.array([costs.get(str(v), costs[""]) for v in _book_labels(portfolio, recovery.spec.by)])


def recovery_cautions(study: Study, result: RecoveryResult) -> list[str]:
    """What a reader of the losses has to know about the LGD."""
    w, whole = result.data.workouts, result.curves[""]
    out = []
    table = result.tables["treatments"]
    mine = table[table["segment"] == ALL_CASES].set_index("treatment")["lgd"]
    share = float(w.amount[w.kind == OPEN].sum() / w.amount.sum())
    out.append(
        f"{whole.open_cases:,} of {whole.cases:,} workouts are open ({share:.0%} of the amount owed at default) and counted as censored: LGD {whole.lgd:.1%}; "
        f"from closed cases only it would be {mine['closed cases only']:.1%}, with open cases taken as finished {mine['open cases as finished']:.1%}."
    )
    thin = [name or ALL_CASES for name, c in result.curves.items() if c.last_supported < w.end]
    if thin:
        out.append(
            f"Recovery is not observed to the declared end of workout ({w.end} periods) for {', '.join(thin)}: no recovery is assumed after the last "
            "period with enough cases."
        )
    return out


def _spec(study: Study) -> Recovery:
    if study.recovery is None:
        raise UsageError("the study has no section recovery")
    return study.recovery
