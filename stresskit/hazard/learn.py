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
from stresskit.hazard.levels import Coded, coded
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
    level_codes,
    numbers,
    positive,
)
from stresskit.kernels.blocks import totals
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


#: A stated ``support`` aside, an age counts as observed with this many at risk, or with this share of the
#: largest number at risk at any age when that is fewer.
SUPPORT_AT_RISK, SUPPORT_SHARE = 50.0, 0.05
#: Events that a spline's last knot must have at its age or later, or this share of all events when fewer.
END_EVENTS, END_SHARE = 20.0, 0.05


def supported_age(term: AgeTerm | None, rows: CauseRows) -> int:
    """Last supported age: the largest age with enough at risk (see AgeTerm.support). NumericError when there is none."""
    at_risk, _ = rows.by_age()
    stated = term.support if term is not None else None
    needed = min(SUPPORT_AT_RISK, SUPPORT_SHARE * float(at_risk.max())) if stated is None else float(stated)
    # Sums of weights along ages carry rounding; a billionth decides nothing else.
    enough = np.flatnonzero((at_risk > 0) & (at_risk >= needed * (1.0 - 1e-9)))
    if enough.size == 0:
        raise NumericError(
            f"age: support {stated} asks for more than the {at_risk.max():,g} that are at risk at most at any age. "
            "State a smaller number."
        )
    return int(enough[-1])


def _age(term: AgeTerm, rows: CauseRows, full: bool) -> LearnedTerm:
    at_risk, events = rows.by_age()
    observed = np.flatnonzero(at_risk > 0)
    lowest, largest = int(observed[0]), int(observed[-1])
    if term.age == "spline":
        return _spline(term, events, lowest, supported_age(term, rows), full)
    if term.age == "steps":
        return _steps(term, events, observed, full)
    return AgeFunction(term.age, lowest, largest)


def _last_knot(term: AgeTerm, events: Floats, lowest: int, last: int) -> int:
    """Age from which a spline is constant: ``until``, else the last supported age that has enough events at it or later.

    A natural spline is a straight line between its last two knots; a last knot at the largest age at risk lets
    a handful of loans without events swing that line, and the projection then holds its far end for ever.
    """
    if term.until is not None:
        if not lowest < term.until <= last:
            raise NumericError(
                f"age spline: until is {term.until}, expected an age above {lowest} and at most {last}, the last "
                "supported age. State an age in between or a smaller `support`."
            )
        return term.until
    from_here = np.cumsum(events[::-1])[::-1]
    needed = min(END_EVENTS, END_SHARE * float(events.sum())) * (1.0 - 1e-9)
    with_events = np.flatnonzero((events > 0) & (from_here >= needed))
    return max(min(last, int(with_events[-1])), lowest + 1)


