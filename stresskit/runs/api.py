"""The job as four calls: load, prepare, fit, project. Same calls in the terminal and in a notebook."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import TextError, UsageError
from stresskit.core.values import FeatureTable, MacroHistory, RiskSet, ScenarioPath, no_features
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.hazard.terms import level_codes
from stresskit.kernels.blocks import processors
from stresskit.loss.book import Route
from stresskit.loss.result import LossResult
from stresskit.macro.calendar import first_after
from stresskit.macro.features import alignment_sample, build_features
from stresskit.macro.read import read_history
from stresskit.macro.var import VarModel
from stresskit.macro.var_fit import fit_var
from stresskit.panel.prepare import prepare_loans
from stresskit.panel.result import LoanData
from stresskit.projection.project import check_origin, life_steps
from stresskit.recovery.regression import REGRESSIONS
from stresskit.runs.adjustments import adjustment_notes, adjustment_table, with_adjusted
from stresskit.runs.cautions import before_standing, cautions
from stresskit.runs.contracts import (
    check_history,
    moving_now,
    path_variables,
    read_schedules,
    schedule_files,
    settle_contracts,
    with_moving,
)
from stresskit.runs.gates import Verdict, gate_record, gate_table, refuse_failed
from stresskit.runs.inputs import Prepared as Prepared
from stresskit.runs.inputs import StudyFile as StudyFile
from stresskit.runs.loan_rows import LoanRows
from stresskit.runs.moving_range import moving_cautions
from stresskit.runs.named_scenarios import check_named_scenarios
from stresskit.runs.plausibility import facts, plausibility_cautions, plausibility_tables, with_bands
from stresskit.runs.record import build_record, digest_file, relative
from stresskit.runs.records import RESERVED, WEIGHTED, StudyResult
from stresskit.runs.recovery import (
    fit_recovery,
    lgd_in_default,
    reach_of_recovery,
    read_study_workouts,
    recovery_cautions,
    workout_files,
)
from stresskit.runs.responses import response_table
from stresskit.runs.saved_models import model_record
from stresskit.runs.setting import Setting, set_up
from stresskit.runs.tables import (
    coefficient_table,
    diagnostic_tables,
    feature_table,
    finding_table,
    fit_facts,
    path_table,
    segment_table,
    summary_table,
)
from stresskit.runs.year_setup import standing_points, year_view
from stresskit.scenario.plausibility import assess_paths
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from stresskit.spec.load import load_study as load_text
from stresskit.spec.scenario import TableMapping
from stresskit.spec.study import RecoveryLgd
from stresskit.spec.terms import HazardSpec

Say = Callable[[str], None]
Progress = Callable[[int, int], None]


def _silent(_: str) -> None:
    return None


def load_study(path: str | Path) -> StudyFile:
    """Read and check a study file and the scenario files it names.

    Raises TextError (file:line:column, key, what was expected, nearest valid name).
    """
    file = Path(path)
    loaded = load_text(file)
    base = loaded.file.parent
    scenarios = []
    for i, name in enumerate(loaded.model.scenarios):
        if not (base / name).is_file():
            near = (
                sorted(p.name for p in (base / name).parent.glob("*.y*ml"))
                if (base / name).parent.is_dir()
                else []
            )
            there = f"; that folder has {', '.join(near)}" if near else ""
            raise loaded.error(("scenarios", i), f"scenario file {name!r} does not exist{there}")
        scenarios.append(load_scenario(base / name))
    names = [s.model.scenario for s in scenarios]
    for i, name in enumerate(names):
        if name in names[:i]:
            raise loaded.error(
                ("scenarios", i), f"scenario {name!r} is named by two files; give each its own name"
            )
        if name in RESERVED:
            raise scenarios[i].error(
                ("scenario",), f"{name!r} is a name that results use themselves; choose another"
            )
    check_named_scenarios(loaded, names)
    return StudyFile(loaded.model, loaded, tuple(scenarios), base)


def _macro(file: StudyFile, frame: pd.DataFrame | MacroHistory | None) -> MacroHistory | None:
    if file.study.macro is None:
        if frame is not None:
            raise UsageError("a macro frame was passed, but the study has no macro section")
        return None
    if isinstance(frame, MacroHistory):
        return frame
    return read_history(file.study.macro, base=file.base, model=file.frequency, frame=frame)


def _var(file: StudyFile, history: MacroHistory | None) -> VarModel | None:
    if file.study.macro is None or file.study.macro.var is None or history is None:
        return None
    start = first_after(file.as_of, model=file.frequency, macro=history.frequency)
    return fit_var(file.study.macro.var, history, end=start - 1)


def _estimation_features(file: StudyFile, history: MacroHistory | None, risk_set: RiskSet) -> FeatureTable:
    first = (
        int((risk_set.stay_origin + risk_set.stay_entry).min()) + 1 if risk_set.stay_loan.size else file.as_of
    )
    if file.study.macro is None or history is None:
        return no_features(file.frequency, first, file.as_of - first + 1)
    return build_features(file.study.macro, history, model=file.frequency, start=first, end=file.as_of)


def _check_levels(file: StudyFile, features: FeatureTable, data: LoanData) -> None:
    """DataError for loans of the history or the book whose level a macro feature of a hazard has no variable for."""
    used = {name for hazard in file.study.hazards.values() for name in hazard.macro_features()}
    for name, key in features.keyed.items():
        for loans in (data.risk_set, data.portfolio) if name in used else ():
            level_codes(name, key, loans.static, loans.loan_ids)


def prepare(
    file: StudyFile,
    *,
    loans: pd.DataFrame | None = None,
    macro: pd.DataFrame | MacroHistory | None = None,
    book: pd.DataFrame | None = None,
    workouts: pd.DataFrame | None = None,
    cashflows: pd.DataFrame | None = None,
    paths: Callable[[int], tuple[ScenarioPath, ...]] | None = None,
) -> Prepared:
    """Loans, macro history, workouts and scenario paths, read, checked and reconciled.

    loans, macro, book, workouts, cashflows  frames used instead of the files that the study names
    paths  makes paths that stand before those of the scenario files, told how many model periods they must cover

    Raises DataError with every problem found, TextError for a scenario that does not fit.
    """
    check_history(file.study)
    handed = {"loans": loans, "book": book, "workouts": workouts, "cashflows": cashflows}
    frames = read_schedules(file.study, file.base)
    data = prepare_loans(file.study, base=file.base, frame=loans, book=book)
    history = _macro(file, macro)
    data = with_moving(file.study, data, history)
    features = _estimation_features(file, history, data.risk_set)
    _check_levels(file, features, data)
    life = life_steps(data.portfolio, file.study.horizon)
    horizon = int(life.max()) if life.size else 1
    held = standing_points(file.study, data.portfolio)
    if held is not None:
        # exposure that is replaced outlives the book
        horizon = max(horizon, int(held[-1]))
    var = _var(file, history)
    reach = horizon + reach_of_recovery(file.study)
    resolved = resolve(
        file.scenarios, file.study.macro, history,
        as_of=file.as_of, model=file.frequency, horizon=reach, var=var, also=path_variables(file.study),
    )  # fmt: skip
    along = resolved if paths is None else (*paths(reach), *resolved)
    data = settle_contracts(file.study, data, history, along[0], horizon=horizon, frames=frames)
    if file.study.macro is not None and history is not None:
        alignment = alignment_sample(file.study.macro, history, features, model=file.frequency)
    else:
        alignment = pd.DataFrame(columns=["model_period", "feature", "macro_period", "value"])
    digests = dict(data.digests)
    if file.study.macro is not None and macro is None:
        digests[file.study.macro.file] = digest_file(file.base / file.study.macro.file)
    for scenario in file.scenarios:
        if isinstance(scenario.model, TableMapping):
            table = scenario.file.parent / scenario.model.table
            digests[relative(table, file.base) or scenario.model.table] = digest_file(table)
    digests |= {name: digest_file(file.base / name) for name in schedule_files(file.study)}
    cases = None
    if file.study.recovery is not None:
        cases = read_study_workouts(
            file.study,
            base=file.base,
            frequency=file.frequency,
            as_of=file.as_of,
            cases=workouts,
            flows=cashflows,
        )
        digests |= {
            n: digest_file(file.base / n)
            for n, f in zip(workout_files(file.study), (workouts, cashflows), strict=False)
            if f is None
        }
    frames_given = {
        "loans": loans,
        "macro": macro,
        "book": book,
        "workouts": workouts,
        "cashflows": cashflows,
    }
    return Prepared(
        data,
        history,
        features,
        alignment,
        along,
        horizon,
        MappingProxyType(digests),
        var,
        MappingProxyType(dict(frames)),
        cases,
        tuple(name for name, frame in frames_given.items() if frame is not None),
        MappingProxyType({name: frame for name, frame in handed.items() if frame is not None}),
    )


def study_record(file: StudyFile, data: Prepared) -> dict[str, Any]:
    """What a study's results are made from, without clock times and outputs (see :mod:`stresskit.runs.record`)."""
    return build_record(file.loaded, file.scenarios, data.digests, given=data.given)


