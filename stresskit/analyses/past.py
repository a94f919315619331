"""A study as it would have been at a past date: loans, macro history and fits with what was known then.

The loans are read again with ``as_of`` at the cut-off, so every rule of the study is applied to the rows of that
date: later rows are left out, exits after it are not seen, loans that enter later are not there.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np

from stresskit.core.errors import DataError, NumericError, UsageError
from stresskit.core.period import Frequency, convert, format_period, parse_period
from stresskit.core.values import AFTERWARDS, GIVEN, FeatureTable, MacroHistory, RiskSet, ScenarioPath
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.macro.calendar import first_after, last_needed
from stresskit.macro.features import build_features
from stresskit.macro.read import read_history
from stresskit.runs.api import prepare
from stresskit.runs.inputs import Prepared, StudyFile
from stresskit.runs.recovery import fit_recovery
from stresskit.runs.setting import Setting, set_up
from stresskit.runs.tables import coefficient_table
from stresskit.spec.load import load_scenario
from stresskit.spec.study import ConstantLgd, Loss, RecoveryLgd, SegmentLgd
from stresskit.spec.terms import InteractionTerm, LoanTerm, term_name

#: The path of the macro variables that really came.
CAME = "what came"
#: Sections that a projection of defaults, payoffs and losses does not read.
_ASIDE = ("years", "staging", "capital", "adjustments", "analyses")


@dataclass(frozen=True, slots=True, eq=False)
class Past:
    """A study done again at a past date.

    cutoff   last known period (ordinal)
    steps    periods compared after it
    setting  the study of that date; its first path is what came, the others are the scenarios written then
    known    macro features on the periods whose values were published by then: what the fits read
    failed   gates that a fit did not pass, "cause: gate"
    signs    coefficients whose sign is not the expected one, "cause: term"
    joined   levels that a fit joined because nothing told them apart by then, "cause: what"
    lgd_now  whether the LGD is that of the study as it stands, because the workouts of that date gave none
    """

    cutoff: int
    steps: int
    setting: Setting
    known: FeatureTable
    failed: tuple[str, ...]
    signs: tuple[str, ...]
    joined: tuple[str, ...]
    lgd_now: bool

    @property
    def fits(self) -> Mapping[str, HazardFit]:
        return self.setting.fits

    @property
    def label(self) -> str:
        return format_period(self.cutoff, self.setting.file.frequency)


def done_again(
    now: Setting,
    cutoff: int,
    steps: int,
    *,
    publication: int = 0,
    vintage: str | None = None,
    scenarios: Sequence[str] = (),
    pool: bool = True,
) -> Past:
    """The study at ``cutoff``, fitted; gates are recorded and do not stop it.

    publication  macro periods that pass before a value is published
    vintage      macro file as it was published then, relative to the study
    scenarios    scenario files as they were written then
    pool         whether levels without events by then are joined where the study would refuse the fit

    Raises UsageError for a cut-off inside a macro period, DataError or NumericError when that date gives no fit or
    no book.
    """
    demand_end_of_period(cutoff, now.file.frequency, now.data.history)
    file, from_workouts = study_at(now.file, cutoff, steps, scenarios)
    if pool:
        file = _pooling(file)
    seen = partial(known_features, publication=publication, vintage=vintage)
    try:
        return _done(now, file, cutoff, steps, seen)
    except (DataError, NumericError):
        if not from_workouts:
            raise
    # The loans may well do without the workouts of that date, which can be too few.
    return replace(_done(now, _with_lgd_of_now(now, file), cutoff, steps, seen), lgd_now=True)


def _done(
    now: Setting,
    file: StudyFile,
    cutoff: int,
    steps: int,
    seen: Callable[[StudyFile, Prepared], FeatureTable],
) -> Past:
    data = _prepared(now, file, cutoff, now.data.history)
    known = seen(file, data)
    file, dropped = _without_silent_columns(file, data.loans.risk_set)
    fits = {c: fit_hazard(s, data.loans.risk_set, known, cause=c) for c, s in file.study.hazards.items()}
    fitted: dict[str, HazardFit] = {str(c): f for c, f in fits.items()}
    if data.workouts is not None and file.study.recovery_hazards():
        fitted |= fit_recovery(file.study, data.workouts, data.history, frequency=file.frequency)
    setting = set_up(file, data, MappingProxyType(fitted), tables=False)
    failed = tuple(f"{c}: {g.name}" for c, f in fits.items() for g in f.gates if not g.passed)
    joined = (*dropped, *(f"{c}: {text}" for c, f in fits.items() for text in f.estimation.pooled))
    return Past(cutoff, steps, setting, known, failed, _wrong_signs(fits), joined, lgd_now=False)


def _wrong_signs(fits: Mapping[Any, HazardFit]) -> tuple[str, ...]:
    table = coefficient_table(fits)
    wrong = table[table["sign_ok"].eq(False)]
    return tuple(map(str, wrong["cause"] + ": " + wrong["term"]))


def _prepared(now: Setting, file: StudyFile, cutoff: int, history: MacroHistory | None) -> Prepared:
    given = dict(now.data.frames)
    given.pop("book", None)
    if file.study.recovery is None:
        given.pop("workouts", None)
        given.pop("cashflows", None)
    return prepare(
        file, macro=None if history is None else known_history(history, file),
        paths=lambda periods: (what_came(history, file, cutoff, periods),), **given,
    )  # fmt: skip


def demand_end_of_period(cutoff: int, model: Frequency, history: MacroHistory | None) -> None:
    """UsageError for a cut-off inside a macro period: part of its value would be of later months."""
    if history is None or history.frequency is model:
        return
    quarter = int(convert(cutoff, model, history.frequency))
    if int(convert(cutoff + 1, model, history.frequency)) == quarter:
        end = next(
            p for p in range(cutoff, cutoff + 4) if convert(p + 1, model, history.frequency) != quarter
        )
        raise UsageError(
            f"the cut-off {format_period(cutoff, model)} lies inside the macro period "
            f"{format_period(quarter, history.frequency)}, whose value was not known then; use "
            f"{format_period(end, model)} or an earlier end of a {history.frequency.value}"
        )


def study_at(
    file: StudyFile, cutoff: int, steps: int, scenarios: Sequence[str] = ()
) -> tuple[StudyFile, bool]:
    """The study's text with ``as_of`` at the cut-off and nothing that a comparison does not need; whether its LGD is from
    workouts. Amounts are not discounted: what came is not either."""
    study = file.study
    loans, recovery = study.loans, study.recovery
    label = format_period(cutoff, file.frequency)
    loans = loans.model_copy(update={"observed_until": _earlier(loans.observed_until, cutoff, file)})
    from_workouts = isinstance(study.loss.lgd, RecoveryLgd)
    if recovery is not None:
        until = _earlier(recovery.observed_until, cutoff, file)
        recovery = recovery.model_copy(update={"observed_until": until}) if from_workouts else None
    macro = study.macro
    if macro is not None and not scenarios:
        macro = macro.model_copy(update={"var": None})
    changes = {
        "as_of": label,
        "loans": loans,
        "macro": macro,
        "recovery": recovery,
        "portfolio": study.portfolio.model_copy(update={"file": None}),
        "loss": study.loss.model_copy(update={"discount": "none"}),
        "horizon": steps,
        "breakdowns": (),
        **dict.fromkeys(_ASIDE),
    }
    loaded = tuple(load_scenario(_there(file.base, name)) for name in scenarios)
    return replace(file, study=study.model_copy(update=changes), scenarios=loaded), from_workouts


def _pooling(file: StudyFile) -> StudyFile:
    hazards = {
        c: s.model_copy(update={"when_separated": "pool"}) if s.when_separated == "refuse" else s
        for c, s in file.study.hazards.items()
    }
    return replace(file, study=file.study.model_copy(update={"hazards": hazards}))


def _without_silent_columns(file: StudyFile, risk_set: RiskSet) -> tuple[StudyFile, list[str]]:
    """The study without category columns of which one level alone has had events, and what was left out.

    Such a column cannot be pooled: nothing would be left to compare.
    """
    hazards, told = dict(file.study.hazards), []
    for cause, spec in file.study.hazards.items():
        if spec.when_separated != "pool":
            continue
        events = risk_set.stay_loan[risk_set.stay_cause == risk_set.causes.index(cause) + 1]
        gone = set()
        for term in spec.terms:
            column = (
                risk_set.static.get(term.loan)
                if isinstance(term, LoanTerm) and term.as_ == "category"
                else None
            )
            if column is None:
                continue
            levels = np.unique(column[events].astype(str))
            if levels.size <= 1 < np.unique(column.astype(str)).size:
                gone.add(term_name(term))
                told.append(
                    f"{cause}: {term_name(term)} left out, no event in any level but {', '.join(levels) or 'none'}"
                )
        kept = tuple(
            t
            for t in spec.terms
            if term_name(t) not in gone and not (isinstance(t, InteractionTerm) and gone & set(t.interaction))
        )
        hazards[cause] = spec.model_copy(update={"terms": kept})
    return replace(file, study=file.study.model_copy(update={"hazards": hazards})), told


def _there(base: Path, name: str) -> Path:
    if not (base / name).is_file():
        raise UsageError(f"analyses.backtest.scenarios_then: there is no file {name!r} beside the study")
    return base / name


def _earlier(until: str | None, cutoff: int, file: StudyFile) -> str | None:
    """None where the date stated is not before the cut-off: then the cut-off itself is the end."""
    if until is None:
        return None
    return until if parse_period(until, file.frequency) < cutoff else None


def _with_lgd_of_now(now: Setting, file: StudyFile) -> StudyFile:
    """The study with the LGD of its workouts up to today, by segment where the recovery curves are by one column."""
    found = now.recovery
    if found is None:
        raise NumericError("the study has no workouts to take an LGD from")
    by = found.spec.by
    lgd: ConstantLgd | SegmentLgd = ConstantLgd(constant=min(found.curves[""].lgd, 1.0))
    if len(by) == 1:
        levels = {str(n): min(c.lgd, 1.0) for n, c in found.curves.items() if n}
        if by[0] in now.portfolio.static and set(now.portfolio.static[by[0]].astype(str)) <= set(levels):
            lgd = SegmentLgd(by=by[0], values=levels)
    loss: Loss = file.study.loss.model_copy(update={"lgd": lgd})
    return replace(file, study=file.study.model_copy(update={"loss": loss, "recovery": None}))


def cut_history(history: MacroHistory, last: int) -> MacroHistory:
    """History up to macro period ``last``."""
    kept = last - history.start + 1
    if kept <= 0:
        raise DataError(
            f"macro history begins in {format_period(history.start, history.frequency)}, after what a fit could read"
        )
    values = {name: v[:kept] for name, v in history.values.items()}
    return MacroHistory(history.frequency, history.start, values, history.units, history.place)


def known_history(history: MacroHistory, file: StudyFile, publication: int = 0) -> MacroHistory:
    """Macro periods that had ended at the study's as_of, less those not published yet."""
    first = first_after(file.as_of, model=file.frequency, macro=history.frequency)
    return cut_history(history, first - 1 - publication)