def _spline(term: AgeTerm, events: Floats, lowest: int, last: int, full: bool) -> AgeSpline:
    end = _last_knot(term, events, lowest, last)
    if isinstance(term.knots, tuple):
        inner = [float(k) for k in term.knots]
        outside = [k for k in inner if not lowest < k < end]
        if outside or sorted(set(inner)) != inner:
            raise NumericError(
                f"age spline: knots {inner} must rise strictly within ages {lowest} and {end}, which are knots already; "
                f"out of place: {outside or inner}. The last knot stands where few events are left; observed ages "
                f"{lowest} to {last} have enough at risk, so set `until` to {last} at most, or leave knots out."
            )
    else:
        asked = 5 if term.knots is None else term.knots
        share = np.arange(1, asked + 1) / (asked + 1)
        running = np.cumsum(events[: end + 1])
        places = np.searchsorted(running, share * running[-1], side="left")
        inner = [float(a) for a in np.unique(places) if lowest < a < end]
        if len(inner) < asked:
            raise NumericError(
                f"age spline: {asked} knots at quantiles of the event ages fall on only {len(inner)} distinct ages "
                f"strictly within {lowest} to {end}. Write `knots: {max(len(inner), 1)}` or fewer, list the "
                "knots as ages, or use `age: steps`."
            )
    knots = (float(lowest), *inner, float(end))
    return AgeSpline(knots, len(knots) // 2, full)


def _steps(term: AgeTerm, events: Floats, observed: NDArray[np.int64], full: bool) -> AgeSteps:
    lowest, largest = int(observed[0]), int(observed[-1])
    if term.bands is None:
        last = tuple(int(a) for a in observed)
        labels = tuple(f"age[{a}]" for a in last)
    else:
        starts = (1, *(b + 1 for b in term.bands))
        closed = [
            f"age[{a}]" if a == b else f"age[{a}-{b}]" for a, b in zip(starts, term.bands, strict=False)
        ]
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
        length = rows.exit - rows.entry
        place = np.cumsum(length) - length
        ids = rows.loan_ids[np.repeat(rows.loan, length)]
        values = rows.moving[name]
        if values.shape[0] != int(length.sum()) or not np.array_equal(rows.first_row, place):
            values = values[np.repeat(rows.first_row - place, length) + np.arange(int(length.sum()))]
        return Source(values, np.repeat(rows.weight, length), ids, True)
    if name not in rows.static:
        have = ", ".join([*rows.static, *rows.moving]) or "none"
        raise DataError(f"no loan column {name!r} in the risk set; there are: {have}")
    return Source(rows.static[name], rows.by_loan(), rows.loan_ids, False)


def range_at_risk(term: LoanNumber, rows: CauseRows) -> tuple[float, float]:
    """Smallest and largest value that a loan number's column of the design takes over the rows at risk."""
    if term.source in rows.moving:
        low, high = _moving_range(np.asarray(rows.moving[term.source], dtype=np.float64), rows)
    else:
        values = np.asarray(_source(term.source, rows).values, dtype=np.float64)
        low, high = float(values.min()), float(values.max())
    ends = np.sort(term.values(np.array([low, high]))[:, 0])
    return float(ends[0]), float(ends[1])


def _moving_range(values: Floats, rows: CauseRows) -> tuple[float, float]:
    """Smallest and largest of a moving column over the rows at risk, without a copy of it."""
    order = np.argsort(rows.first_row, kind="stable")
    first = rows.first_row[order]
    # from, to, from, to, ...; what lies between the rows of two stays is passed over
    edges = np.column_stack([first, first + (rows.exit - rows.entry)[order]]).ravel()
    if edges[-1] == values.size:
        edges = edges[:-1]
    return float(np.minimum.reduceat(values, edges)[::2].min()), float(
        np.maximum.reduceat(values, edges)[::2].max()
    )


def _loan(term: LoanTerm, rows: CauseRows, full: bool) -> LearnedTerm:
    source = _source(term.loan, rows)
    if term.as_ == "category":
        column = coded(source.values) if source.moving else rows.coded(term.loan)
        return _category(term, column, source, full)
    number = numbers(term.loan, source.values, source.ids)
    if term.transform == "log":
        positive(term.loan, number, source.ids)
        return LoanNumber(term.loan, True, 0.0, 1.0, source.moving)
    if term.transform == "standardise":
        centre, scale = moments(term.loan, number, source.at_risk)
        return LoanNumber(term.loan, False, centre, scale, source.moving)
    return LoanNumber(term.loan, False, 0.0, 1.0, source.moving)


def _category(term: LoanTerm, column: Coded, source: Source, full: bool) -> LoanCategory:
    missing = pd.isna(column.text)
    if missing.any():
        raise DataError(
            f"category {term.loan!r} is missing in {int(missing[column.code].sum()):,} cases. Fill it or leave the cases out "
            "under loans.rules."
        )
    place, levels = pd.factorize(column.text, sort=True)
    if term.reference is None:
        reference = int(np.argmax(totals(place.take(column.code), source.at_risk, levels.size)))
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


def _macro(term: MacroTerm, rows: CauseRows, features: FeatureTable | None) -> MacroNumber | KeyedMacro:
    if features is None or term.macro not in features.features:
        have = ", ".join(features.features) if features is not None else ""
        raise UsageError(f"no macro feature {term.macro!r}; features: {have or 'none'}")
    centre, scale = 0.0, 1.0
    if term.transform != "none":
        parts = list(feature_at_risk(term.macro, rows, features).values())
        at_risk, value = (np.concatenate(part) for part in zip(*parts, strict=True))
        centre, scale = moments(term.macro, value, at_risk)
    if (key := features.keyed.get(term.macro)) is not None:
        return KeyedMacro(term.macro, key.by, key.levels, centre, scale)
    return MacroNumber(term.macro, centre, scale)


def weight_by_column(name: str, rows: CauseRows, features: FeatureTable) -> dict[str, Floats]:
    """Column of a feature -> (periods,) weight at risk that reads it, index = period - first period at risk."""
    if (key := features.keyed.get(name)) is None:
        return {name: rows.by_period()[0]}
    code = level_codes(name, key, rows.with_levels((key.by,)), rows.loan_ids)
    return {column: rows.at_risk_of(code == j) for j, column in enumerate(key.columns(name))}


def feature_at_risk(name: str, rows: CauseRows, features: FeatureTable) -> dict[str, tuple[Floats, Floats]]:
    """Column of a feature -> (weight at risk, value) over the periods with rows at risk that read it."""
    out = {}
    for column, weight in weight_by_column(name, rows, features).items():
        used = np.flatnonzero(weight > 0)
        out[column] = weight[used], features.column(column)[rows.first_period - features.start + used]
    return out


def moments(name: str, value: Floats, weight: Floats) -> tuple[float, float]:
    """Weighted mean and standard deviation (divisor: total weight)."""
    total = weight.sum()
    mean = float((weight * value).sum() / total)
    deviation = float(np.sqrt((weight * (value - mean) ** 2).sum() / total))
    if not deviation > 1e-12 * max(abs(mean), 1e-300):
        raise NumericError(
            f"{name!r} does not vary over the rows at risk (always {mean:g}). Leave the term out."
        )
    return mean, deviation


def mean_offset(design: Design, rows: CauseRows) -> float:
    """Mean over the rows at risk of the sum of all offsets."""
    total = 0.0
    for term in design.terms:
        if isinstance(term, Offset):
            source = _source(term.source, rows)
            total += float(
                np.average(numbers(term.source, source.values, source.ids), weights=source.at_risk)
            )
    return total
