"""Exposure at default: how balances run off, what is drawn before default; and collateral."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import Field, model_validator

from stresskit.spec.base import ErrorAt, Name, Strict
from stresskit.spec.moving import Index, Valued

ScheduleName = Literal["annuity", "linear", "bullet", "revolving", "supplied"]
Fraction = Annotated[float, Field(ge=0, le=1)]
#: Keys that belong to some schedules only.
_BELONGS = {
    "interest_only": ("annuity", "linear"),
    "balloon": ("annuity", "linear"),
    "limit": ("revolving",),
    "ccf": ("revolving",),
    "utilisation": ("revolving",),
    "file": ("supplied",),
}


class Schedule(Strict):
    """How a balance runs off, and what is owed at default beyond it."""

    schedule: ScheduleName = Field(
        default="annuity",
        description="annuity: level payments; linear: level repayments of principal; bullet: all at maturity; "
        "revolving: drawn within a limit; supplied: balances from a file",
    )
    accrued: Annotated[float, Field(ge=0, le=12)] = Field(
        default=0.0, description="periods of interest owed on top of the balance at default"
    )
    interest_only: Name | Annotated[int, Field(ge=0, le=1200)] = Field(
        default=0,
        description="annuity, linear: loan column or number of periods after origination in which only interest is paid",
    )
    balloon: Name | Fraction = Field(
        default=0.0,
        description="annuity, linear: loan column with the amount that stays due at maturity, or a fraction of loans.columns.amount",
    )
    limit: Name | None = Field(default=None, description="revolving: loan column with the limit")
    ccf: Name | Fraction = Field(
        default=0.0,
        description="revolving: loan column or number, the part of the undrawn limit that is drawn before default (credit conversion factor)",
    )
    utilisation: Name | None = Field(
        default=None,
        description="revolving: macro variable that the drawn balance follows in proportion, up to the limit; default: the balance stays",
    )
    file: Name | None = Field(
        default=None,
        description="supplied: .csv or .parquet file with columns loan, period, balance (at the end of the period), relative to the study file",
    )

    @model_validator(mode="after")
    def _fits(self) -> Schedule:
        for key, schedules in _BELONGS.items():
            stated = getattr(self, key) != type(self).model_fields[key].default
            if stated and self.schedule not in schedules:
                raise ErrorAt(
                    f"{key} belongs to schedule: {' or '.join(schedules)}, not {self.schedule}", key
                )
        if self.schedule == "revolving" and self.limit is None:
            raise ErrorAt("schedule: revolving needs limit, a loan column", "schedule")
        if self.schedule == "supplied" and self.file is None:
            raise ErrorAt("schedule: supplied needs file, with columns loan, period, balance", "schedule")
        return self

    @property
    def plain(self) -> bool:
        """Whether balance, rate and remaining term alone say how the balance runs off."""
        return (
            self.schedule in ("annuity", "linear", "bullet") and not self.interest_only and not self.balloon
        )


class Exposure(Schedule):
    """Exposure at default: balance at the start of the default period by schedule, plus accrued interest."""

    by: Name | None = Field(
        default=None,
        description="loan column that says which schedule a loan has; then only values stands beside it",
    )
    values: dict[str, Schedule] = Field(
        default_factory=dict, description="value of the column -> its schedule"
    )

    @model_validator(mode="after")
    def _one_way(self) -> Exposure:
        if (self.by is None) != (not self.values):
            raise ErrorAt("by and values go together: a loan column, and the schedule of each of its values")
        fields = type(self).model_fields
        beside = [k for k in fields if k not in ("by", "values") and getattr(self, k) != fields[k].default]
        if self.by is not None and beside:
            raise ErrorAt(f"with by, {beside[0]} is stated under values, for each value", beside[0])
        return self

    @property
    def plain(self) -> bool:
        return self.by is None and super().plain

    def schedules(self) -> Iterator[tuple[tuple[str, ...], Schedule]]:
        """(place below loss.exposure, schedule) of every schedule in use."""
        if self.by is None:
            yield (), self
        for value, schedule in self.values.items():
            yield ("values", value), schedule


class Collateral(Strict):
    """What the sale of the collateral leaves uncovered, along the path."""

    value: Name = Field(description="loan column with the collateral's value")
    index: Index | None = Field(
        default=None,
        description="macro variable that moves the value, or one per value of a loan column; default: the value stays",
    )
    valued: Valued = Field(
        "origination", description="when the value was taken: in the period of origination, or at as_of"
    )
    haircut: Fraction = Field(description="part of the value that a forced sale loses")
    cost: Fraction = Field(default=0.0, description="part of the proceeds that the sale costs")
    floor: Fraction = Field(default=0.0, description="smallest loss given default")


class CollateralLgd(Strict):
    """LGD as collateral shortfall: max(floor, 1 - value x (1 - haircut) x (1 - cost) / exposure) in each period."""

    collateral: Collateral = Field(description="the collateral")
