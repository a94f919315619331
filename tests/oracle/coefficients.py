"""The linear predictor of one loan-period, term by term from a fit's named coefficients, with math alone.

Learned state (knots, bands, centres) is read from the fit; how it turns into numbers is worked out
here again: the spline by solving for its second derivatives, levels by comparing text.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from functools import cache
from typing import Any


def _clip(x: float, low: float, high: float) -> float:
    return min(max(x, low), high)


def natural_spline(knots: list[float], heights: list[float], x: float) -> float:
    """Natural cubic spline through (knots, heights): tridiagonal system by elimination (Press et al. 2007, 3.3)."""
    n = len(knots)
    second, work = [0.0] * n, [0.0] * n
    for i in range(1, n - 1):
        share = (knots[i] - knots[i - 1]) / (knots[i + 1] - knots[i - 1])
        pivot = share * second[i - 1] + 2.0
        second[i] = (share - 1.0) / pivot
        bend = (heights[i + 1] - heights[i]) / (knots[i + 1] - knots[i]) - (heights[i] - heights[i - 1]) / (
            knots[i] - knots[i - 1]
        )
        work[i] = (6.0 * bend / (knots[i + 1] - knots[i - 1]) - share * work[i - 1]) / pivot
    for i in range(n - 2, -1, -1):
        second[i] = second[i] * second[i + 1] + work[i]
    k = max(i for i in range(n - 1) if knots[i] <= x or i == 0)
    width = knots[k + 1] - knots[k]
    a, b = (knots[k + 1] - x) / width, (x - knots[k]) / width
    return (
        a * heights[k]
        + b * heights[k + 1]
        + ((a**3 - a) * second[k] + (b**3 - b) * second[k + 1]) * width**2 / 6.0
    )


def _in_band(label: str, age: int) -> bool:
    span = label[len("age[") : -1]
    if span.endswith("+"):
        return age >= int(span[:-1])
    low, _, high = span.partition("-")
    return int(low) <= age <= int(high or low)


def _age_value(term: Any, label: str, age: int) -> float:
    if term.kind == "function":
        a = _clip(age, term.lowest, term.largest)
        return {"age[log]": math.log(a), "age[linear]": a, "age[square]": a * a}[label]
    if term.kind == "steps":
        return float(_in_band(label, int(_clip(age, term.lowest, term.last[-1]))))
    knots = list(term.knots)
    heights = [1.0 if f"age[{k:g}]" == label else 0.0 for k in knots]
    return natural_spline(knots, heights, _clip(age, knots[0], knots[-1]))


def predictor(
    fit: Any, *, held: bool = True
) -> Callable[[int, Mapping[str, Any], Mapping[str, float]], float]:
    """Linear predictor of a loan (its columns) at an age under macro features.

    held  as projected: past the last supported age the age effect stays; False: as the likelihood has it
    """
    last = int(fit.supported_age if held else fit.largest_age)
    terms = {t.name: t for t in fit.design.terms}
    labels = [
        (() if name == "intercept" else tuple(name.split(":")), float(c)) for name, c in fit.params.items()
    ]
    offsets = [t.source for t in fit.design.terms if t.kind == "offset"]

    @cache
    def age_value(label: str, age: int) -> float:
        return _age_value(terms["age"], label, age)

    def value(label: str, age: int, loan: Mapping[str, Any], macro: Mapping[str, float]) -> float:
        if label.startswith("age["):
            height: float = age_value(label, min(age, last))
            return height
        if label.endswith("]"):
            column, _, level = label[:-1].partition("[")
            return float(str(loan[column]) == level)
        term = terms[label]
        x = float(macro[label] if term.kind == "macro" else loan[label])
        if getattr(term, "log", False):
            x = math.log(x)
        return (x - term.centre) / term.scale

    def eta(age: int, loan: Mapping[str, Any], macro: Mapping[str, float]) -> float:
        parts = [c * math.prod(value(atom, age, loan, macro) for atom in atoms) for atoms, c in labels]
        return math.fsum([*parts, *(float(loan[name]) for name in offsets)])

    return eta
