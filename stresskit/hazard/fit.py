"""One binary regression for one cause: spec + rows at risk -> HazardFit."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import threadpool_limits  # type: ignore[import-untyped]

from stresskit.core.errors import UsageError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.covariance import covariances
from stresskit.hazard.design import Design
from stresskit.hazard.factored import FactoredSums, why_impossible, worthwhile
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.gates import (
    RunawayWatch,
    check_events,
    check_indicators,
    check_levels,
    check_rank,
    column_reach,
    feature_ranges,
)
from stresskit.hazard.learn import learn_design, mean_offset
from stresskit.hazard.link import LINKS, Link
from stresskit.hazard.newton import Solution, maximise
from stresskit.hazard.result import HazardFit
from stresskit.hazard.sums import BLOCK_ROWS, RowBlockSums, Sums, period_matrix
from stresskit.spec.terms import HazardSpec

Floats = NDArray[np.float64]
Backend = Literal["auto", "rows", "factored"]


def fit_hazard(
    spec: HazardSpec,
    risk_set: RiskSet,
    features: FeatureTable | None = None,
    *,
    cause: str = "default",
    block_rows: int = BLOCK_ROWS,
    threads: int = 1,
    backend: Backend = "auto",
) -> HazardFit:
    """Maximum likelihood fit of the hazard of ``cause`` (METHOD 3 and 4).

    risk_set    who was at risk of what, and when
    features    macro features on model periods; rows of periods in which one is not known are left out
    block_rows  rows per block where the design has to be built row by row
    threads     threads over blocks; the result has the same bits for any number
    backend     "factored" sums never expand a stay, "rows" build the design in blocks; "auto" takes the
                first where it can carry the design. Both agree to 1e-9

    Raises UsageError or DataError for columns that are missing or cannot be used, NumericError when
    there are no events, a level separates, terms cannot be told apart or Newton does not converge.
    """
    with threadpool_limits(limits=1, user_api="blas"):
        rows = cause_rows(risk_set, cause, features, spec.macro_features())
        check_events(rows, cause)
        design = learn_design(spec, rows, features)
        check_levels(design, rows)
        link = LINKS[spec.link]
        sums = choose_sums(design, rows, features, link, block_rows=block_rows, threads=threads, backend=backend)
        check_indicators(design, *sums.column_totals())
        solution = _solve(design, rows, features, link, sums)
        covariance = covariances(sums, solution.params, solution.at)
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
        llf=solution.at.llf,
        iterations=solution.iterations,
        deviance_change=solution.deviance_change,
        scaled_gradient=solution.scaled_gradient,
        feature_ranges=feature_ranges(design, rows, features),
    )
    return HazardFit(spec, design, facts, solution.params, covariance)


def choose_sums(
    design: Design,
    rows: CauseRows,
    features: FeatureTable | None,
    link: Link,
    *,
    block_rows: int = BLOCK_ROWS,
    threads: int = 1,
    backend: Backend = "auto",
) -> Sums:
    """The backend asked for, or the one that carries the design at the lowest cost."""
    impossible = why_impossible(design)
    if backend == "factored" and impossible:
        raise UsageError(f"factored sums cannot carry this design: {impossible}")
    if backend == "factored" or (backend == "auto" and not impossible and worthwhile(design, rows)):
        return FactoredSums(design, rows, features, link, threads=threads)
    return RowBlockSums(design, rows, features, link, block_rows=block_rows, threads=threads)


def _solve(design: Design, rows: CauseRows, features: FeatureTable | None, link: Link, sums: Sums) -> Solution:
    start = np.zeros(design.k)
    constant = design.constant()
    if constant is not None:
        start = constant * (link.linear(rows.event_weight / rows.total_weight) - mean_offset(design, rows))
    first = sums.evaluate(start)
    check_rank(design, first.information)
    parts = {
        "loan": design.matrix("loan", rows.static, rows.n_loans),
        "age": design.age_matrix(np.arange(int(rows.entry.min()) + 1, rows.largest_age + 1)),
        "feature": period_matrix(design, rows, features)[rows.by_period()[0] > 0],
    }
    watch = RunawayWatch(design, column_reach(design, parts), rows.event_weight)
    return maximise(sums, start, first, watch=watch)


