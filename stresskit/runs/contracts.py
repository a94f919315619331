"""Contracts between the files and the calculation: moving columns put on the history, schedules read, the book settled."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.contract.balances import Frames
from stresskit.contract.book import book_reasons, without
from stresskit.contract.collateral import CollateralShortfall, collateral_shortfall
from stresskit.contract.history import LeftOut, check_history, moving_rows
from stresskit.contract.paths import ContractPaths, contract_paths, needs_contracts
from stresskit.core.errors import DataError, Problem
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import MacroHistory, Portfolio, ScenarioPath
from stresskit.panel.result import Finding, LoanData
from stresskit.spec.study import Study


def path_variables(study: Study) -> dict[str, str]:
    """Macro variables that a scenario must state for the contracts -> the place in the study that reads them."""
    found: dict[str, str] = {}
    for use in study.contract_variables():
        found.setdefault(use.variable, ".".join(use.place))
    return found


def schedule_files(study: Study) -> tuple[str, ...]:
    """Files with supplied balances that the study names."""
    return tuple(dict.fromkeys(s.file for _, s in study.loss.exposure.schedules() if s.file is not None))


def read_schedules(study: Study, base: Path) -> Frames:
    """File name -> rows of every supplied schedule. Raises DataError for a file that cannot be read."""
    out = {}
    for name in schedule_files(study):
        place = base / name
        if not place.is_file():
            raise DataError(f"loss.exposure: there is no file {name!r} beside the study")
        try:
            frame = (
                pd.read_parquet(place)
                if place.suffix.lower() == ".parquet"
                else pd.read_csv(place, dtype=str)
            )
        except (ValueError, OSError) as error:
            raise DataError(f"loss.exposure: {name} cannot be read: {error}") from None
        out[name] = frame
    return out


def with_moving(study: Study, data: LoanData, history: MacroHistory | None) -> LoanData:
    """The loans with the study's moving columns on every row at risk; as they are when no hazard reads one.

    Rows without a value leave the risk set and stand in the reconciliation under ``moving_unknown``. Raises
    TextError where the layout cannot give a column, DataError when no row is left.
    """
    if data.contracts is None:
        return data
    risk_set, left_out = moving_rows(study, data.risk_set, data.contracts, history=history)
    if risk_set.n_rows == 0:
        problems = [
            Problem(REASON_CODE, line.reason, line.rows, _first(line, Frequency(study.frequency)))
            for line in left_out
        ]
        raise DataError("no row is left for which the moving columns are known", problems)
    return replace(
        data,
        risk_set=risk_set,
        reconciliation=_reconciled(data.reconciliation, left_out),
        findings=(*data.findings, *(_finding(line, Frequency(study.frequency)) for line in left_out)),
        contracts=None,
    )


REASON_CODE = "moving_unknown"
_COUNTS = ("rows", "loans", "events_default", "events_payoff", "balance")


def _reconciled(table: pd.DataFrame, left_out: tuple[LeftOut, ...]) -> pd.DataFrame:
    """The account with these rows moved from used to left out."""
    lines = pd.DataFrame(
        [
            {"what": "left out", "reason": line.reason} | {name: getattr(line, name) for name in _COUNTS}
            for line in left_out
            if any(getattr(line, name) for name in _COUNTS[:4])
        ]
    )
    if lines.empty:
        return table
    used = table[table["what"] == "used"].copy()
    for name in _COUNTS:
        used[name] = used[name] - lines[name].sum()
    return pd.concat([table[table["what"] != "used"], lines, used], ignore_index=True)[list(table.columns)]


def _first(line: LeftOut, frequency: Frequency) -> tuple[str, ...]:
    return tuple(f"{loan} @ {format_period(period, frequency)}" for loan, period in line.first)


def _finding(line: LeftOut, frequency: Frequency) -> Finding:
    name, why = line.reason.removeprefix(f"{REASON_CODE}: ").split(", ", 1)
    events = f", with {line.events_default:,} defaults" if line.events_default else ""
    return Finding(
        REASON_CODE, "leave_out", "note" if why.startswith("no balance") else "warning", line.rows,
        _first(line, frequency), f"rows left out because the moving column {name!r} is not known ({why}): {line.rows:,}{events}",
    )  # fmt: skip


def settle_contracts(
    study: Study,
    data: LoanData,
    history: MacroHistory | None,
    path: ScenarioPath | None,
    *,
    horizon: int,
    frames: Frames,
) -> LoanData:
    """The loans without those of the book whose contract terms are not known, which are reported as not projected."""
    if not needs_contracts(study) and study.collateral is None:
        return data
    book = data.portfolio
    reasons = book_reasons(
        book,
        _contracts(study, book, history, path, horizon=1, frames={}),
        _collateral(study, book, history, path, horizon=1),
    )
    bad = reasons != ""
    if bad.any():
        rest = pd.DataFrame(
            {"loan": book.loan_ids[bad], "reason": reasons[bad], "balance": book.balance[bad]}
        )
        if book.count is not None:
            rest["count"] = book.count[bad]
        data = replace(
            data,
            portfolio=without(book, np.asarray(bad, dtype=bool)),
            not_projected=pd.concat([data.not_projected, rest], ignore_index=True)
            if len(data.not_projected)
            else rest,
        )
    # what does not do along a path is said now, not after the fit
    _contracts(study, data.portfolio, history, path, horizon=horizon, frames=frames)
    return data


def along(
    study: Study,
    portfolio: Portfolio,
    history: MacroHistory | None,
    path: ScenarioPath,
    *,
    horizon: int,
    frames: Frames,
) -> tuple[ContractPaths | None, CollateralShortfall | None]:
    """What contracts and collateral make of one path."""
    return (
        _contracts(study, portfolio, history, path, horizon=horizon, frames=frames),
        _collateral(study, portfolio, history, path, horizon=horizon),
    )


def moving_now(
    study: Study, portfolio: Portfolio, history: MacroHistory | None, path: ScenarioPath
) -> Mapping[str, NDArray[np.float64]]:
    """Moving column in use -> (n,) its value at as_of, which no path has a part in; the first one is as good as another."""
    if not study.moving_in_use or not portfolio.n_loans:
        return {}
    contracts = _contracts(study, portfolio, history, path, horizon=1, frames={})
    if contracts is None:
        return {}
    found = contracts.tile(np.arange(portfolio.n_loans), 1).columns()
    return {name: values[:, 0] for name, values in found.items()}


def _contracts(
    study: Study,
    portfolio: Portfolio,
    history: MacroHistory | None,
    path: ScenarioPath | None,
    *,
    horizon: int,
    frames: Mapping[str, pd.DataFrame],
) -> ContractPaths | None:
    at = _with_values(path)
    return contract_paths(study, portfolio, history=history, path=at, horizon=horizon, frames=frames)


def _collateral(
    study: Study,
    portfolio: Portfolio,
    history: MacroHistory | None,
    path: ScenarioPath | None,
    *,
    horizon: int,
) -> CollateralShortfall | None:
    if study.collateral is None:
        return None
    return collateral_shortfall(
        study.collateral, portfolio, history=history, path=_with_values(path), horizon=horizon
    )


def _with_values(path: ScenarioPath | None) -> ScenarioPath | None:
    """The path, None for a study without macro variables."""
    return path if path is not None and path.values else None


__all__ = [
    "along",
    "check_history",
    "moving_now",
    "path_variables",
    "read_schedules",
    "schedule_files",
    "settle_contracts",
    "with_moving",
]
