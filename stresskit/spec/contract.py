"""What the sections on contracts ask for: macro variables and loan columns, each with its place in the text."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Literal

from stresskit.spec.exposure import Collateral, Exposure
from stresskit.spec.moving import (
    BalanceOverLimit,
    BalanceOverValue,
    Index,
    IndexByColumn,
    MovingColumn,
    PaymentOver,
    PeriodsSince,
    RateLess,
    Rates,
    index_variables,
)

Place = tuple[str, ...]
Kind = Literal["number", "category", "date"]
#: Units in which a variable can be added to a rate.
RATE_UNITS: Mapping[str, float] = {"percent": 0.01, "fraction": 1.0}


@dataclass(frozen=True, slots=True)
class VariableUse:
    """A macro variable at ``place``; ``as_rate``: it is added to or taken off a rate, so its unit matters."""

    place: Place
    variable: str
    as_rate: bool = False


@dataclass(frozen=True, slots=True)
class ColumnUse:
    """A loan column at ``place``; ``history``: the rows at risk need it too, not the book alone."""

    place: Place
    column: str
    kind: Kind
    history: bool = False


def _of_index(place: Place, index: Index | None, *, as_rate: bool = False) -> Iterator[VariableUse]:
    if isinstance(index, IndexByColumn):
        for value, variable in index.of.items():
            yield VariableUse((*place, "of", value), variable, as_rate)
    elif index is not None:
        yield VariableUse(place, index, as_rate)


def variable_uses(
    moving: Mapping[str, MovingColumn], rates: Rates | None, exposure: Exposure, collateral: Collateral | None
) -> Iterator[VariableUse]:
    """Every macro variable that these sections read."""
    for name, column in moving.items():
        place = ("moving", name)
        if isinstance(column, BalanceOverValue):
            yield from _of_index((*place, "balance_over_value", "index"), column.balance_over_value.index)
        elif isinstance(column, PaymentOver):
            yield from _of_index((*place, "payment_over", "index"), column.payment_over.index)
        elif isinstance(column, RateLess):
            yield VariableUse((*place, "rate_less", "variable"), column.rate_less.variable, as_rate=True)
    if rates is not None:
        for below, kind in rates.kinds():
            yield from _of_index(("rates", *below, "index"), kind.index, as_rate=True)
    for below, schedule in exposure.schedules():
        if schedule.utilisation is not None:
            yield VariableUse(("loss", "exposure", *below, "utilisation"), schedule.utilisation)
    if collateral is not None:
        yield from _of_index(("loss", "lgd", "collateral", "index"), collateral.index)


def _by(place: Place, index: Index | None, *, history: bool) -> Iterator[ColumnUse]:
    if isinstance(index, IndexByColumn):
        yield ColumnUse((*place, "by"), index.by, "category", history)


def moving_columns(name: str, column: MovingColumn) -> Iterator[ColumnUse]:
    """Loan columns that one moving column reads."""
    place = ("moving", name)
    if isinstance(column, BalanceOverValue):
        value = column.balance_over_value
        yield ColumnUse((*place, "balance_over_value", "value"), value.value, "number", True)
        yield from _by((*place, "balance_over_value", "index"), value.index, history=True)
    elif isinstance(column, BalanceOverLimit):
        limit = column.balance_over_limit.limit
        yield ColumnUse((*place, "balance_over_limit", "limit"), limit, "number", True)
    elif isinstance(column, PaymentOver):
        over = column.payment_over
        yield ColumnUse((*place, "payment_over", "income"), over.income, "number", True)
        yield from _by((*place, "payment_over", "index"), over.index, history=True)
    elif isinstance(column, PeriodsSince):
        yield ColumnUse((*place, "periods_since", "date"), column.periods_since.date, "date", True)


def column_uses(
    moving: Mapping[str, MovingColumn],
    rates: Rates | None,
    exposure: Exposure,
    collateral: Collateral | None,
    amount: str | None,
) -> Iterator[ColumnUse]:
    """Every loan column beyond the roles that these sections read; ``amount``: the column of that role."""
    for name, column in moving.items():
        yield from moving_columns(name, column)
    paying = any(isinstance(column, PaymentOver) for column in moving.values())
    if rates is not None:
        if rates.by is not None:
            yield ColumnUse(("rates", "by"), rates.by, "category")
        for below, kind in rates.kinds():
            yield from _by(("rates", *below, "index"), kind.index, history=False)
            for key in ("margin", "floor", "cap"):
                if isinstance(column := getattr(kind, key), str):
                    yield ColumnUse(("rates", *below, key), column, "number")
    if exposure.by is not None:
        yield ColumnUse(("loss", "exposure", "by"), exposure.by, "category", paying)
    for below, schedule in exposure.schedules():
        for key in ("interest_only", "balloon", "limit", "ccf"):
            if isinstance(column := getattr(schedule, key), str):
                history = paying and key in ("interest_only", "balloon")
                yield ColumnUse(("loss", "exposure", *below, key), column, "number", history)
        if isinstance(schedule.balloon, float) and schedule.balloon > 0 and amount is not None:
            yield ColumnUse(("loss", "exposure", *below, "balloon"), amount, "number", paying)
    if collateral is not None:
        yield ColumnUse(("loss", "lgd", "collateral", "value"), collateral.value, "number")
        yield from _by(("loss", "lgd", "collateral", "index"), collateral.index, history=False)


__all__ = [
    "RATE_UNITS", "ColumnUse", "VariableUse", "column_uses", "index_variables", "moving_columns", "variable_uses",
]  # fmt: skip
