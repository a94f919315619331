"""What must hold in a saved hazard beyond keys and types, so that a file changed by hand is refused where it shows.

A model that reads well and predicts nonsense is worse than one that is refused: numbers that JSON does not have, keys that
stand twice, a design that is not the one of the spec, covariances that are none, gates that are missing or contradict
themselves. What stands alone (a coefficient, the link) cannot be checked against anything here; the folder's manifest
knows its files by digest (runs.folder.read_models).
"""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from typing import Any

import numpy as np

from stresskit.core.period import Frequency
from stresskit.hazard.covariance import Covariances
from stresskit.hazard.design import Design
from stresskit.hazard.estimation import FIRTH_LOGIT, FIRTH_MEAN, MAXIMUM_LIKELIHOOD, RIDGE, Estimation
from stresskit.hazard.facts import FitFacts
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
    KeyedMacro,
    LearnedTerm,
    LoanCategory,
    LoanNumber,
    MacroNumber,
    Offset,
)
from stresskit.hazard.usable import GATES, UNKNOWN, Gate
from stresskit.spec.terms import AgeTerm, HazardSpec, InteractionTerm, MacroTerm, OffsetTerm, Term

#: Largest difference of a covariance from its transpose, in units of the errors.
_SYMMETRY = 1e-9


def strict_json(text: str) -> Any:
    """The value of JSON text. Raises ValueError for keys that stand twice and for numbers that are not finite."""
    try:
        return json.loads(text, object_pairs_hook=_once, parse_constant=_no_number, parse_float=_finite)
    except RecursionError:
        raise ValueError("it is nested too deeply") from None


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    out = dict(pairs)
    if len(out) < len(pairs):
        names = [name for name, _ in pairs]
        doubled = sorted({n for n in names if names.count(n) > 1})
        raise ValueError(f"stated twice: {', '.join(doubled)}")
    return out


def _no_number(text: str) -> float:
    raise ValueError(f"{text} is not a finite number")


def _finite(text: str) -> float:
    value = float(text)
    return value if math.isfinite(value) else _no_number(text)


def check_design(design: Design, spec: HazardSpec) -> None:
    """ValueError unless every term is one that the spec's term can have become, in the same order, with a usable state."""
    if design.intercept != spec.intercept or len(design.terms) != len(spec.terms):
        raise ValueError(
            f"{len(design.terms)} terms and intercept {design.intercept}, the spec has {len(spec.terms)} and {spec.intercept}"
        )
    for learned, stated in zip(design.terms, spec.terms, strict=True):
        if not _came_from(learned, stated):
            raise ValueError(f"the term {learned.name!r} is not what the spec states there")
        problem = _unusable(learned)
        if problem:
            raise ValueError(f"the term {learned.name!r}: {problem}")


def _came_from(learned: LearnedTerm | Crossing | Offset, stated: Term) -> bool:
    if isinstance(stated, AgeTerm):
        kind = {"spline": AgeSpline, "steps": AgeSteps}.get(stated.age, AgeFunction)
        return isinstance(learned, kind) and getattr(learned, "function", stated.age) == stated.age
    if isinstance(stated, InteractionTerm):
        return isinstance(learned, Crossing) and (learned.left, learned.right) == stated.interaction
    if isinstance(stated, OffsetTerm):
        return isinstance(learned, Offset) and learned.source == stated.offset
    if isinstance(stated, MacroTerm):
        scaled = stated.transform == "standardise"
        return isinstance(learned, MacroNumber | KeyedMacro) and _is(learned, stated.macro, scaled=scaled)
    if stated.as_ == "category":
        return isinstance(learned, LoanCategory) and learned.source == stated.loan
    scaled, logged = stated.transform == "standardise", stated.transform == "log"
    return (
        isinstance(learned, LoanNumber) and learned.log == logged and _is(learned, stated.loan, scaled=scaled)
    )


def _is(term: LoanNumber | MacroNumber | KeyedMacro, source: str, *, scaled: bool) -> bool:
    """Of this source; with centre and scale only where the spec asks for them."""
    return term.source == source and (scaled or (term.centre, term.scale) == (0.0, 1.0))


