"""Paths and routes put together from two: variables of one path in another, channels of one route in another."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.analyses.reads import CHANNELS, DEFAULT, DISCOUNT, EXPOSURE, LGD, PAYOFF
from stresskit.core.values import ScenarioPath
from stresskit.loss.book import Route
from stresskit.projection.interfaces import ContractPaths, ContractTile

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def with_variables(
    base: ScenarioPath, other: ScenarioPath, names: Collection[str], name: str
) -> ScenarioPath:
    """``base`` with these variables as ``other`` has them: whole paths, with how each value came about.

    Raises ValueError for paths of different spans.
    """
    if (base.start, base.horizon, base.frequency) != (other.start, other.horizon, other.frequency):
        raise ValueError(f"paths {base.name!r} and {other.name!r} do not cover the same periods")

    def taken(mine: Mapping[str, object], theirs: Mapping[str, object]) -> dict[str, object]:
        return {v: theirs[v] if v in names and v in theirs else x for v, x in mine.items()}

    return ScenarioPath(
        name=name,
        weight=None,
        frequency=base.frequency,
        start=base.start,
        values=taken(base.values, other.values),  # type: ignore[arg-type]
        flags=taken(base.flags, other.flags),  # type: ignore[arg-type]
        stated=taken(base.stated, other.stated),  # type: ignore[arg-type]
    )


@dataclass(frozen=True, slots=True, eq=False)
class _MixedTile:
    """Balances and exposures of one tile, rates of another."""

    money: ContractTile
    price: ContractTile

    def balances(self) -> Floats:
        return self.money.balances()

    def exposures(self) -> Floats:
        return self.money.exposures()

    def columns(self) -> Mapping[str, Floats]:
        return self.money.columns()

    def rates(self) -> Floats:
        return self.price.rates()


@dataclass(frozen=True, slots=True, eq=False)
class MixedContracts:
    """Contracts along one path, discounted at the rates of another."""

    money: ContractPaths
    price: ContractPaths

    @property
    def names(self) -> tuple[str, ...]:
        return self.money.names

    @property
    def afterwards(self) -> NDArray[np.bool_]:
        return self.money.afterwards

    def tile(self, loans: Ints, steps: int) -> _MixedTile:
        return _MixedTile(self.money.tile(loans, steps), self.price.tile(loans, steps))


def with_channels(base: Route, other: Route, channels: Collection[str]) -> Route:
    """``base`` with these channels as ``other`` has them.

    A hazard takes features and moving columns along with it; exposure takes balances and exposures at default,
    discounting the rates in force, LGD its source (collateral values, recoveries after the default).
    """
    if set(channels) >= set(CHANNELS):
        return other
    contracts = other.contracts if EXPOSURE in channels else base.contracts
    price = other.contracts if DISCOUNT in channels else base.contracts
    if contracts is not None and price is not None and price is not contracts:
        contracts = MixedContracts(contracts, price)
    sides = {cause: other.side(cause) for cause in (DEFAULT, PAYOFF) if cause in channels}
    if contracts is not base.contracts:
        sides = {cause: base.side(cause) for cause in (DEFAULT, PAYOFF)} | sides
    return Route(base.features, contracts, None, other.lgd if LGD in channels else base.lgd, own=sides)
