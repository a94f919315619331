"""One binary regression for one cause: spec + rows at risk -> HazardFit."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cache, partial
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import ThreadpoolController

from stresskit.core.errors import UsageError
from stresskit.core.values import FeatureDefinition, FeatureTable, RiskSet
from stresskit.hazard.age_gate import check_held_age
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.covariance import with_requested
from stresskit.hazard.design import Design
from stresskit.hazard.estimate import estimate, means_of
from stresskit.hazard.estimation import Estimation
from stresskit.hazard.factored import FactoredSums, why_impossible, worthwhile
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.gates import RunawayWatch, check_events, column_reach, feature_ranges, moving_reach
from stresskit.hazard.learn import learn_design, mean_offset, supported_age
from stresskit.hazard.link import LINKS
from stresskit.hazard.moving_sums import MOST_ROW_COLUMNS, MovingSums, row_columns
from stresskit.hazard.pooling import settle_columns, settle_levels
from stresskit.hazard.result import HazardFit
from stresskit.hazard.row_products import RowProducts
from stresskit.hazard.sums import BLOCK_ROWS, HazardData, RowBlockSums, hazard_data
from stresskit.hazard.tail_fit import fit_tail
from stresskit.hazard.terms import Side
from stresskit.hazard.tracks import tracks_of
from stresskit.hazard.usable import Finished, gates_of
from stresskit.hazard.warm_start import BlockwiseSums, warm_start
from stresskit.kernels.blocks import processors
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]
Backend = Literal["auto", "rows", "factored"]

#: From so many rows on a second thread saves a tenth of the time and more (docs/benchmarks.md).
THREADED_ROWS = 1 << 21
#: Threads that are taken at most when nobody says how many.
MOST_THREADS = 2


def fit_hazard(
    spec: HazardSpec,
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    cause: str = "default",
    block_rows: int = BLOCK_ROWS,
    threads: int | None = None,
    backend: Backend = "auto",
) -> HazardFit:
    """Maximum likelihood fit of the hazard of ``cause`` (METHOD 3 and 4).

    risk_set    who was at risk of what, and when
    features    macro features on model periods; rows of periods in which one is not known are left out
    block_rows  rows per block where the design has to be built row by row
    threads     threads over blocks, None for as many cores as help (two at most, and only for many rows); the
                result has the same bits for any number
    backend     "factored" sums never expand a stay, "rows" build the design in blocks; "auto" takes the
                first where it can carry the design. Both agree to 1e-9

    Raises UsageError or DataError for columns that are missing or cannot be used, NumericError when
    there are no events, a level separates, terms cannot be told apart or Newton does not converge.
    """
    with _blas().limit(limits=1, user_api="blas"):
        rows = cause_rows(risk_set, cause, features, spec.macro_features())
        threads = _threads_for(rows) if threads is None else threads
        check_events(rows, cause)
        settled = settle_levels(spec, learn_design(spec, rows, features), rows)
        design = settled.design
        data = hazard_data(design, rows, features, LINKS[spec.link])
        check_held_age(data)
        reach = _reach(data)
        choose = partial(choose_sums, block_rows=block_rows, threads=threads, backend=backend)
        sums = choose(data)
        start = _start(data)
        settled = settle_columns(spec, settled, sums)
        means = means_of(spec, data, firth=settled.firth, choose=choose)
        watch = RunawayWatch(design, reach, rows.event_weight)
        start = warm_start(sums, rows.n_rows, start, watch=watch)
        del data
        estimated = estimate(
            spec, design, sums, start,
            means=means,
            watch=watch,
            record=Estimation(separated=settled.separated, pooled=settled.pooled),
        )  # fmt: skip
        solution = estimated.solution
        again = partial(hazard_data, design, rows, features, LINKS[spec.link])
        covariance = with_requested(
            estimated.covariance, spec.covariance, spec.hac_lag, solution.params,
            sums=sums, products_of=lambda: sums if isinstance(sums, FactoredSums) and not isinstance(sums, MovingSums)
            else RowProducts(again(), block_rows=block_rows, threads=threads),
        )  # fmt: skip
        gates = gates_of(
            Finished(
                design, rows, features, risk_set.frequency, solution, estimated.record, spec.link,
                covariance.clusters["period"],
            ),
            sums, reach,
        )  # fmt: skip
        age, supported, tail = spec.age_term(), supported_age(spec.age_term(), rows), None
        if age is not None and age.beyond != "hold":
            tail = fit_tail(
                age, hazard_data(design, rows, features, LINKS[spec.link]), solution.params, supported
            )
    facts = FitFacts(
        cause=cause,
        frequency=risk_set.frequency.value,
        n_rows=rows.n_rows,
        nobs=rows.total_weight,
        n_events=rows.event_weight,
        n_loans=rows.n_loans,
        n_periods=covariance.clusters["period"],
        rows_without_feature=rows.rows_without_feature,
        events_without_feature=rows.events_without_feature,
        smallest_age=int(rows.entry.min()) + 1,
        largest_age=rows.largest_age,
        llf=estimated.llf,
        iterations=solution.iterations,
        deviance_change=solution.deviance_change,
        scaled_gradient=solution.scaled_gradient,
        feature_ranges=feature_ranges(design, rows, features),
        supported_age=supported,
        count=risk_set.count,
    )
    return HazardFit(
        spec, design, facts, solution.params, covariance,
        tail=tail, estimation=estimated.record, gates=gates, definitions=_definitions(design, features),
    )  # fmt: skip


@cache
def _blas() -> ThreadpoolController:
    """Looks through the loaded libraries, once per process."""
    return ThreadpoolController()


def _threads_for(rows: CauseRows) -> int:
    return min(MOST_THREADS, processors()) if rows.n_rows >= THREADED_ROWS else 1


def _definitions(design: Design, features: FeatureTable | None) -> Mapping[str, FeatureDefinition]:
    """Of the features that the design reads; none when the table does not say how they were made."""
    if features is None or not features.definitions:
        return {}
    return {name: features.definitions[name] for name in design.sources("feature")}


def choose_sums(
    data: HazardData, *, block_rows: int = BLOCK_ROWS, threads: int = 1, backend: Backend = "auto"
) -> BlockwiseSums:
    """The backend asked for, or the one that carries the design at the lowest cost."""
    impossible = why_impossible(data.design)
    if backend == "factored" and impossible:
        raise UsageError(f"factored sums cannot carry this design: {impossible}")
    if backend == "rows":
        return RowBlockSums(data, block_rows=block_rows, threads=threads)
    tracks, grouped = tracks_of(data), True
    if backend == "auto" and not worthwhile(tracks, data.rows):
        # Cells of groups of loans may be many where those of cohorts alone are few.
        tracks, grouped = tracks_of(data, mixed=False), False
        if not worthwhile(tracks, data.rows):
            return RowBlockSums(data, block_rows=block_rows, threads=threads)
    on_row = row_columns(data.design, grouped=grouped)
    # An offset that moves is no column, yet it is met row by row.
    if not on_row.any() and not data.design.has_offset("moving"):
        return FactoredSums(data, tracks, threads=threads)
    if on_row.sum() > MOST_ROW_COLUMNS:
        return RowBlockSums(data, block_rows=block_rows, threads=threads)
    return MovingSums(data, tracks, on_row=on_row, threads=threads)


def _reach(data: HazardData) -> Floats:
    """(k,) range of every column over the rows."""
    ages = np.arange(int(data.rows.entry.min()) + 1, data.rows.largest_age + 1)
    ends: dict[Side, Callable[[int], tuple[float, float]]] = {
        "loan": data.loan_side.ends,
        "age": partial(_ends, data.design.age_matrix(ages)),
        "feature": partial(_ends, data.periods[data.seen]),
    }
    reach, moving = column_reach(data.design, ends), moving_reach(data.design, data.rows)
    return reach if moving is None else reach * moving


def _ends(matrix: Floats, column: int) -> tuple[float, float]:
    return float(matrix[:, column].min()), float(matrix[:, column].max())


def _start(data: HazardData) -> Floats:
    """(k,) the same hazard in every row where the design can say so, else zeros."""
    constant, rows = data.design.constant(), data.rows
    if constant is None:
        return np.zeros(data.design.k)
    level = data.link.linear(rows.event_weight / rows.total_weight) - mean_offset(data.design, rows)
    return constant * level