def fit(file: StudyFile, data: Prepared, *, say: Say = _silent) -> Mapping[str, HazardFit]:
    """One hazard per cause that the study declares; with recovery.hazard also "recovered" (and "cured").

    Raises NumericError when there is no fit to look at: no events, separation, terms that cannot be told
    apart, no convergence. A fit that fails another gate comes back with it in ``failed_gates``.
    """
    fits: dict[str, HazardFit] = {}
    for cause, spec in file.study.hazards.items():
        say(f"fitting {cause}")
        fits[cause] = fit_hazard(spec, data.loans.risk_set, data.features, cause=cause)
    if data.workouts is not None and file.study.recovery_hazards():
        say("fitting recovery")
        fits |= fit_recovery(file.study, data.workouts, data.history, frequency=file.frequency)
    return MappingProxyType(fits)


def _mean(parts: list[tuple[float, NDArray[np.float64]]]) -> NDArray[np.float64]:
    out = np.zeros_like(parts[0][1])
    for weight, values in parts:
        out += weight * values
    return out


def _weighted(paths: tuple[ScenarioPath, ...], results: Mapping[str, LossResult]) -> LossResult | None:
    """The probability-weighted mean of the scenarios that have a weight (all, or all but those outside the mean)."""
    pairs = [(float(p.weight), results[p.name]) for p in paths if p.weight is not None]
    if not pairs:
        return None
    loans = {m: _mean([(w, r.loans[m]) for w, r in pairs]) for m in pairs[0][1].loans}
    cells = {m: _mean([(w, r.cells[m]) for w, r in pairs]) for m in pairs[0][1].cells}
    return LossResult(loans, cells)


