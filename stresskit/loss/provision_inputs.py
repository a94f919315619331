"""From the study's words and the book's columns to what staging and capital need of each loan."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import DataError, Problem
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.adjust import texts
from stresskit.loss.capital import CLASSES, CORPORATE, LGD_FLOOR, PD_FLOOR, RESIDENTIAL, SECURED_FLOOR, Inputs
from stresskit.loss.reference import Conditions, ReferencePds, reference_pds
from stresskit.loss.yearly import CapitalInputs, StageInputs
from stresskit.spec.provisions import Capital, Reference, Staging

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(slots=True)
class References:
    """Reference PDs of a book by conditions, each computed once.

    life, points   steps of each loan (n,); steps of the points (N + 1,)
    conditions     name of conditions -> the macro features that they mean
    """

    portfolio: Portfolio
    fits: Mapping[str, HazardFit]
    life: Ints
    points: Ints
    conditions: Callable[[str], Conditions]
    _known: dict[str, ReferencePds]

    def under(self, name: str, place: str) -> ReferencePds:
        if name not in self._known:
            self._known[name] = reference_pds(
                self.portfolio, self.fits, self.conditions(name), self.life, self.points, place=place
            )
        return self._known[name]


def _fractions(portfolio: Portfolio, column: str, place: str) -> Floats:
    values = np.asarray(portfolio.static[column], dtype=np.float64)
    bad = ~((values >= 0) & (values <= 1))
    if bad.any():
        raise DataError(
            f"{place}: {column} is not a fraction between 0 and 1 in every loan of the book",
            [
                Problem(
                    "not_a_fraction", f"loans whose {column} is missing or outside 0..1", int(bad.sum()),
                    tuple(map(str, portfolio.loan_ids[bad][:5])), "Fill it, or take conditions instead of a column.",
                )
            ],
        )  # fmt: skip
    return values


def at_origination(reference: Reference, references: References) -> Floats:
    """(n, N + 1) lifetime PD as of origination, for the life that is left at each point.

    A column holds it for the whole original term; it is cut to the rest by a constant hazard: 1 - (1 - PD)^(left / term).
    """
    portfolio, place = references.portfolio, "staging.at_origination"
    if reference.column is None:
        return references.under(reference.conditions, place).lifetime
    whole = _fractions(portfolio, reference.column, f"{place}.column")
    term = (portfolio.age + portfolio.remaining).astype(np.float64)
    left = np.maximum(references.life[:, None] - references.points[None, :], 0) / term[:, None]
    with np.errstate(divide="ignore", invalid="ignore"):
        rest = -np.expm1(np.log1p(-whole)[:, None] * left)
    return np.where(left > 0, rest, 0.0)


def stage_inputs(rule: Staging, references: References) -> StageInputs:
    """Inputs of staging. A loan whose days past due are missing counts as not past due (see missing_days)."""
    past_due = None
    if rule.past_due is not None:
        past_due = (
            np.asarray(references.portfolio.static[rule.past_due.column], dtype=float) >= rule.past_due.days
        )
    return StageInputs(rule, at_origination(rule.at_origination, references), past_due)


def missing_days(rule: Staging, portfolio: Portfolio) -> float:
    """Loans of the book whose days past due are not known, by their counts."""
    if rule.past_due is None:
        return 0.0
    unknown = np.isnan(np.asarray(portfolio.static[rule.past_due.column], dtype=float))
    return float(portfolio.counts[unknown].sum())


def capital_loans(spec: Capital, portfolio: Portfolio) -> Inputs:
    """Class, floors and turnover of each loan. Raises DataError for a value without a class."""
    column = texts(portfolio.static[spec.class_])
    unknown = ~np.isin(column, list(spec.values))
    if unknown.any():
        values = sorted({str(v) for v in column[unknown]})
        raise DataError(
            f"capital.values gives no class for some loans: {spec.class_} has {', '.join(map(repr, values[:5]))}",
            [
                Problem(
                    "class_missing", f"loans whose {spec.class_} has no class", int(unknown.sum()),
                    tuple(map(str, portfolio.loan_ids[unknown][:5])),
                    f"Add the values under capital.values; it has {sorted(spec.values)}.",
                )
            ],
        )  # fmt: skip
    names, index = np.unique(column, return_inverse=True)
    kinds = np.array([CLASSES.index(spec.values[str(n)]) for n in names], dtype=np.int64)
    least = np.array([_lgd_floor(spec, str(n), int(k)) for n, k in zip(names, kinds, strict=True)])
    kind = kinds[index]
    turnover = np.full(column.shape, np.nan)
    if spec.turnover is not None:
        sales = np.asarray(portfolio.static[spec.turnover], dtype=np.float64)
        # at 50 million the adjustment is nil: larger firms have none (CRE31.8)
        turnover = np.where((kind == CORPORATE) & (sales < 50.0), sales, np.nan)
    floor = PD_FLOOR[kind] if spec.input_floors else np.zeros(kind.shape)
    return Inputs(kind, floor, least[index], turnover)


def _lgd_floor(spec: Capital, value: str, kind: int) -> float:
    downturn = spec.downturn_lgd.get(value, 0.0)
    if not spec.input_floors:
        return downturn
    security = spec.secured.get(value, "unsecured")
    # the floor of a residential mortgage stands for its security already
    own = LGD_FLOOR[kind] if security == "unsecured" or kind == RESIDENTIAL else SECURED_FLOOR[security]
    return max(downturn, float(own))


def capital_inputs(spec: Capital, references: References) -> CapitalInputs:
    """Inputs of capital for the performing book."""
    portfolio = references.portfolio
    if spec.long_run.column is None:
        long_run = references.under(spec.long_run.conditions, "capital.long_run").year
    else:
        values = _fractions(portfolio, spec.long_run.column, "capital.long_run.column")
        long_run = np.broadcast_to(values[:, None], (values.size, references.points.size))
    maturity = None if spec.maturity == "remaining" else float(spec.maturity)
    return CapitalInputs(capital_loans(spec, portfolio), long_run, spec.stressed_weight, maturity)
