"""Balance, rate and term of every row at risk at the start of its period, for moving columns."""

from __future__ import annotations

import duckdb
import numpy as np
from numpy.typing import NDArray

from stresskit.core.contract_rows import ContractRows
from stresskit.core.values import RiskSet
from stresskit.kernels.schedule import balance_after
from stresskit.panel.fetch import fetch, numbers
from stresskit.panel.plan import Plan
from stresskit.spec.moving import Rates

Floats = NDArray[np.float64]


def fetch_contract_rows(
    connection: duckdb.DuckDBPyConnection, plan: Plan, risk_set: RiskSet, *, rates: Rates | None
) -> ContractRows:
    """The contract rows of ``risk_set``, which was fetched from the same tables.

    rates  which loans float; the first row of one with a fixed rate has the rate that it shows itself
    Layout panel: the row before. Layout spells: the amount at origination run off by the schedule at a fixed rate.
    """
    length = risk_set.stay_exit - risk_set.stay_entry
    fixed = _fixed(rates, risk_set, length)
    if plan.layout == "panel":
        rows = fetch(
            connection,
            "SELECT bal_before, rate_before, bal, rate, mat, amount, money FROM verdict WHERE reason IS NULL ORDER BY k, t",
        )
        found = {name: numbers(column) for name, column in rows.items()}
        age = _ages(risk_set, length)
        rate = np.where(np.isnan(found["rate_before"]) & fixed, found["rate"], found["rate_before"])
        first = np.isnan(found["bal_before"]) & (age == 1)
        balance = np.where(first, found["amount"], found["bal_before"])
        return ContractRows(
            balance, _rate(rate, plan), found["mat"], np.nan_to_num(found["money"]), per_loan=False
        )
    stays = fetch(
        connection,
        "SELECT v.amount, v.rate, v.mat, v.money FROM stays AS s JOIN (SELECT * FROM verdict WHERE reason IS NULL) AS v "
        "USING (k) ORDER BY s.k, s.entry",
    )
    of_row = np.repeat(np.arange(length.size), length)
    found = {name: numbers(column)[of_row] for name, column in stays.items()}
    rate = _rate(found["rate"], plan)
    return ContractRows(
        np.where(fixed, _rolled(found["amount"], rate, found["mat"], risk_set, length, plan), np.nan),
        np.where(fixed, rate, np.nan),
        found["mat"],
        np.nan_to_num(found["money"]),
        per_loan=True,
    )


def _fixed(rates: Rates | None, risk_set: RiskSet, length: NDArray[np.int64]) -> NDArray[np.bool_]:
    """(R,) whether a row is of a loan whose rate is fixed."""
    if rates is None or rates.by is None:
        return np.full(int(length.sum()), rates is None)
    wanted = [value for value, kind in rates.values.items() if kind == "fixed"]
    if rates.by in risk_set.moving:
        return np.isin(risk_set.moving[rates.by].astype(str), wanted)
    return np.repeat(np.isin(risk_set.static[rates.by].astype(str), wanted)[risk_set.stay_loan], length)


def _rate(rate: Floats, plan: Plan) -> Floats:
    assumed = plan.columns.rate is None and plan.assumed_rate is not None
    return np.full(rate.shape, plan.assumed_rate) if assumed else rate


def _ages(risk_set: RiskSet, length: NDArray[np.int64]) -> NDArray[np.int64]:
    """(R,) age of each row."""
    first = np.cumsum(length) - length
    within = np.arange(int(length.sum())) - np.repeat(first, length)
    return np.asarray(np.repeat(risk_set.stay_entry, length) + within + 1)


def _rolled(
    amount: Floats, rate: Floats, maturity: Floats, risk_set: RiskSet, length: NDArray[np.int64], plan: Plan
) -> Floats:
    """Balance at the end of the period before each row: the amount stands at the end of the period of origination."""
    origination = np.repeat(risk_set.stay_origin, length) + 1
    known = np.isfinite(maturity) & np.isfinite(rate) & (rate > -plan.calendar.per_year)
    known &= np.where(known, maturity, 0) >= origination
    term = np.where(known, maturity - origination, 0).astype(np.int64)
    steps = np.maximum(_ages(risk_set, length) - 2, 0)
    per_period = np.where(known, rate, 0.0) / plan.calendar.per_year
    rolled = balance_after(amount, per_period, term, np.where(known, steps, 0), plan.schedule)
    return np.where(known, rolled, np.nan)
