"""Books, contracts and moving hazards made by hand, and losses added up from the plain route in numpy."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.kernels.schedule import balance_path
from stresskit.loss.money import BlockMoney, Money
from stresskit.projection.project import project
from stresskit.spec.study import Loss
from tests.oracle.worlds import AS_OF

TWO = "two causes, two links, interactions"
THREE = "three causes, spline, offset"
ONE = "one cause, logit, straight age"
LGD = {"fixed": 0.2, "floating": 0.45, "stepped": 1.0}


def book(n: int, *, seed: int = 4, term: int = 50, age: int = 60) -> Portfolio:
    rng = np.random.default_rng(seed)
    return Portfolio(
        Frequency.MONTH, AS_OF[Frequency.MONTH], np.array([f"P{i:06d}" for i in range(n)], dtype=object),
        rng.integers(0, age, n), rng.integers(1, term + 1, n), rng.uniform(0, 1e5, n),
        rng.choice([0.0, 0.03, 0.05, -0.004], n),
        {
            "x": rng.normal(size=n), "w": rng.uniform(0.5, 2, n), "push": rng.normal(0, 0.3, n),
            "product": rng.choice(np.array(sorted(LGD), dtype=object), n),
        },
    )  # fmt: skip


def losses(**more: Any) -> Loss:
    return Loss.model_validate(
        {"lgd": {"by": "product", "values": LGD}, "exposure": {"accrued": 1.5}, "discount": "rate"} | more
    )


class Moving:
    """A hazard with ``slope`` times the moving column "ltv" on top."""

    moving_columns = ("ltv",)

    def __init__(self, fit: HazardFit, slope: float) -> None:
        self._fit, self._slope = fit, slope

    def __getattr__(self, name: str) -> Any:
        return getattr(self._fit, name)

    def moving_part(self, values: Mapping[str, np.ndarray]) -> np.ndarray:
        return self._slope * values["ltv"]


@dataclass(frozen=True)
class Contracts:
    """The study's schedule as contracts, with an LTV that depends on loan and step, and exposures ``more`` times as large."""

    portfolio: Portfolio
    schedule: str
    accrued: float
    more: float = 1.0
    names: tuple[str, ...] = ("ltv",)

    @property
    def afterwards(self) -> np.ndarray:
        return np.zeros(500, dtype=bool)

    def tile(self, loans: np.ndarray, steps: int) -> ContractTile:
        return ContractTile(self, loans, steps)


@dataclass(frozen=True)
class ContractTile:
    paths: Contracts
    loans: np.ndarray
    steps: int

    def _rate(self) -> np.ndarray:
        return self.paths.portfolio.rate[self.loans] / 12

    def balances(self) -> np.ndarray:
        p = self.paths.portfolio
        return balance_path(
            p.balance[self.loans], self._rate(), p.remaining[self.loans], self.steps, self.paths.schedule
        )

    def rates(self) -> np.ndarray:
        return np.repeat(self.paths.portfolio.rate[self.loans][:, None], self.steps, axis=1)

    def exposures(self) -> np.ndarray:
        up = 1 + self.paths.accrued * np.maximum(self._rate(), 0)
        return self.paths.more * self.balances()[:, :-1] * up[:, None]

    def columns(self) -> dict[str, np.ndarray]:
        steps = np.arange(self.steps)[None, :]
        return {"ltv": 0.8 + 0.1 * np.sin(self.loans[:, None] + 0.2 * steps) - 0.002 * steps}


@dataclass(frozen=True)
class StepLgd:
    """LGD that differs by loan, step and exposure."""

    def tile(self, loans: np.ndarray, steps: int, exposure: np.ndarray) -> np.ndarray:
        out = 0.2 + 0.3 * np.cos(loans[:, None] + np.arange(steps)[None, :]) ** 2
        return out * np.where(exposure > 3e4, 1.5, 1.0)


@dataclass(frozen=True)
class SlowLgd:
    """The values of a static source, given out step by step."""

    values: np.ndarray

    def tile(self, loans: np.ndarray, steps: int, exposure: np.ndarray) -> np.ndarray:
        return np.repeat(self.values[loans][:, None], steps, axis=1)


def by_tiles(
    portfolio: Portfolio,
    fits: Mapping[str, Any],
    path: FeatureTable,
    money: Money,
    *,
    cap: int | None,
    contracts: Any = None,
) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray], BlockMoney]:
    """(flows and survival, loan amounts, money) of the whole book, all (n, H), by the plain route."""
    p = project(portfolio, fits, path, cap=cap, contracts=contracts)
    steps, everyone = p.survival.shape[1], np.arange(portfolio.n_loans)
    m = money.block(everyone, steps, None if contracts is None else contracts.tile(everyone, steps))
    q = p.flows["default"]
    over = np.arange(1, steps + 1)[None, :] >= portfolio.remaining[:, None]
    before = np.concatenate([np.ones((portfolio.n_loans, 1)), p.survival[:, :-1]], axis=1)
    zero = np.zeros_like(q)
    flows = {
        "on_book": p.survival * ~over, "matured": p.survival * over, "default": q, "payoff": p.flows.get("payoff", zero),
        "balance": before * m.balance[:, :-1], "default_amount": q * m.exposure, "exposed": q * m.exposure * m.discount,
        "el": q * m.exposure * m.discount * m.lgd,
    }  # fmt: skip
    loans = {
        "pd_12m": q[:, :12].sum(axis=1), "pd_lifetime": q.sum(axis=1), "pd_no_payoff": p.pd_no_payoff(),
        "payoff_lifetime": flows["payoff"].sum(axis=1), "el_12m": flows["el"][:, :12].sum(axis=1),
        "el_lifetime": flows["el"].sum(axis=1), "exposed_lifetime": flows["exposed"].sum(axis=1),
    }  # fmt: skip
    return flows, loans, m
