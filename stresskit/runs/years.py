"""The year view: a row per scenario, segment and calendar year, with staging and capital where the study asks for them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.period import format_period, year_of
from stresskit.core.values import FeatureTable
from stresskit.loss.capital import PER_K
from stresskit.loss.constant import StandingBook
from stresskit.loss.interfaces import OnYears
from stresskit.loss.lgd import LgdSource
from stresskit.loss.staging import default_stock
from stresskit.loss.yearly import Plan, YearCells, YearSums, by_cell
from stresskit.projection.interfaces import StandingContracts
from stresskit.runs.records import WEIGHTED

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
#: What ``balance_sheet`` says in a row.
RUN_OFF, CONSTANT = "run_off", "constant"
Breakdown = tuple[str, tuple[str, ...], Ints]


@dataclass(frozen=True, slots=True)
class Opening:
    """Loans in default at as_of that are still held, by cell and calendar year of default; (cells, C) each.

    unknown   loans of those years without a known balance, by counts, left out
    """

    years: Ints
    loans: Floats
    amount: Floats
    loss: Floats
    k: Floats
    unknown: float


@dataclass(slots=True)
class YearView:
    """Collects every scenario's years; :meth:`table` is what the run keeps.

    edges     (Y,) last step of every calendar year of the projection, those past the last one shown included
    standing  the book held constant, where the study asks for it beside run-off
    """

    plan: Plan
    edges: Ints
    breakdowns: tuple[Breakdown, ...]
    opening: Opening
    stays: int
    notes: tuple[str, ...]
    standing: StandingBook | None = None
    _open: dict[str, YearSums] = field(default_factory=dict)
    cells: dict[str, YearCells] = field(default_factory=dict)
    held: dict[str, YearCells] = field(default_factory=dict)

    def sink(self, scenario: str) -> OnYears:
        """To hand to :func:`stresskit.loss.assess.assess`."""
        self._open[scenario] = YearSums(self.plan)
        return self._open[scenario].add

    def close(self, scenario: str, loans: Mapping[str, Floats]) -> None:
        """After the scenario's last block; ``loans`` are the measures of each loan."""
        self.cells[scenario] = self._open.pop(scenario).finish(loans)

    def hold(
        self,
        scenario: str,
        features: FeatureTable,
        contracts: StandingContracts | None,
        lgd: LgdSource | None,
        threads: int,
    ) -> None:
        """The scenario on a constant balance sheet; nothing where none is asked for."""
        if self.standing is not None:
            self.held[scenario] = self.standing.along(features, contracts=contracts, lgd=lgd, threads=threads)

    def stages(self) -> dict[str, NDArray[np.int8]]:
        """Scenario -> (n,) stage of each loan at as_of; empty without staging.

        A weighted mean has no stage: a loan may be in different stages in different scenarios.
        """
        if self.plan.staging is None:
            return {}
        return {s: c.stage for s, c in self.cells.items() if c.stage is not None}

    def table(self, weights: Mapping[str, float | None]) -> pd.DataFrame:
        """All scenarios, and the weighted mean of those that have a weight; none may, and others stand outside the mean.

        With a constant balance sheet, its rows follow those of run-off, told apart by ``balance_sheet``.
        """
        sheets = [(RUN_OFF, self.cells, self.plan.points)]
        if self.standing is not None:
            sheets.append((CONSTANT, self.held, self.standing.points))
        frames = []
        for sheet, cells, points in sheets:
            found = {s: dict(c.measures) for s, c in cells.items()}
            if len(found) > 1 and any(w is not None for w in weights.values()):
                found[WEIGHTED] = _weighted(cells, weights)
            for scenario, measures in found.items():
                for by, labels, index in self.breakdowns:
                    m = {name: _sum_cells(values, index, len(labels)) for name, values in measures.items()}
                    head = self._head(scenario, by, labels, points)
                    if self.standing is not None:
                        head.insert(1, "balance_sheet", sheet)
                    columns = _held_columns(m) if sheet == CONSTANT else self._columns(m, index, len(labels))
                    frames.append(
                        pd.concat([head, pd.DataFrame({n: v.ravel() for n, v in columns.items()})], axis=1)
                    )
        return pd.concat(frames, ignore_index=True)

    def _head(self, scenario: str, by: str, labels: tuple[str, ...], points: Ints) -> pd.DataFrame:
        """What says which segment and point a row is of: segment by segment, point by point."""
        portfolio, size = self.plan.portfolio, len(labels)
        return pd.DataFrame(
            {
                "scenario": scenario,
                "by": by,
                "segment": np.repeat(np.array(labels, dtype=object), points.size),
                "year": np.tile(
                    [year_of(portfolio.as_of + int(h), portfolio.frequency) for h in points], size
                ),
                "until": [format_period(portfolio.as_of + int(h), portfolio.frequency) for h in points]
                * size,
                "periods": np.tile(np.diff(points, prepend=0), size),
            }
        )

    def _columns(self, m: Mapping[str, Floats], index: Ints, size: int) -> dict[str, Floats]:
        """Figures of the run-off."""
        return {
            **_flow_columns(m),
            **(self._stage_columns(m, index, size) if self.plan.staging is not None else {}),
            **(self._capital_columns(m, index, size) if self.plan.capital is not None else {}),
        }

    def _years(self) -> Ints:
        portfolio = self.plan.portfolio
        return np.array([year_of(portfolio.as_of + int(h), portfolio.frequency) for h in self.plan.points])

    def _stage_columns(self, m: Mapping[str, Floats], index: Ints, size: int) -> dict[str, Floats]:
        opening = self.opening
        stock = {
            name: default_stock(
                m[flow], _sum_cells(first, index, size), opening.years, self._years(), self.stays
            )
            for name, flow, first in (
                ("loans", "default", opening.loans),
                ("balance", "default_amount", opening.amount),
                ("impairment", "loss", opening.loss),
            )
        }
        out = {n: m[n] for n in ("loans_stage_1", "loans_stage_2")} | {"loans_stage_3": stock["loans"].held}
        out |= {n: m[n] for n in ("balance_stage_1", "balance_stage_2")}
        out |= {"balance_stage_3": stock["balance"].held}
        out |= {n: m[n] for n in ("impairment_stage_1", "impairment_stage_2")}
        out |= {"impairment_stage_3": stock["impairment"].held}
        whole = out["impairment_stage_1"] + out["impairment_stage_2"] + out["impairment_stage_3"]
        written_off = stock["impairment"].left
        charge = np.diff(whole, axis=1, prepend=whole[:, :1]) + written_off
        charge[:, 0] = np.nan
        return out | {
            "impairment": whole,
            "outflow_stage_3": _after(stock["balance"].left),
            "written_off": _after(written_off),
            "impairment_charge": charge,
        }

    def _capital_columns(self, m: Mapping[str, Floats], index: Ints, size: int) -> dict[str, Floats]:
        opening, years = self.opening, self._years()
        held = default_stock(
            m["defaulted_k"], _sum_cells(opening.k, index, size), opening.years, years, self.stays
        ).held
        loss = default_stock(
            m["loss"], _sum_cells(opening.loss, index, size), opening.years, years, self.stays
        ).held
        defaulted = PER_K * held
        expected = m["regulatory_el_performing"] + loss
        out = {
            "pd_regulatory": _ratio(m["regulatory_pd_x_balance"], m["balance"]),
            "lgd_regulatory": _ratio(m["regulatory_lgd_x_balance"], m["balance"]),
            "rwa_performing": m["rwa_performing"],
            "rwa_defaulted": defaulted,
            "rwa": m["rwa_performing"] + defaulted,
            "el_regulatory": expected,
        }
        if self.plan.staging is not None:
            provisions = m["impairment_stage_1"] + m["impairment_stage_2"] + loss
            out["el_less_provisions"] = expected - provisions
        return out