def _fitted(spec: HazardSpec) -> HazardSpec:
    """What the coefficients depend on: gates may be accepted after the fit was looked at."""
    return spec.model_copy(update={"accept": {}})


def _check_models(file: StudyFile, features: FeatureTable, fits: Mapping[str, HazardFit]) -> None:
    check_origin(fits, features)
    declared: dict[str, tuple[str, HazardSpec]] = {
        str(cause): (f"hazards.{cause}", spec) for cause, spec in file.study.hazards.items()
    }
    declared |= {
        REGRESSIONS[key]: (f"recovery.{key}", spec) for key, spec in file.study.recovery_hazards().items()
    }
    for cause, (place, spec) in declared.items():
        if cause in file.study.hazards and cause in fits:
            _check_counts(file, cause, fits[cause])
        if cause not in fits:
            raise UsageError(
                f"no fitted model for hazard {cause!r}; models given: {', '.join(fits) or 'none'}"
            )
        if _fitted(fits[cause].spec) != _fitted(spec):
            raise TextError(
                f"{place} in the study is not what the model was fitted with; fit again, or restore the study's text"
            )


def _check_counts(file: StudyFile, cause: str, fit: HazardFit) -> None:
    """TextError when the model was fitted with counts and the study names none, or the other way round.

    The book's averages and the evidence on the fit go by what the study says; a model of the other kind means that one of
    the two is about loans and the other about lines of the table.
    """
    named, used = file.study.loans.columns.count, fit.facts.count
    if used and named is None:
        raise TextError(
            f"hazards.{cause}: the model was fitted with counts of loans (column {used!r}), but the study names no "
            "loans.columns.count, so that a line would pass for one loan. Name the column, or fit again"
        )
    if named is not None and not used:
        raise TextError(
            f"loans.columns.count: the study names column {named!r}, but the model of hazards.{cause} was fitted without "
            "counts, every line as one loan. Fit again, or take the column out of loans.columns"
        )


def checked_setting(
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    say: Say = _silent,
    threads: int | None = None,
) -> tuple[Setting, tuple[Verdict, ...]]:
    """The study set up for projections, and its gates, after everything that must hold before one.

    Raises TextError when the fits are not of this study's hazards, calendar and macro features (see
    projection.project.check_origin), NumericError when a hazard failed a gate that the study does not accept or the
    book is empty.
    """
    _check_models(file, data.features, fits)
    gates = gate_table(file.study, fits)
    refuse_failed(gates)
    return set_up(file, data, fits, say=say, threads=threads), gates


def project(
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    say: Say = _silent,
    progress: Progress | None = None,
    threads: int | None = None,
) -> StudyResult:
    """Every loan under every scenario, money on it, and all tables of the result.

    progress  told how many of how many blocks of loans are done, over all scenarios
    threads   default: as many as there are processors; the figures do not depend on it

    Raises what :func:`checked_setting` raises, NumericError when a path lacks a feature.
    """
    setting, _ = checked_setting(file, data, fits, say=say, threads=threads)
    return project_setting(setting, say=say, progress=progress, threads=threads)


