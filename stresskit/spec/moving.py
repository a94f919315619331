"""Loan columns that move along a path, and the rates that floating loans pay: the sections ``moving`` and ``rates``."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import Discriminator, Field, Tag, model_validator

from stresskit.spec.base import ErrorAt, Finite, Name, Strict


class IndexByColumn(Strict):
    """A macro variable that depends on a loan column, such as a house price index per region."""

    by: Name = Field(description="loan column")
    of: dict[str, Name] = Field(
        min_length=1, description="value of the column -> a variable under macro.variables"
    )


Index = Name | IndexByColumn
Valued = Literal["origination", "as_of"]


def index_variables(index: Index | None) -> tuple[str, ...]:
    """Macro variables that an index reads."""
    if index is None:
        return ()
    return (index,) if isinstance(index, str) else tuple(dict.fromkeys(index.of.values()))


class OverValue(Strict):
    """Balance at the start of the period over the collateral's value, carried along by an index."""

    value: Name = Field(description="loan column with the collateral's value")
    index: Index | None = Field(
        None,
        description="macro variable that moves the value, or one per value of a loan column; default: the value stays",
    )
    valued: Valued = Field(
        "origination",
        description="when the value was taken: in the period of origination, or at as_of (a column under loans.varying: at the end of its row's period)",
    )


class OverLimit(Strict):
    """Balance at the start of the period over a limit."""

    limit: Name = Field(description="loan column with the limit")


class NoArguments(Strict):
    """Nothing to say: {}."""


class Less(Strict):
    """The loan's rate less a macro variable, both at the end of the period before."""

    variable: Name = Field(description="macro variable in percent or fractions, taken off the loan's rate")


class OverIncome(Strict):
    """The payment due in the period by the schedule, at the rate of the period before, over income."""

    income: Name = Field(description="loan column with the income")
    per: Literal["year", "month"] = Field("year", description="what the income is for")
    index: Index | None = Field(None, description="macro variable that moves the income; default: it stays")
    valued: Valued = Field(
        "origination", description="when the income was taken, as for a collateral's value"
    )


class Since(Strict):
    """Periods from an event to the start of the period."""

    date: Name = Field(description="loan column with the event's period or date")
    never: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = Field(
        None,
        description="value for a loan without the event, or before it; default: such rows and loans are left out",
    )
    cap: Annotated[float, Field(ge=0, allow_inf_nan=False)] | None = Field(
        None, description="largest value that is told apart; default: none"
    )


class BalanceOverValue(Strict):
    """Moving column: current loan-to-value."""

    balance_over_value: OverValue = Field(description="balance over an indexed value")


class BalanceOverLimit(Strict):
    """Moving column: utilisation."""

    balance_over_limit: OverLimit = Field(description="balance over a limit")


class CurrentRate(Strict):
    """Moving column: the loan's rate in force at the end of the period before, an annual fraction."""

    rate: NoArguments = Field(description="write {}")


class RateLess(Strict):
    """Moving column: real rate, or a spread over a market rate, an annual fraction."""

    rate_less: Less = Field(description="what is taken off the rate")


class PaymentOver(Strict):
    """Moving column: payment to income."""

    payment_over: OverIncome = Field(description="what the payment is divided by")


class PeriodsSince(Strict):
    """Moving column: time since an event, in periods."""

    periods_since: Since = Field(description="the event")


_KEYS = {
    "balance_over_value": "BalanceOverValue",
    "balance_over_limit": "BalanceOverLimit",
    "rate": "CurrentRate",
    "rate_less": "RateLess",
    "payment_over": "PaymentOver",
    "periods_since": "PeriodsSince",
}


def _kind(value: object) -> str | None:
    if isinstance(value, dict):
        return next((key for key in value if key in _KEYS), None)
    return next((key for key, name in _KEYS.items() if type(value).__name__ == name), None)


MovingColumn = Annotated[
    Annotated[BalanceOverValue, Tag("balance_over_value")]
    | Annotated[BalanceOverLimit, Tag("balance_over_limit")]
    | Annotated[CurrentRate, Tag("rate")]
    | Annotated[RateLess, Tag("rate_less")]
    | Annotated[PaymentOver, Tag("payment_over")]
    | Annotated[PeriodsSince, Tag("periods_since")],
    Discriminator(
        _kind,
        custom_error_type="term",
        custom_error_message=f"a moving column is one of: {', '.join(_KEYS)}",
    ),
]


class FloatingRate(Strict):
    """A rate that follows a macro variable: variable + margin, not below floor, not above cap, set anew every few months."""

    index: Index = Field(
        description="macro variable in percent or fractions, or one per value of a loan column"
    )
    margin: Name | Finite = Field(
        0.0, description="loan column or number on top of the variable, in loans.rate_unit"
    )
    floor: Name | Finite | None = Field(
        None, description="loan column or number: smallest rate, in loans.rate_unit"
    )
    cap: Name | Finite | None = Field(
        None, description="loan column or number: largest rate, in loans.rate_unit"
    )
    reset_months: Annotated[int, Field(ge=1, le=600)] = Field(
        description="months from one reset to the next, counted from the first payment period"
    )


class Rates(Strict):
    """Which loans have a floating rate, and how it is set. Without this section every rate is fixed."""

    floating: FloatingRate | None = Field(
        None, description="every loan floats like this; instead of by and values"
    )
    by: Name | None = Field(None, description="loan column that says how a loan's rate is set")
    values: dict[str, Literal["fixed"] | FloatingRate] = Field(
        default_factory=dict, description="value of the column -> fixed, or how the rate floats"
    )

    @model_validator(mode="after")
    def _one_way(self) -> Rates:
        if (self.floating is None) == (self.by is None):
            raise ErrorAt("give floating (every loan), or by and values (by a loan column)")
        if self.by is not None and not self.values:
            raise ErrorAt("by needs values: what each value of the column means", "by")
        if self.by is None and self.values:
            raise ErrorAt("values belongs to by", "values")
        return self

    def kinds(self) -> Iterator[tuple[tuple[str, ...], FloatingRate]]:
        """(place below rates, definition) of every floating rate."""
        if self.floating is not None:
            yield ("floating",), self.floating
        for value, kind in self.values.items():
            if isinstance(kind, FloatingRate):
                yield ("values", value), kind
