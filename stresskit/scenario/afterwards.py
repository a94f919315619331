"""What comes after the last stated value: hold, back to another scenario, revert, or grow on."""

from __future__ import annotations

from collections.abc import Callable, Mapping

import numpy as np

from stresskit.scenario.lineage import BASELINE, Entry
from stresskit.scenario.place import SHARES, Place
from stresskit.scenario.shapes import Floats, added, growing_on, halving, reverting
from stresskit.scenario.units import Keys
from stresskit.spec.scenario import Afterwards, BackTo, GrowOn, Revert

#: Path of the variable in the scenario of this name, (H,); keys: what refers to it, for errors.
Other = Callable[[Keys, str], Floats]


def followed(
    place: Place, rule: Afterwards, values: Floats, settled: int, *, name: str, other: Other
) -> Floats:
    """``values`` with every row after ``settled`` put by the rule. Shape (H,).

    place  of the rule: its owner may be a scenario that ``name`` is based on
    """
    out, tail = values.copy(), slice(settled + 1, None)
    end, rest = float(values[settled]), values.size - 1 - settled
    if rule == "hold":
        out[tail] = end
    elif rule == "baseline":
        out[tail] = other(_baseline_keys(place, name), BASELINE)[tail]
    elif isinstance(rule, Revert):
        out[tail] = _closing(end, _target(place, rule), rule, rest)
    elif isinstance(rule, GrowOn):
        out[tail] = growing_on(end, _yearly(place, rule, end), place.per_year, rest)
    else:
        assert isinstance(rule, BackTo)
        there = other(_back_keys(place, rule, name), rule.back_to)
        closes = rule.over is not None or rule.half_life is not None
        gap = end - float(there[settled])
        out[tail] = added(there[tail], _closing(gap, 0.0, rule, rest)) if closes else there[tail]
    return out


def _closing(start: float, target: float, rule: Revert | BackTo, n: int) -> Floats:
    if rule.half_life is not None:
        return halving(start, target, rule.half_life, n)
    assert rule.over is not None
    return reverting(start, target, rule.over, n)


def _baseline_keys(place: Place, name: str) -> Keys:
    keys, known = rule_keys(place.owner, place.variable), place.others
    if name == BASELINE:
        raise place.owner.error(
            keys, f"the scenario {BASELINE!r} cannot return to itself; use hold or revert_to"
        )
    if BASELINE not in known:
        raise place.owner.error(
            keys,
            f"baseline means the scenario called {BASELINE!r}, and the study has none "
            f"(it has {', '.join(known)}); add it, or use hold, revert_to or back_to",
        )
    return keys


def _back_keys(place: Place, rule: BackTo, name: str) -> Keys:
    keys = (*rule_keys(place.owner, place.variable), "back_to")
    if rule.back_to == name:
        raise place.owner.error(keys, f"the scenario {name!r} cannot return to itself; name another one")
    return keys


def _target(place: Place, rule: Revert) -> float:
    """Where a reverting rule leads, checked even when the horizon ends before it."""
    keys = rule_keys(place.owner, place.variable)
    if rule.revert_to != "long_run_mean":
        return float(place.in_unit((*keys, "unit"), np.array([rule.revert_to]), rule.unit)[0])
    if place.unit == "index":
        raise place.owner.error(
            keys,
            f"{place.variable} is an index, and the mean of an index over history is no level to return to; "
            "give one rule per variable, for this one {grow_by: long_run_mean}, hold, baseline or a number",
        )
    if place.observed.size == 0:
        raise place.owner.error(keys, f"{place.variable} has no observed value up to as_of to take a mean of")
    return float(place.observed.mean())


def _yearly(place: Place, rule: GrowOn, end: float) -> float:
    """Growth per year as a fraction: the stated one, or the geometric mean over history."""
    keys = rule_keys(place.owner, place.variable)
    if place.unit in SHARES:
        raise place.owner.error(
            keys,
            f"{place.variable} is in {place.unit}, and grow_by is for an index or a level; use hold or revert_to",
        )
    if end <= 0:
        raise place.owner.error(
            keys, f"{place.variable} is {end:g} where grow_by takes over, and growth needs a value above zero"
        )
    if not isinstance(rule.grow_by, str):
        return rule.grow_by
    known = place.observed
    if known.size < 2 or known[0] <= 0 or known[-1] <= 0:
        raise place.owner.error(
            keys,
            f"the mean growth of {place.variable} needs two observed values above zero, the first and the last",
        )
    return float((known[-1] / known[0]) ** (place.per_year / (known.size - 1)) - 1.0)


def rule_keys(owner: Entry, variable: str) -> Keys:
    """Keys of the rule for a variable in the text that states it."""
    return ("afterwards", variable) if isinstance(owner.spec.afterwards, Mapping) else ("afterwards",)
