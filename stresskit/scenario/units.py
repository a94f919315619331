"""Numbers stated in another unit, or as another kind of growth rate, than the variable's: converted or refused.

What is converted is exact: percent and fraction by 100, growth rates by compounding. What would need something
that the text does not say (the base of an index, growth of the year before history) is refused with a reason.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from stresskit.core.values import MacroHistory
from stresskit.scenario.lineage import Entry
from stresskit.scenario.shapes import Floats

_SHARES = ("percent", "fraction")
_NOUNS = {"percent": "in percent", "fraction": "in fractions", "index": "an index", "level": "a level"}
Keys = tuple[str | int, ...]


def in_unit(
    owner: Entry, keys: Keys, values: Floats, *, stated: str | None, declared: str, variable: str
) -> Floats:
    """``values`` given in ``stated`` as numbers in the variable's unit. ``keys``: of the unit, for errors."""
    if stated is None or stated == declared:
        return values
    if stated in _SHARES and declared in _SHARES:
        return values / 100.0 if stated == "percent" else values * 100.0
    what = f"{variable} is {_NOUNS[declared]} and these numbers are {_NOUNS[stated]}: "
    if stated in _SHARES:
        words = (
            f"a share is no {declared}; for changes relative to its value use growth, multiply, or peak with its "
            "percent sign"
        )
    elif declared in _SHARES:
        words = f"what they would be {_NOUNS[declared]} the text does not say; convert them before"
    else:
        words = (
            "an index counts from a base that the text does not say, so one cannot be made from the other; "
            "give growth, which is the same for both"
        )
    raise owner.error(keys, what + words)


@dataclass(frozen=True, slots=True)
class RateChange:
    """From one kind of growth rate to another for one variable.

    stated, declared  per_period | annualised | year_on_year; declared None: the study does not say
    scale             100 for values in percent, 1 for fractions
    per_year          macro periods in a year
    """

    stated: str
    declared: str | None
    scale: float
    per_year: int

    def problem(self, variable: str, unit: str) -> str:
        """Why it cannot be done, "" when it can."""
        if unit not in _SHARES:
            return f"{variable} is {_NOUNS[unit]}, no growth rate itself; give its growth: {{growth: [...], rate: {self.stated}}}"
        if self.declared is None:
            return (
                f"the study does not say what kind of growth rate {variable} is; declare rate under macro.variables, "
                "or take rate out"
            )
        if self.declared == "year_on_year" != self.stated:
            return (
                f"{variable} is a year_on_year rate, and {self.stated} rates tell it only together with the growth of each "
                "period of the year before, which history does not hold; give year_on_year values"
            )
        return ""

    def apply(self, values: Floats, past: Floats) -> Floats:
        """Values of the stated kind as the declared kind; ``past``: observed values of the declared kind, newest last."""
        if self.stated == self.declared:
            return values
        n = self.per_year
        growth = 1.0 + values / self.scale
        if self.stated == "annualised":
            growth = growth ** (1.0 / n)
        elif self.stated == "year_on_year":
            before = 1.0 + past[past.size - (n - 1) :] / self.scale
            before = before ** (1.0 / n) if self.declared == "annualised" else before
            growth = _per_period(growth, before)
        out: Floats = self.scale * ((growth**n if self.declared == "annualised" else growth) - 1.0)
        return out


def _per_period(yearly: Floats, before: Floats) -> Floats:
    """Growth factors per period from those over a year and the n - 1 factors per period before them."""
    known = list(before)
    for factor in yearly:
        known.append(factor / np.prod(known[len(known) - before.size :]))
    return np.array(known[before.size :])


def as_declared(
    owner: Entry,
    keys: Keys,
    values: Floats,
    *,
    stated: str | None,
    rates: Mapping[str, str],
    history: MacroHistory,
) -> Floats:
    """Values of a variable that is a growth rate, in the kind that the study declares. ``keys``: of the rate."""
    if stated is None:
        return values
    variable = str(keys[1])
    unit = history.units[variable]
    change = RateChange(
        stated, rates.get(variable), 100.0 if unit == "percent" else 1.0, history.frequency.per_year
    )
    if problem := change.problem(variable, unit):
        raise owner.error(keys, problem)
    past = history.values[variable]
    if stated != change.declared:
        if stated == "year_on_year" and not _reaches(past, change.per_year - 1):
            raise owner.error(
                keys,
                f"to tell {change.declared} growth from year_on_year values the last {change.per_year - 1} observed values of "
                f"{variable} are needed; history has {int(np.isfinite(past).sum())}",
            )
        if (values / change.scale <= -1.0).any():
            raise owner.error(keys, "a fall by 100% or more cannot be converted to another kind of rate")
    return change.apply(values, past)


def _reaches(past: Floats, needed: int) -> bool:
    return past.size >= needed and bool(np.isfinite(past[past.size - needed :]).all())