def _flow_columns(m: Mapping[str, Floats]) -> dict[str, Floats]:
    """What every year view has; flows and shares of flows are missing at as_of."""
    start, start_balance = (np.roll(m[n], 1, axis=1) for n in ("on_book", "balance"))
    return {
        "loans_start": _after(start),
        "loans_end": m["on_book"],
        "pd": _after(_ratio(m["default"], start)),
        "lgd": _after(_ratio(m["loss"], m["default_amount"])),
        "default_loans": _after(m["default"]),
        "default_share": _after(
            _ratio(m["default"], np.broadcast_to(m["on_book"][:, :1], m["default"].shape))
        ),
        "default_amount": _after(m["default_amount"]),
        "payoff_loans": _after(m["payoff"]),
        "matured_loans": _after(m["matured"]),
        "balance_start": _after(start_balance),
        "balance_end": m["balance"],
        "el": _after(m["el"]),
        "loss": _after(m["loss"]),
    }


def _held_columns(m: Mapping[str, Floats]) -> dict[str, Floats]:
    """Figures of a constant balance sheet. Defaults over loans are a rate of flow there, not the PD of anybody."""
    return {name: np.full_like(v, np.nan) if name == "pd" else v for name, v in _flow_columns(m).items()}


def _weighted(cells: Mapping[str, YearCells], weights: Mapping[str, float | None]) -> dict[str, Floats]:
    """The probability-weighted mean of the scenarios' amounts."""
    one = next(iter(cells.values())).measures
    return {
        m: sum((float(weights[s] or 0.0) * c.measures[m] for s, c in cells.items()), np.zeros(v.shape))
        for m, v in one.items()
    }


def _after(values: Floats) -> Floats:
    """A flow: nothing flows at as_of."""
    out = values.copy()
    out[:, 0] = np.nan
    return out


def _ratio(top: Floats, bottom: Floats) -> Floats:
    out: Floats = np.divide(top, bottom, out=np.full(top.shape, np.nan), where=bottom > 0)
    return out


def _sum_cells(values: Floats, index: Ints, size: int) -> Floats:
    return by_cell(index, values, size) if values.shape[1] else np.zeros((size, 0))