def _unusable(term: LearnedTerm | Crossing | Offset) -> str:
    """Why a term's state cannot be one that was learned; "" when it can."""
    levels: tuple[Any, ...] = ()
    if isinstance(term, LoanNumber | MacroNumber | KeyedMacro) and not term.scale > 0.0:
        return f"scale {term.scale:g}, expected a number above 0"
    if isinstance(term, AgeFunction):
        return "" if 1 <= term.lowest <= term.largest else f"ages {term.lowest} to {term.largest}"
    if isinstance(term, AgeSpline):
        levels = term.knots
        if list(levels) != sorted(set(levels)) or len(levels) < 2:
            return f"knots {list(levels)}, expected two or more that rise"
    elif isinstance(term, AgeSteps):
        levels = term.last
        if list(levels) != sorted(set(levels)) or len(term.labels) != len(levels):
            return f"last ages {list(levels)} of {len(term.labels)} bands, expected one for each that rise"
    elif isinstance(term, LoanCategory):
        levels = term.levels
        if len({*levels, *term.pooled}) < len(levels) + len(term.pooled):
            return "a level stands twice"
    if isinstance(term, AgeSpline | AgeSteps | LoanCategory) and not 0 <= term.reference < len(levels):
        return f"reference {term.reference} of {len(levels)} levels"
    return ""


def check_facts(facts: FitFacts, design: Design) -> None:
    """ValueError for counts, ages and ranges that no fit can have."""
    if facts.frequency not in {f.value for f in Frequency}:
        raise ValueError(f"frequency {facts.frequency!r}")
    counts = (facts.n_rows, facts.n_loans, facts.n_periods, facts.nobs, facts.n_events, facts.iterations)
    if (
        min(counts) < 0
        or facts.n_events > facts.nobs
        or min(facts.n_rows, facts.n_loans, facts.n_periods) < 1
    ):
        raise ValueError(
            f"{facts.n_rows} rows, {facts.n_loans} loans, {facts.n_periods} periods, weight {facts.nobs:g}, events {facts.n_events:g}"
        )
    if min(facts.rows_without_feature, facts.events_without_feature) < 0.0:
        raise ValueError("fewer than 0 rows or events left out")
    if not 1 <= facts.smallest_age <= facts.supported_age <= facts.largest_age:
        raise ValueError(
            f"ages {facts.smallest_age} to {facts.largest_age}, supported to {facts.supported_age}"
        )
    _check_ranges(facts.feature_ranges, design)


def _check_ranges(ranges: Mapping[str, tuple[float, float]], design: Design) -> None:
    if set(ranges) != set(design.sources("feature")):
        raise ValueError(f"ranges of {sorted(ranges)}, the design reads {sorted(design.sources('feature'))}")
    turned = [name for name, (low, high) in ranges.items() if low > high]
    if turned:
        raise ValueError(f"ranges that end before they begin: {', '.join(turned)}")


def check_covariances(covariances: Covariances, facts: FitFacts) -> None:
    """ValueError for a matrix that is no covariance, and for clusters that are not those of the fit."""
    for kind, matrix in covariances.matrices.items():
        variance = np.diag(matrix)
        if (variance < 0.0).any():
            raise ValueError(f"{kind} has a variance below 0")
        with np.errstate(invalid="ignore"):
            size = np.sqrt(np.outer(variance, variance))
            largest = np.abs(np.nan_to_num(matrix)).max(initial=0.0)
            lopsided = np.abs(matrix - matrix.T) > _SYMMETRY * np.maximum(size, largest * 1e-12)
        if lopsided.any() or (np.isnan(matrix) != np.isnan(matrix.T)).any():
            raise ValueError(f"{kind} is not symmetric")
    if min(covariances.lag, covariances.repaired) < 0:
        raise ValueError(f"lag {covariances.lag}, repaired {covariances.repaired}")
    if dict(covariances.clusters) != {"loan": facts.n_loans, "period": facts.n_periods}:
        raise ValueError(
            f"clusters {dict(covariances.clusters)}, the facts say {facts.n_loans} loans and {facts.n_periods} periods"
        )


def check_gates(gates: tuple[Gate, ...]) -> None:
    """ValueError unless all gates are there once, or none because none were recorded, and each agrees with itself."""
    names = tuple(g.name for g in gates)
    if names not in ((), (UNKNOWN.name,), GATES):
        raise ValueError(f"{', '.join(names)}; expected {', '.join(GATES)}")
    for gate in gates:
        if gate.passed != (gate.remedy == "") or (gate.name == UNKNOWN.name and gate.passed):
            raise ValueError(
                f"{gate.name} is {'passed' if gate.passed else 'failed'}, and its remedy says otherwise"
            )


def check_estimation(estimation: Estimation, spec: HazardSpec) -> None:
    """ValueError for a method that the spec cannot have led to."""
    firth = FIRTH_LOGIT if spec.link == "logit" else FIRTH_MEAN
    possible = {RIDGE} if spec.ridge > 0.0 else {MAXIMUM_LIKELIHOOD}
    if spec.bias_reduction == "firth":
        possible = {firth}
    elif spec.when_separated == "firth":
        possible = {MAXIMUM_LIKELIHOOD, firth}
    if estimation.method not in possible:
        raise ValueError(
            f"method is {estimation.method!r}, the spec leads to {' or '.join(sorted(possible))}"
        )
