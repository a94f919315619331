"""From spec and rows at risk to a design: knots, levels, references, centres and scales."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError, NumericError, UsageError
from stresskit.core.values import FeatureTable
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import Design
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
    LearnedTerm,
    LoanCategory,
    LoanNumber,
    MacroNumber,
    Offset,
    as_text,
    numbers,
    positive,
)
from stresskit.kernels.blocks import stay_rows, totals
from stresskit.spec.terms import AgeTerm, HazardSpec, InteractionTerm, LoanTerm, MacroTerm, OffsetTerm

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, eq=False)
class Source:
    """A loan column as it is learned from: one value per loan, or per row for columns that move."""

    values: NDArray[Any]
    at_risk: Floats
    ids: NDArray[Any] | None
    moving: bool


def learn_design(spec: HazardSpec, rows: CauseRows, features: FeatureTable | None) -> Design:
    """The design of ``spec`` with its state learned from ``rows``.

    Raises UsageError for columns that are not there, DataError for values that cannot be used,
    NumericError for ages or features that the data do not support.
    """
    carrier = None if spec.intercept else _carrier(spec)
    terms: list[LearnedTerm | Crossing | Offset] = []
    for term in spec.terms:
        full = term is carrier
        if isinstance(term, AgeTerm):
            terms.append(_age(term, rows, full))
        elif isinstance(term, LoanTerm):
            terms.append(_loan(term, rows, full))
        elif isinstance(term, MacroTerm):
            terms.append(_macro(term, rows, features))
        elif isinstance(term, InteractionTerm):
            terms.append(Crossing(*term.interaction))
        elif isinstance(term, OffsetTerm):
            terms.append(Offset(term.offset, _source(term.offset, rows).moving))
    design = Design(spec.intercept, tuple(terms))
    if design.k == 0:
        raise UsageError("the hazard has neither an intercept nor a term, so there is nothing to fit")
    return design


def _carrier(spec: HazardSpec) -> AgeTerm | LoanTerm | None:
    """The term that keeps all its levels when there is no intercept: age, else the first category."""
    for term in spec.terms:
        if isinstance(term, AgeTerm) and term.age in ("steps", "spline"):
            return term
    for term in spec.terms:
        if isinstance(term, LoanTerm) and term.as_ == "category":
            return term
    return None


def _age(term: AgeTerm, rows: CauseRows, full: bool) -> LearnedTerm:
    at_risk, events = rows.by_age()
    observed = np.flatnonzero(at_risk > 0)
    lowest, largest = int(observed[0]), int(observed[-1])
    if term.age == "spline":
        return _spline(term, events, lowest, largest, full)
    if term.age == "steps":
        return _steps(term, events, observed, full)
    return AgeFunction(term.age, lowest, largest)


def _spline(term: AgeTerm, events: Floats, lowest: int, largest: int, full: bool) -> AgeSpline:
    if isinstance(term.knots, tuple):
        inner = [float(k) for k in term.knots]
        outside = [k for k in inner if not lowest < k < largest]
        if outside or sorted(set(inner)) != inner:
            raise NumericError(
                f"age spline: knots {inner} must rise strictly within the observed ages {lowest} to {largest} "
                f"(both ends are knots already); out of place: {outside or inner}"
            )
    else:
        asked = 5 if term.knots is None else term.knots
        share = np.arange(1, asked + 1) / (asked + 1)
        running = np.cumsum(events)
        places = np.searchsorted(running, share * running[-1], side="left")
        inner = [float(a) for a in np.unique(places) if lowest < a < largest]
        if len(inner) < asked:
            raise NumericError(
                f"age spline: {asked} knots at quantiles of the event ages fall on only {len(inner)} distinct ages "
                f"strictly within {lowest} to {largest}. Write `knots: {max(len(inner), 1)}` or fewer, list the "
                "knots as ages, or use `age: steps`."
            )
    knots = (float(lowest), *inner, float(largest))
    return AgeSpline(knots, len(knots) // 2, full)


def _steps(term: AgeTerm, events: Floats, observed: NDArray[np.int64], full: bool) -> AgeSteps:
    lowest, largest = int(observed[0]), int(observed[-1])
    if term.bands is None:
        last = tuple(int(a) for a in observed)
        labels = tuple(f"age[{a}]" for a in last)
    else:
        starts = (1, *(b + 1 for b in term.bands))
        closed = [f"age[{a}]" if a == b else f"age[{a}-{b}]" for a, b in zip(starts, term.bands, strict=False)]
        labels = (*closed, f"age[{starts[-1]}+]")
        edge = np.searchsorted(np.array(term.bands), observed, side="left")
        empty = [labels[j] for j in range(len(labels)) if j not in set(edge.tolist())]
        if empty:
            raise NumericError(
                f"age steps: no rows at risk in {', '.join(empty)}; observed ages are {lowest} to {largest}. "
                "Leave these bands out."
            )
        last = (*term.bands, largest)
    level = np.searchsorted(np.array(last), np.arange(events.size).clip(lowest, largest), side="left")
    in_level = np.bincount(level, weights=events, minlength=len(last))
    return AgeSteps(last, lowest, labels, int(np.argmax(in_level)), full)


def _source(name: str, rows: CauseRows) -> Source:
    if name in rows.moving:
        stay, age = stay_rows(rows.entry, rows.exit)
        at = rows.first_row[stay] + age - rows.entry[stay] - 1
        return Source(rows.moving[name][at], rows.weight[stay], rows.loan_ids[rows.loan[stay]], True)
    if name not in rows.static:
        have = ", ".join([*rows.static, *rows.moving]) or "none"
        raise DataError(f"no loan column {name!r} in the risk set; there are: {have}")
    at_risk = totals(rows.loan, rows.weight * (rows.exit - rows.entry), rows.n_loans)
    return Source(rows.static[name], at_risk, rows.loan_ids, False)


def _loan(term: LoanTerm, rows: CauseRows, full: bool) -> LearnedTerm:
    source = _source(term.loan, rows)
    if term.as_ == "category":
        return _category(term, source, full)
    number = numbers(term.loan, source.values, source.ids)
    if term.transform == "log":
        positive(term.loan, number, source.ids)
        return LoanNumber(term.loan, True, 0.0, 1.0, source.moving)
    if term.transform == "standardise":
        centre, scale = moments(term.loan, number, source.at_risk)
        return LoanNumber(term.loan, False, centre, scale, source.moving)
    return LoanNumber(term.loan, False, 0.0, 1.0, source.moving)


def _category(term: LoanTerm, source: Source, full: bool) -> LoanCategory:
    code, levels = pd.factorize(as_text(source.values), sort=True)
    if term.reference is None:
        reference = int(np.argmax(np.bincount(code, weights=source.at_risk)))
    else:
        if term.reference not in levels:
            raise DataError(
                f"category {term.loan!r}: the reference {term.reference!r} is not among the levels at risk: "
                f"{', '.join(map(repr, levels))}"
            )
        reference = int(np.flatnonzero(levels == term.reference)[0])
    if levels.size == 1 and not full:
        raise NumericError(
            f"category {term.loan!r} has one level at risk, {levels[0]!r}, so it cannot be told apart from the "
            "intercept. Leave the term out."
        )
    return LoanCategory(term.loan, tuple(str(v) for v in levels), reference, full, source.moving)


def _macro(term: MacroTerm, rows: CauseRows, features: FeatureTable | None) -> MacroNumber:
    if term.transform == "none":
        return MacroNumber(term.macro, 0.0, 1.0)
    at_risk, value = feature_at_risk(term.macro, rows, features)
    return MacroNumber(term.macro, *moments(term.macro, value, at_risk))


def feature_at_risk(name: str, rows: CauseRows, features: FeatureTable | None) -> tuple[Floats, Floats]:
    """(weight at risk, feature value) over the periods with rows at risk."""
    if features is None or name not in features.names:
        have = ", ".join(features.names) if features is not None else ""
        raise UsageError(f"no macro feature {name!r}; features: {have or 'none'}")
    at_risk, _ = rows.by_period()
    used = np.flatnonzero(at_risk > 0)
    return at_risk[used], features.column(name)[rows.first_period - features.start + used]


def moments(name: str, value: Floats, weight: Floats) -> tuple[float, float]:
    """Weighted mean and standard deviation (divisor: total weight)."""
    total = weight.sum()
    mean = float((weight * value).sum() / total)
    deviation = float(np.sqrt((weight * (value - mean) ** 2).sum() / total))
    if not deviation > 1e-12 * max(abs(mean), 1e-300):
        raise NumericError(f"{name!r} does not vary over the rows at risk (always {mean:g}). Leave the term out.")
    return mean, deviation


def mean_offset(design: Design, rows: CauseRows) -> float:
    """Mean over the rows at risk of the sum of all offsets."""
    total = 0.0
    for term in design.terms:
        if isinstance(term, Offset):
            source = _source(term.source, rows)
            total += float(np.average(numbers(term.source, source.values, source.ids), weights=source.at_risk))
    return total
