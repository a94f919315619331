"""A search as one call: features once, every specification tried, judged, recorded."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, MacroHistory
from stresskit.macro.calendar import first_after
from stresskit.macro.features import Series, build_features, transformed
from stresskit.runs.api import Prepared, StudyFile, study_record
from stresskit.search.candidates import (
    Option,
    base_hazard,
    check_limit,
    options,
    specifications,
)
from stresskit.search.judge import judge
from stresskit.search.measures import StationarityTest, stationarity_of
from stresskit.search.notes import notes
from stresskit.search.result import (
    SearchResult,
    Span,
    feature_table,
    reference_table,
    refusals_by_rule,
    search_table,
    term_table,
    window_table,
    winner_yaml,
)
from stresskit.search.sample import common_sample
from stresskit.search.trial import Bench, Trial, try_specification
from stresskit.spec.load import Loaded, load_search
from stresskit.spec.search import SearchSpec, Stationarity
from stresskit.spec.terms import HazardSpec

Progress = Callable[[int, int], None]
WITHOUT, AS_WRITTEN = "without searched terms", "study as written"


def _silent(done: int, total: int) -> None:
    return None


def read_search(path: str | Path) -> Loaded[SearchSpec]:
    """Read and check the text of a search. Raises TextError (file:line:column)."""
    return load_search(Path(path))


def search_specifications(
    file: StudyFile,
    data: Prepared,
    loaded: Loaded[SearchSpec],
    *,
    progress: Progress = _silent,
    threads: int = 1,
) -> SearchResult:
    """Try every specification of ``loaded`` for its cause, the study's other terms fixed.

    progress  called with (fits done, fits in all)

    Raises TextError for a search that does not fit the study or is beyond its limit, DataError for
    features that cannot be computed, NumericError when the hazard without searched terms cannot be
    fitted. A specification that cannot be fitted is recorded with the message.
    """
    search = loaded.model
    base = base_hazard(loaded, file.study)
    as_written = file.study.hazards[search.cause]
    chosen, counts, table, history = _features(file, data, loaded, as_written)
    sample = common_sample(loaded, data.loans.risk_set, table, as_written.loan_columns())
    bench = Bench(sample, table, search.cause, threads)
    rest = [(0, WITHOUT, base.spec)] + ([(-1, AS_WRITTEN, as_written)] if base.left_out else [])
    clock = _Clock(progress, (sum(counts) + len(rest)) * (1 + len(sample.windows)))
    compared = [(n, name, try_specification(bench, spec, (), clock.tick)) for n, name, spec in rest]
    ground = compared[0][2]
    _usable(ground, search)
    trials = [
        try_specification(bench, base.with_terms(terms), terms, clock.tick)
        for terms in specifications(chosen, search.most_terms, many=search.same_variable == "many")
    ]
    tests = _stationarity(chosen, history, search.rules.stationarity, file)
    spans = _spans(bench, chosen)
    judged = judge(trials, ground, sum(w.rows for w in sample.windows), search, tests)
    best = judged[0] if judged[0].rank == 1 else None
    existing = tuple(file.study.macro.features) if file.study.macro is not None else ()
    return SearchResult(
        name=search.search,
        cause=search.cause,
        table=search_table(judged, sample, tests),
        terms=term_table(judged),
        windows=window_table(judged, [(n, t) for n, _, t in compared], sample),
        features=feature_table(chosen, tests, spans),
        references=reference_table([(name, t) for _, name, t in compared], ground, sample),
        refused=MappingProxyType(refusals_by_rule(judged)),
        counts=counts,
        notes=notes(search, judged, sample, counts, base.left_out, tests, spans),
        winner=winner_yaml(best, cause=search.cause, existing=existing, left_out=base.left_out),
        record=_record(file, data, loaded, counts),
        base=file.base,
    )


def _features(
    file: StudyFile, data: Prepared, loaded: Loaded[SearchSpec], as_written: HazardSpec
) -> tuple[tuple[Option, ...], tuple[int, ...], FeatureTable, MacroHistory]:
    """Features to try, how many specifications they make, their values with those of the study's hazard."""
    macro, history = file.study.macro, data.history
    if macro is None or history is None:
        raise loaded.error(("candidates",), "the study has no macro section, so there is nothing to search")
    chosen = options(loaded, macro, history.frequency)
    counts = check_limit(loaded, chosen)
    used = {n: macro.features[n] for n in as_written.macro_features()}
    features = {**used, **{o.name: o.feature for o in chosen}}
    wider = macro.model_copy(update={"features": features})
    start = data.features.start
    table = build_features(wider, history, model=file.frequency, start=start, end=max(file.as_of, start))
    return chosen, counts, table, history


class _Clock:
    """Counts fits for a progress bar."""

    def __init__(self, progress: Progress, total: int) -> None:
        self._progress, self._done, self._total = progress, 0, total
        progress(0, total)

    def tick(self) -> None:
        self._done += 1
        self._progress(self._done, self._total)


def _usable(ground: Trial, search: SearchSpec) -> None:
    what = f"search {search.search!r}: the {search.cause} hazard without the searched terms, to which all are compared,"
    if ground.error:
        raise NumericError(f"{what} cannot be fitted: {ground.error}")
    if ground.score_error:
        raise NumericError(
            f"{what} cannot be fitted on every window: {ground.score_error} Use later cut-offs, fewer folds, or simpler "
            "terms."
        )


def _stationarity(
    chosen: tuple[Option, ...], history: MacroHistory, rule: Stationarity, file: StudyFile
) -> dict[str, StationarityTest]:
    """Tests of every feature before its lag, over all history up to as_of on the macro calendar.

    Placement on months is left out because interpolated values between quarters are no observations.
    """
    known = first_after(file.as_of, model=file.frequency, macro=history.frequency) - history.start
    done: dict[tuple[str, str, int], StationarityTest] = {}
    out = {}
    for o in chosen:
        key = (o.feature.variable, o.feature.transform, o.feature.over)
        if key not in done:
            x = history.values[o.feature.variable][:known]
            series = Series(history.start, x, np.zeros(x.shape, dtype=np.int64))
            values = transformed(series, o.feature, history.frequency, name=o.name).values
            done[key] = stationarity_of(values[np.isfinite(values)], level=rule.level, around=rule.around)
        out[o.name] = done[key]
    return out


def _spans(bench: Bench, chosen: tuple[Option, ...]) -> dict[str, Span]:
    """Over the rows at risk, and over the periods of the windows alone."""
    table, windows = bench.features, bench.sample.windows
    at = np.unique(np.concatenate([w.period for w in windows])) - table.start
    out = {}
    for o in chosen:
        whole, scored = bench.at_risk((o.name,))[1], table.column(o.name)[at]
        out[o.name] = Span(*map(float, (whole.min(), whole.max(), scored.min(), scored.max())))
    return out


def _record(
    file: StudyFile, data: Prepared, loaded: Loaded[SearchSpec], counts: tuple[int, ...]
) -> Mapping[str, Any]:
    record = study_record(file, data)
    record["search"] = {
        "name": loaded.model.search,
        "file": loaded.file.name,
        "digest": loaded.digest,
        "text": loaded.text,
        "tried": sum(counts),
        "tried_by_terms": {str(k): n for k, n in enumerate(counts, 1)},
    }
    return MappingProxyType(record)