def project_setting(
    setting: Setting,
    *,
    say: Say = _silent,
    progress: Progress | None = None,
    threads: int | None = None,
) -> StudyResult:
    """:func:`project` for who has the study set up by :func:`checked_setting` and asks more of it afterwards.

    Raises NumericError when a hazard failed a gate that the study does not accept or a path lacks a feature.
    """
    file, data = setting.file, setting.data
    gates = gate_table(file.study, setting.fitted)
    refuse_failed(gates)
    portfolio, recovery, cells, book = setting.portfolio, setting.recovery, setting.cells, setting.book
    fitted, fits = setting.fitted, setting.fits
    results: dict[str, LossResult] = {}
    features = {path.name: setting.features(path) for path in data.paths}
    weights = {path.name: path.weight for path in data.paths}
    now = moving_now(file.study, portfolio, data.history, data.paths[0])
    in_default = None
    if recovery is not None and isinstance(file.study.loss.lgd, RecoveryLgd):
        in_default = partial(lgd_in_default, recovery, file.study.loss.lgd)
    view = year_view(
        file.study,
        data.loans,
        fits,
        data.features,
        features.__getitem__,
        tuple(features),
        moving=now,
        lgd_in_default=in_default,
    )
    say(f"projecting {', '.join(path.name for path in data.paths)}")
    life, moved, routes = life_steps(portfolio, file.study.horizon), list[str](), []
    contracted = []
    for path in data.paths:
        contracts, lgd = setting.terms(path, features[path.name])
        contracted.append(contracts)
        moved += moving_cautions(path.name, contracts, data.loans.risk_set, portfolio, life)
        sink = None if view is None else view.sink(path.name)
        routes.append(Route(features[path.name], contracts, sink, lgd))
    found_along = book.along(
        routes,
        years=None if view is None else view.edges.tolist(),
        threads=threads or processors(),
        progress=progress,
    )
    for path, route, contracts, result in zip(data.paths, routes, contracted, found_along, strict=True):
        results[path.name] = result
        if view is not None:
            view.close(path.name, result.loans)
            view.hold(path.name, features[path.name], contracts, route.lgd, threads or processors())
    weighted = _weighted(data.paths, results)
    if weighted is not None and len(results) > 1:
        results[WEIGHTED] = weighted
    say("diagnostics")
    by_age, by_period = diagnostic_tables(fits, data.loans.risk_set, data.features)
    summary = summary_table(portfolio, cells, results)
    adjustments, notes = None, (*moved, *(() if view is None else view.notes))
    if file.study.adjustments is not None:
        adjustments = adjustment_table(file.study.adjustments, portfolio, cells, results, weights)
        summary = with_adjusted(summary, adjustments)
        notes = (*adjustment_notes(adjustments), *notes)
    feature_frame = feature_table(fitted, data.features, features)
    coefficients = coefficient_table(fitted)
    paths = path_table(data.history, data.paths, as_of=file.as_of, model=file.frequency)
    found = cautions(
        file.study, data.loans, data.paths, data.history, summary, feature_frame, coefficients, fits, notes
    )
    record = study_record(file, data) | {"gates": gate_record(gates), "models": model_record(fitted)}
    plausibility = None
    if data.var is not None and data.history is not None:
        judged = assess_paths(data.var, data.paths)
        plausibility = plausibility_tables(data.var, judged, data.history.units)
        paths = with_bands(paths, judged)
        found = before_standing(found, plausibility_cautions(plausibility, paths))
        record["var"] = facts(data.var)
    if recovery is not None:
        found = before_standing(found, recovery_cautions(file.study, recovery))
        record["seeds"] = {"recovery": recovery.spec.seed}
        record["seeds_note"] = (
            "the bands of recovery curves resample workouts with this seed; nothing else is drawn"
        )
    return StudyResult(
        study=file.study,
        summary=summary,
        segments=segment_table(portfolio, cells, results),
        loan_rows=LoanRows(
            portfolio,
            tuple(by for by, _, _ in cells.breakdowns if by and by in portfolio.static),
            results,
            {} if view is None else view.stages(),
        ),
        paths=paths,
        features=feature_frame,
        hazard_by_age=by_age,
        actual_expected=by_period,
        coefficients=coefficients,
        fits=fit_facts(fitted),
        reconciliation=data.loans.reconciliation,
        findings=finding_table(data.loans.findings),
        alignment=data.alignment,
        not_projected=data.loans.not_projected,
        cautions=found,
        record=record,
        base=file.base,
        plausibility=plausibility,
        years=None if view is None else view.table(weights),
        adjustments=adjustments,
        recovery=recovery,
        hazard_by_macro=response_table(
            fitted, portfolio, feature_frame, of_loans=frozenset(file.study.hazards)
        ),
    )
