"""Rates along a path: fixed, or set anew from a macro variable every few periods.

Clock: a reset takes place at the START of a period whose number of periods since the period of origination is a
whole multiple of the declared months. It reads the variable at the end of the period before, adds the margin and
applies floor, then cap. Until the first reset after as_of a loan keeps the rate it has in the book.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.index import IndexLevels, MacroLevels, index_levels
from stresskit.contract.terms import codes_of, per_loan, periods_of, rate_scale
from stresskit.core.errors import TextError
from stresskit.core.values import Portfolio
from stresskit.kernels.moving import reset_rates
from stresskit.spec.contract import RATE_UNITS, index_variables
from stresskit.spec.moving import FloatingRate
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


@dataclass(frozen=True, slots=True, eq=False)
class Floaters:
    """Loans that float by one definition: (n,) arrays of the whole book; rates are annual fractions.

    mine     whether the loan is one of them
    every    periods from reset to reset
    levels   of the variable, in its own unit; scale makes it a fraction
    """

    mine: NDArray[np.bool_]
    every: int
    margin: Floats
    floor: Floats
    cap: Floats
    levels: IndexLevels
    scale: float

    def tile(self, loans: Ints, steps: int, portfolio: Portfolio) -> Floats:
        """(b, steps) rates of loans that all float like this."""
        levels = self.levels.rows(portfolio.as_of, steps) * self.scale
        terms = np.stack([self.margin[loans], self.floor[loans], self.cap[loans]])
        # a loan that starts after as_of has no reset before its first payment: its age is 0
        return reset_rates(
            portfolio.rate[loans], portfolio.age[loans], self.every, terms, levels, self.levels.which[loans]
        )


@dataclass(frozen=True, slots=True, eq=False)
class RatePaths:
    """Rates of a book along one path."""

    portfolio: Portfolio
    floaters: tuple[Floaters, ...]

    def tile(self, loans: Ints, steps: int) -> Floats:
        """Nominal annual rates in force in each step: (b, steps), or (b, 1) when none of these loans floats."""
        out = self.portfolio.rate[loans][:, None]
        for floaters in self.floaters:
            mine = floaters.mine[loans]
            if not mine.any():
                continue
            if mine.all():
                return floaters.tile(loans, steps, self.portfolio)
            if out.shape[1] != steps:
                out = np.repeat(out, steps, axis=1)
            out[mine] = floaters.tile(loans[mine], steps, self.portfolio)
        return out

    def lacking(self) -> dict[str, NDArray[np.bool_]]:
        """Term -> (n,) loans that need it and have none."""
        out: dict[str, NDArray[np.bool_]] = {}
        for f in self.floaters:
            for name in ("margin", "floor", "cap"):
                bad = f.mine & np.isnan(getattr(f, name))
                if bad.any():
                    out[f"rates: {name}"] = out.get(f"rates: {name}", np.zeros_like(bad)) | bad
        return out


def rate_paths(study: Study, portfolio: Portfolio, source: MacroLevels) -> RatePaths:
    """Rates of the book as ``rates`` declares them. Raises DataError for values of its column that it does not name."""
    if study.rates is None:
        return RatePaths(portfolio, ())
    everyone = np.ones(portfolio.n_loans, dtype=bool)
    if study.rates.floating is not None:
        return RatePaths(
            portfolio,
            (_floaters(study, study.rates.floating, portfolio, source, everyone, "rates.floating"),),
        )
    by, values = str(study.rates.by), study.rates.values
    code = codes_of(portfolio.static[by], values, place="rates.values", by=by, ids=lambda: portfolio.loan_ids)
    found = [
        _floaters(study, kind, portfolio, source, code == i, f"rates.values.{value}")
        for i, (value, kind) in enumerate(values.items())
        if isinstance(kind, FloatingRate)
    ]
    return RatePaths(portfolio, tuple(found))


def _floaters(
    study: Study,
    kind: FloatingRate,
    portfolio: Portfolio,
    source: MacroLevels,
    mine: NDArray[np.bool_],
    place: str,
) -> Floaters:
    every = periods_of(kind.reset_months, portfolio.frequency)
    if every == 0:
        raise TextError(
            f"{place}.reset_months: {kind.reset_months} months are no whole number of quarters; expected a multiple of 3"
        )
    scale, n, static = rate_scale(study), portfolio.n_loans, portfolio.static
    units = {_unit(study, variable) for variable in index_variables(kind.index)}
    if len(units) != 1:
        raise TextError(f"{place}.index: the variables have different units, some percent and some fraction")
    levels = index_levels(
        kind.index, source, static.__getitem__, lambda: portfolio.loan_ids,
        place=f"{place}.index", n=n, positive=False,
    )  # fmt: skip
    return Floaters(
        mine=mine,
        every=every,
        margin=per_loan(kind.margin, static, n, 0.0) * scale,
        floor=per_loan(kind.floor, static, n, -np.inf) * scale,
        cap=per_loan(kind.cap, static, n, np.inf) * scale,
        levels=levels,
        scale=units.pop(),
    )


def _unit(study: Study, variable: str) -> float:
    macro = study.macro
    if macro is None:
        raise TextError(f"{variable!r} is read, but the study has no macro section")
    return RATE_UNITS[macro.variables[variable].unit]
