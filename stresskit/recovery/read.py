"""Case and cash-flow tables to :class:`Workouts`, with the account of every case and every flow."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import fsum
from pathlib import Path

import numpy as np
import pandas as pd

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, parse_period
from stresskit.macro.table import read_csv
from stresskit.recovery.cases import Workouts
from stresskit.recovery.parse import (
    CASE_LEFT_OUT,
    CaseBook,
    Payments,
    final_recoveries,
    read_cases,
    read_flows,
)
from stresskit.recovery.rules import Found, workout_policies
from stresskit.spec.recovery import Recovery


@dataclass(frozen=True, slots=True)
class WorkoutData:
    """Workouts and how they came about.

    reconciliation  table ("cases" or "flows"), what ("in", "left out", "used"), reason, count, amount, recovered:
                    "in" = "used" + the sum of "left out"; amount is owed at default (cases), recovered and
                    amount of flows are undiscounted
    findings        code, policy, count, first, message
    capped          discounted recoveries beyond what was owed, cut off
    """

    workouts: Workouts
    reconciliation: pd.DataFrame
    findings: pd.DataFrame
    capped: float


def table_of(file: Path) -> pd.DataFrame:
    """A CSV or Parquet file as text cells, "" for missing. Raises DataError."""
    if file.suffix.lower() == ".csv":
        return read_csv(file)
    if file.suffix.lower() != ".parquet":
        raise DataError(f"{file}: expected a .csv or .parquet file")
    if not file.is_file():
        raise DataError(f"{file}: the file does not exist")
    try:
        frame = pd.read_parquet(file)
    except (OSError, ValueError) as error:
        raise DataError(f"{file}: cannot be read as Parquet: {error}") from None
    return text_cells(frame)


def text_cells(frame: pd.DataFrame) -> pd.DataFrame:
    """Every cell as text, dates as ISO, numbers so that they read back to the same bits, "" for missing."""
    columns = {}
    for name in frame.columns:
        column = frame[name]
        if pd.api.types.is_datetime64_any_dtype(column):
            text = column.dt.strftime("%Y-%m-%d").to_numpy(dtype=object)
        else:
            text = np.array([str(v) for v in column.to_numpy(dtype=object)], dtype=object)
        columns[str(name)] = np.where(column.isna().to_numpy(), "", text)
    return pd.DataFrame(columns, dtype=object)


def read_workouts(
    spec: Recovery,
    *,
    base: Path,
    frequency: Frequency,
    as_of: int,
    cases: pd.DataFrame | None = None,
    flows: pd.DataFrame | None = None,
) -> WorkoutData:
    """The workouts that ``spec`` describes.

    base          folder that file names are relative to
    as_of         last observed period of the study; flows are observed until spec.observed_until or this
    cases, flows  frames used instead of the files

    Raises DataError with every problem found, TextError for rules that do not exist.
    """
    until = as_of if spec.observed_until is None else parse_period(spec.observed_until, frequency)
    found = Found(workout_policies(spec.rules))
    case_text = table_of(base / spec.cases) if cases is None else text_cells(cases)
    book = read_cases(spec, case_text, found, frequency=frequency, until=until)
    if spec.flows is None:
        paid = final_recoveries(spec, case_text, book)
    else:
        flow_text = table_of(base / spec.flows.file) if flows is None else text_cells(flows)
        paid = read_flows(spec.flows.columns, flow_text, book)
    workouts, capped = _workouts(spec, book, paid)
    found.verdict()
    if workouts.n_cases == 0:
        raise DataError("no workout is left to estimate recovery from", found.taken())
    table = pd.concat(
        [_account("cases", book.account()), _account("flows", paid.account())], ignore_index=True
    )
    columns = ["code", "policy", "count", "first", "message"]
    rows = [
        (code, policy, count, ", ".join(first), text) for code, policy, count, first, text in found.findings
    ]
    return WorkoutData(workouts, table, pd.DataFrame(rows, columns=columns), capped)


def _account(table: str, lines: Sequence[tuple[str, int, float, float]]) -> pd.DataFrame:
    """Lines (reason, count, amount, recovered), "" for used, as in = used + left out."""
    total = [fsum(float(line[i]) for line in lines) for i in (1, 2, 3)]
    rows: list[tuple[object, ...]] = [("in", "", int(total[0]), *total[1:])]
    rows += [("used" if not line[0] else "left out", *line) for line in lines]
    frame = pd.DataFrame(rows, columns=["what", "reason", "count", "amount", "recovered"])
    frame.insert(0, "table", table)
    return frame


def _workouts(spec: Recovery, book: CaseBook, paid: Payments) -> tuple[Workouts, float]:
    """Cash flows summed by case and workout period, cut off where the amount is reached."""
    at = book.used()
    n, end = at.size, spec.end
    place = np.full(book.reason.size, -1)
    place[at] = np.arange(n)
    recovered, costs = np.zeros((n, end)), np.zeros((n, end))
    keep = (paid.reason == "") & (place[paid.case] >= 0)
    row, column = place[paid.case[keep]], paid.workout[keep] - 1
    np.add.at(recovered, (row, column), paid.recovery[keep] * paid.discount[keep])
    np.add.at(costs, (row, column), paid.cost[keep] * paid.discount[keep])
    amount = book.amount[at]
    before = np.cumsum(recovered, axis=1)
    over = before[:, -1] > amount * (1.0 + 1e-9) if end else np.zeros(n, dtype=bool)
    reason = np.full(n, "", dtype=object)
    book.found.apply("recovered_above_amount", over, book.case[at], reason)
    limited = np.minimum(before, amount[:, None])
    cut = np.diff(np.concatenate([np.zeros((n, 1)), limited], axis=1), axis=1)
    whole = before[:, -1] <= amount
    cut[whole] = recovered[whole]  # the same bits where nothing is cut off
    capped = float((before[:, -1] - limited[:, -1])[reason == ""].sum())
    out = reason != ""
    book.reason[at[out]] = "recovered_above_amount"
    paid.reason[keep & (book.reason[paid.case] != "")] = CASE_LEFT_OUT
    kept = at[~out]
    order = np.argsort(book.case[kept].astype(str), kind="stable")
    kept, rows = kept[order], np.flatnonzero(~out)[order]
    workouts = Workouts(
        frequency=book.frequency, until=book.until, end=end, case_ids=book.case[kept], default=book.default[kept], entered=book.entered[kept],
        amount=book.amount[kept], closed=book.closed[kept], kind=book.kind[kept], recovered=cut[rows],
        costs=costs[rows], static={name: column[kept] for name, column in book.static.items()},
    )  # fmt: skip
    return workouts, capped
