"""Gates around a fit: separation named before and during, rank named by terms.

Separation: Albert and Anderson 1984, Biometrika 71: when a column parts the events from the rest, the
likelihood has no maximum and a solver reports where it happened to stop.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable
from stresskit.hazard.at_risk import CauseRows
from stresskit.hazard.design import INTERCEPT, Design
from stresskit.hazard.learn import feature_at_risk, range_at_risk
from stresskit.hazard.newton import standard_errors
from stresskit.hazard.sums import Evaluation
from stresskit.hazard.terms import AgeSteps, Crossing, LoanCategory, LoanNumber, Side
from stresskit.kernels.blocks import counts_along, totals
from stresskit.kernels.counts import by_level
from stresskit.kernels.linalg import dependent_columns

Floats = NDArray[np.float64]

#: A coefficient times its column's range whose standard error is beyond this while Newton still walks
#: away belongs to a likelihood without a maximum.
RUNNING_ERROR = 50.0
RUNNING_STEP = 0.3
FIRST_CHECK = 5

_REMEDY = "Pool it with another level (when_separated: pool), state a ridge or firth (when_separated), or leave it out of the study."


@dataclass(frozen=True, slots=True)
class Trouble:
    """A level, or a pair of levels, that parts events from the rest; ``term``: the name of the term it belongs to."""

    term: str
    text: str


def check_events(rows: CauseRows, cause: str) -> None:
    """NumericError when there are no events, or nothing but events."""
    if rows.event_weight == 0.0:
        left = rows.events_without_feature
        more = f" ({left:,.0f} events lie in rows whose macro features are not known)" if left else ""
        raise NumericError(
            f"no events of {cause!r} among {rows.total_weight:,.0f} rows at risk{more}: nothing to estimate"
        )
    if rows.event_weight == rows.total_weight:
        raise NumericError(f"every row at risk of {cause!r} is an event: the hazard has no estimate below 1")


def trouble_with_levels(design: Design, rows: CauseRows) -> list[Trouble]:
    """Every level without events or without survivors; when there is none, every such pair of an interaction."""
    terms = {t.name: t for t in design.terms}
    found: list[Trouble] = []
    for term in design.terms:
        if isinstance(term, AgeSteps) or (isinstance(term, LoanCategory) and not term.moving):
            found += [Trouble(term.name, text) for text in _troubled(term.labels, *level_totals(term, rows))]
    if found:
        return found
    for term in design.terms:
        if isinstance(term, Crossing):
            sides = sorted((terms[term.left], terms[term.right]), key=lambda t: isinstance(t, AgeSteps))
            first, second = sides
            if (
                isinstance(first, LoanCategory)
                and not first.moving
                and isinstance(second, AgeSteps | LoanCategory)
            ):
                found += [Trouble(term.name, text) for text in _pairs(first, second, rows)]
    return found


def level_totals(term: AgeSteps | LoanCategory, rows: CauseRows) -> tuple[Floats, Floats]:
    """(rows at risk, events) of each level."""
    if isinstance(term, AgeSteps):
        return _by_level(term, rows, np.ones(rows.loan.size, dtype=bool))
    level, size = term.level(rows.coded(term.source)), len(term.labels)
    return by_level(level, rows.by_loan(), size), by_level(level, rows.events_by_loan(), size)


def _pairs(first: LoanCategory, second: AgeSteps | LoanCategory, rows: CauseRows) -> list[str]:
    if isinstance(second, LoanCategory) and second.moving:
        return []
    level = first.level(rows.coded(first.source))[rows.loan]
    found: list[str] = []
    for j, label in enumerate(first.labels):
        labels = [f"{label}:{other}" for other in second.labels]
        found += _troubled(labels, *_by_level(second, rows, level == j))
    return found


def _by_level(
    term: AgeSteps | LoanCategory, rows: CauseRows, stays: NDArray[np.bool_]
) -> tuple[Floats, Floats]:
    """(rows at risk, events) of each level among the chosen stays."""
    size, weight = len(term.labels), rows.weight * stays
    if isinstance(term, AgeSteps):
        ages = rows.largest_age + 1
        band = term.level(np.arange(ages))
        at_risk = counts_along(rows.entry, rows.exit, weight, ages)
        return totals(band, at_risk, size), totals(term.level(rows.exit), weight * rows.event, size)
    level = term.level(rows.coded(term.source))[rows.loan]
    return totals(level, weight * (rows.exit - rows.entry), size), totals(level, weight * rows.event, size)


def trouble_with_indicators(design: Design, at_risk: Floats, events: Floats) -> list[Trouble]:
    """The same for 0/1 columns of any kind, from their sums over rows and over events, each (k,)."""
    return [
        Trouble(design.owner[j], text)
        for j in np.flatnonzero(design.indicators())
        for text in _troubled([design.labels[j]], at_risk[j : j + 1], events[j : j + 1])
    ]


def _troubled(labels: tuple[str, ...] | list[str], at_risk: Floats, events: Floats) -> list[str]:
    out = []
    for label, n, d in zip(labels, at_risk, events, strict=True):
        if n <= 0.0:
            out.append(f"{label}: no rows at risk")
        elif d <= 0.0:
            out.append(f"{label}: {n:,.0f} rows at risk, no events")
        elif d >= n:
            out.append(f"{label}: all of {n:,.0f} rows at risk are events")
    return out


def refuse(found: list[str]) -> None:
    """NumericError that names what was found, if anything."""
    if found:
        more = f"; and {len(found) - 8} more" if len(found) > 8 else ""
        raise NumericError(
            f"separation, so these coefficients have no finite estimate: {'; '.join(found[:8])}{more}. {_REMEDY}"
        )


def check_rank(design: Design, information: Floats) -> None:
    """NumericError that names the terms whose columns cannot be told apart."""
    constant = 0 if design.intercept else None
    dependent = dependent_columns(information, constant=constant)
    if not dependent:
        return
    sentences = []
    owners: set[str] = set()
    for column, weights in dependent[:5]:
        involved = [j for j in np.argsort(-np.abs(weights)) if abs(weights[j]) > 1e-3 and j != column]
        names = list(dict.fromkeys([design.owner[column], *(design.owner[j] for j in involved)]))
        owners.update(names)
        if len(names) == 1 and not involved:
            sentences.append(f"{design.labels[column]!r} is 0 in every row")
        else:
            labels = ", ".join(repr(design.labels[j]) for j in involved[:6])
            sentences.append(f"{design.labels[column]!r} is a combination of {labels}")
            if names[1:] == [INTERCEPT]:
                sentences[-1] += (
                    " (it is constant over the rows at risk, or moves too little for its level; for the second, transform: standardise)"
                )
    owners.discard(INTERCEPT) if len(owners) > 2 else None
    text = f"terms that cannot be told apart: {', '.join(sorted(owners))}. {'; '.join(sentences)}. "
    if "age" in owners and owners & set(design.features) and owners & set(design.sources("loan")):
        text += "Age, calendar period and origination are linearly dependent (period = origination + age): "
    raise NumericError(text + "Leave one of them out.")


@dataclass(frozen=True, slots=True, eq=False)
class RunawayWatch:
    """Raises NumericError when Newton is chasing coefficients that have no finite estimate.

    reach  (k,) range of each column over the rows: max - min
    """

    design: Design
    reach: Floats
    event_weight: float

    def singular(self, iteration: int, params: Floats, at: Evaluation) -> None:
        self._complete(params, at)
        check_rank(self.design, at.information)

    def after_step(self, iteration: int, params: Floats, step: Floats, at: Evaluation) -> None:
        self._complete(params, at)
        self._running(iteration, params, step, at)

    def _complete(self, params: Floats, at: Evaluation) -> None:
        if -at.llf < 1e-6 * self.event_weight:
            worst = self._names(np.abs(params) * self.reach)
            raise NumericError(
                f"complete separation: every fitted probability is 0 or 1; {worst} part events from the rest exactly. "
                "Leave the term out, or check that it was known before the event."
            )

    def _running(self, iteration: int, params: Floats, step: Floats, at: Evaluation) -> None:
        if iteration < FIRST_CHECK:
            return
        error = standard_errors(at) * self.reach
        running = (error > RUNNING_ERROR) & (np.abs(step) * self.reach > RUNNING_STEP)
        if running.any():
            walk = np.where(running, np.abs(step) * self.reach, 0.0)
            order = [int(j) for j in np.argsort(-walk) if running[j] and self.design.labels[j] != INTERCEPT]
            if not order:
                # The intercept runs with the column that is the cause, and may be the first to be far out.
                far = np.abs(params) * self.reach
                order = [int(j) for j in np.argsort(-far) if self.design.labels[j] != INTERCEPT][:1] or [0]
            names = ", ".join(f"{self.design.labels[j]} (now {params[j]:.4g})" for j in order[:4])
            raise NumericError(
                f"separation: still running away in iteration {iteration}, with fitted probabilities of 0 or 1: {names}. "
                "The column parts events from the rest. Leave the term out, pool, or check that it was known "
                "before the event."
            )

    def _names(self, size: Floats) -> str:
        order = [j for j in np.argsort(-size) if self.design.labels[j] != INTERCEPT][:3]
        return ", ".join(self.design.labels[j] for j in order) or INTERCEPT


def column_reach(design: Design, ends_of: Mapping[Side, Callable[[int], tuple[float, float]]]) -> Floats:
    """(k,) bound on max - min of every column, from the extremes of its factors.

    ends_of  side -> smallest and largest value of a product of the side over the values that occur
    """
    low, high = np.ones(design.k), np.ones(design.k)
    for side, of in ends_of.items():
        index, ends = design.index[side], dict[int, tuple[float, float]]()
        for j in np.flatnonzero(index >= 0):
            if (p := int(index[j])) not in ends:
                ends[p] = of(p)
            corners = [a * b for a in (low[j], high[j]) for b in ends[p]]
            low[j], high[j] = min(corners), max(corners)
    return np.where(high > low, high - low, np.maximum(np.abs(high), 1.0))


def moving_reach(design: Design, rows: CauseRows) -> Floats | None:
    """(k,) what the moving side adds to :func:`column_reach` of the other sides, as a factor; None where nothing moves.

    A column of the moving side alone: its range. One that is a product with other sides: the largest size of its moving
    part. Without it a small unit of a moving column looks like a coefficient that runs away.
    """
    index = design.index["moving"]
    if not (index >= 0).any():
        return None
    others = np.column_stack([design.index[side] for side in ("loan", "age", "feature")]).max(axis=1) >= 0
    out = np.ones(design.k)
    for j in np.flatnonzero(index >= 0):
        low, high = 1.0, 1.0
        for t, _ in design.products["moving"][index[j]]:
            term = design.terms[t]
            ends = range_at_risk(term, rows) if isinstance(term, LoanNumber) else (0.0, 1.0)
            corners = [a * b for a in (low, high) for b in ends]
            low, high = min(corners), max(corners)
        size = max(abs(low), abs(high))
        out[j] = size if others[j] or high == low else high - low
    return np.where(out > 0.0, out, 1.0)


def feature_ranges(
    design: Design, rows: CauseRows, features: FeatureTable | None
) -> dict[str, tuple[float, float]]:
    """Smallest and largest value of each macro feature over the rows at risk.

    Of a feature that goes by a loan column: of each level over the loans of that level; where none of them was at
    risk, over the loans of all levels.
    """
    if features is None:
        return {}
    out: dict[str, tuple[float, float]] = {}
    for name in design.features:
        read = {column: value for column, (_, value) in feature_at_risk(name, rows, features).items()}
        everywhere = np.concatenate(list(read.values()))
        for column, value in read.items():
            seen = value if value.size else everywhere
            out[column] = float(seen.min()), float(seen.max())
    return out
