"""What a path statement says by itself, as numbers by row; the scenarios it refers to are followed in ``paths``."""

from __future__ import annotations

import math

import numpy as np

from stresskit.scenario.lineage import Statement
from stresskit.scenario.place import SHARES, Place
from stresskit.scenario.shapes import Floats, added, grown, reverting, there_and_back, there_and_halving
from stresskit.scenario.units import as_declared
from stresskit.spec.scenario import (
    AddTo,
    GivenValues,
    GrowthPath,
    HoldAt,
    MultiplyBy,
    PeakAndBack,
    ReachLevel,
)

#: Under half-life a change counts as stated until less than this share of it is left; it goes on halving after that.
SPENT = 0.01


def reference(spec: Statement) -> tuple[str, str] | None:
    """Key and name of the scenario that a statement builds on."""
    if isinstance(spec, AddTo):
        return "add_to", spec.add_to
    if isinstance(spec, MultiplyBy):
        return "multiply", spec.multiply
    if isinstance(spec, PeakAndBack):
        return "change_from", spec.change_from
    if isinstance(spec, ReachLevel):
        return None if spec.back_to is None else ("back_to", spec.back_to)
    return ("on", spec.on) if isinstance(spec, GrowthPath) and spec.on != "history" else None


def by_itself(place: Place, spec: Statement) -> tuple[Floats, int]:
    """What is stated without another scenario, at least one value, and the last row that it states."""
    keys = ("paths", place.variable)
    if isinstance(spec, GivenValues):
        values = place.in_unit((*keys, "unit"), place.numbers(spec.values), spec.unit)
        declared = as_declared(
            place.owner, (*keys, "rate"), values, stated=spec.rate, rates=place.rates, history=place.history
        )
        return declared, values.size - 1
    if isinstance(spec, HoldAt):
        last = place.row_ahead((*keys, "until"), spec.until)
        return np.array([place.last_observed((*keys, "hold"))]), last
    if isinstance(spec, ReachLevel):
        last = place.row_ahead((*keys, "at"), spec.at)
        target = float(place.in_unit((*keys, "unit"), np.array([spec.reach]), spec.unit)[0])
        start = place.last_observed((*keys, "reach"))
        return reverting(start, target, last + 1, min(last + 1, place.periods)), last
    assert isinstance(spec, GrowthPath)
    refuse_growth_of_shares(place)
    needed = place.per_year if spec.rate == "year_on_year" else 1
    return growth(place, spec, place.last_year((*keys, "growth"), needed))


def reached_and_back(place: Place, spec: ReachLevel, base: Floats) -> tuple[Floats, int]:
    """The climb to the level, then ``base`` (H,) with the gap to it closing straight; and the last row that is stated."""
    keys = ("paths", place.variable)
    climb, at = by_itself(place, spec)
    assert spec.back_by is not None
    back_by = place.row(spec.back_by)
    if back_by <= at:
        raise place.owner.error(
            (*keys, "back_by"),
            f"back_by {place.label(back_by)} must come after {place.label(at)}, the period of at",
        )
    values = base.copy()
    values[: climb.size] = climb
    rest = place.periods - 1 - at
    if rest > 0:
        gap = float(climb[-1]) - float(base[at])
        values[at + 1 :] = added(base[at + 1 :], reverting(gap, 0.0, back_by - at, rest))
    return values, back_by


def growth(place: Place, spec: GrowthPath, before: Floats) -> tuple[Floats, int]:
    """Levels that grow after those of the year ``before``, to the end; and the last row that states a rate."""
    refuse_growth_of_shares(place)
    rates = place.numbers(spec.growth, key="growth")
    return grown(rates, spec.rate, before, place.periods), rates.size - 1


def refuse_growth_of_shares(place: Place) -> None:
    if place.unit in SHARES:
        raise place.owner.error(
            ("paths", place.variable, "growth"),
            f"{place.variable} is in {place.unit}, where growth of its value is easily taken for percentage points; use add_to "
            "(amounts in the variable's unit), or multiply",
        )


def peak(place: Place, spec: PeakAndBack) -> tuple[Floats, int]:
    """The change by row, an amount for peak_points and else relative; and the last row that it states."""
    keys = ("paths", place.variable)
    at = place.row(spec.at)
    if at < 0:
        raise place.owner.error(
            (*keys, "at"), f"the peak in {place.label(at)} lies before the first period, {place.label(0)}"
        )
    back_by = None if spec.back_by is None else place.row(spec.back_by)
    if back_by is not None and back_by <= at:
        raise place.owner.error(
            (*keys, "back_by"),
            f"back_by {place.label(back_by)} must come after the peak in {place.label(at)}",
        )
    size = _size(place, spec)
    if spec.half_life is not None:
        spent = at + math.ceil(-math.log2(SPENT) * spec.half_life)
        return size * there_and_halving(place.periods, at, spec.half_life), spent
    return size * there_and_back(place.periods, at, back_by), at if back_by is None else back_by


def _size(place: Place, spec: PeakAndBack) -> float:
    keys = ("paths", place.variable)
    if spec.peak_points is not None:
        return float(place.in_unit((*keys, "unit"), np.array([spec.peak_points]), spec.unit)[0])
    if spec.peak is None:
        assert spec.peak_factor is not None
        return spec.peak_factor - 1.0
    if place.unit in SHARES:
        raise place.owner.error(
            (*keys, "peak"),
            f"{place.variable} is in {place.unit}, where a change by {100 * spec.peak:+.4g}% of its value is easily taken for "
            f"{100 * spec.peak:+.4g} percentage points; use peak_points (an amount in the variable's unit), or multiply",
        )
    return spec.peak