def known_features(
    file: StudyFile, data: Prepared, *, publication: int = 0, vintage: str | None = None
) -> FeatureTable:
    """Macro features from what was published at the study's as_of, on periods up to the last that they reach."""
    study, history = file.study, data.history
    if study.macro is None or history is None:
        return data.features
    if vintage is not None:
        if not (file.base / vintage).is_file():
            raise UsageError(f"analyses.backtest.vintages: there is no file {vintage!r} beside the study")
        macro = study.macro.model_copy(update={"file": vintage})
        history = read_history(macro, base=file.base, model=file.frequency)
    elif publication == 0:
        return data.features
    history = known_history(history, file, publication)
    used = {name for hazard in study.hazards.values() for name in hazard.macro_features()}
    lags = [f.lag for name, f in study.macro.features.items() if name in used]
    reach = history.end + min(lags, default=0)
    # Features that are not read must not shorten what can be: they are made for as long as they reach.
    narrow = study.macro.model_copy(
        update={"features": {n: f for n, f in study.macro.features.items() if n in used}}
    )
    last = min(file.as_of, int(convert(reach, history.frequency, file.frequency)))
    return build_features(narrow, history, model=file.frequency, start=data.features.start, end=last)


def what_came(
    history: MacroHistory | None, file: StudyFile, cutoff: int, periods: int, name: str = CAME
) -> ScenarioPath:
    """The macro variables after the cut-off as history has them, held at their last value beyond its end."""
    if history is None:
        return ScenarioPath(name, None, file.frequency, cutoff + 1, {}, {})
    start = first_after(cutoff, model=file.frequency, macro=history.frequency)
    last = last_needed(cutoff, periods, model=file.frequency, macro=history.frequency)
    if history.end < start:
        raise DataError(
            f"macro history ends in {format_period(history.end, history.frequency)}, so nothing came after the cut-off"
        )
    at = np.arange(start, last + 1) - history.start
    beyond = at > history.end - history.start
    at = np.minimum(at, history.end - history.start)
    values = {n: v[at] for n, v in history.values.items() if np.isfinite(v[at]).all()}
    flags = {n: np.where(beyond, AFTERWARDS, GIVEN).astype(np.int64) for n in values}
    return ScenarioPath(name, None, history.frequency, start, values, flags)
