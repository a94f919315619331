"""Moving columns on the loan history: the definitions of a study, at the start of every row at risk.

Rows for which a column cannot be known are not at risk any more: they are counted under a reason of their own and
the stay is cut there, as a gap would cut it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.contract.balances import balloon_of, interest_only_left
from stresskit.contract.definitions import evaluate, needs_balance, needs_rate
from stresskit.contract.index import IndexLevels, MacroLevels, moving_indices
from stresskit.contract.terms import codes_of, per_loan
from stresskit.core.contract_rows import ContractRows
from stresskit.core.errors import TextError
from stresskit.core.period import parse_period
from stresskit.core.values import MacroHistory, RiskSet
from stresskit.kernels.runoff import payment_due
from stresskit.spec.contract import moving_columns
from stresskit.spec.moving import Index, Valued
from stresskit.spec.study import Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

REASON = "moving_unknown"


@dataclass(frozen=True, slots=True)
class LeftOut:
    """Rows left out for one reason, and what the reconciliation counts of them."""

    reason: str
    rows: int
    loans: int
    events_default: int
    events_payoff: int
    balance: float
    first: tuple[tuple[str, int], ...]


@dataclass(frozen=True, slots=True, eq=False)
class RowStart:
    """The starts of the rows of a risk set, as definitions read them."""

    study: Study
    risk_set: RiskSet
    contracts: ContractRows
    indices: Mapping[str, IndexLevels]
    loan: Ints
    age: Ints
    period: Ints
    as_of: int

    @property
    def per_year(self) -> int:
        return self.risk_set.frequency.per_year

    def balance(self) -> Floats:
        return self.contracts.balance

    def rate(self) -> Floats:
        return self.contracts.rate

    def column(self, name: str) -> NDArray[Any]:
        """(R,) a loan column, as known at the start of each row."""
        moving = self.risk_set.moving.get(name)
        return self.risk_set.static[name][self.loan] if moving is None else moving

    def number(self, name: str) -> Floats:
        return np.asarray(self.column(name), dtype=np.float64)

    def clock(self) -> Floats:
        return (self.period - 1).astype(np.float64)

    def level(self, moving: str) -> Floats:
        return self.indices[moving].at(slice(None), self.period - 1)

    def indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        value = self.number(amount)
        if index is None or amount in self.risk_set.moving:
            return value
        levels, before = self.indices[moving], self.period - 1
        if valued == "as_of":
            taken = np.full(before.shape, self.as_of)
        else:
            taken = self.period - self.age + 1
            before = np.maximum(before, taken)
        return np.asarray((value / levels.at(slice(None), taken)) * levels.at(slice(None), before))

    def over_indexed(self, moving: str, amount: str, index: Index | None, valued: Valued) -> Floats:
        return np.asarray(self.balance() / self.indexed(moving, amount, index, valued))

    def due(self) -> Floats:
        """By the schedule of each row's loan, from its balance, rate and payments to go."""
        exposure, n = self.study.loss.exposure, self.age.size
        code = np.zeros(n, dtype=np.int64)
        if exposure.by is not None:
            code = codes_of(
                self.column(exposure.by), exposure.values,
                place="loss.exposure.values", by=exposure.by, ids=lambda: self.risk_set.loan_ids[self.loan],
            )  # fmt: skip
        out = np.full(n, np.nan)
        ends = self.contracts.maturity
        for i, (_, schedule) in enumerate(exposure.schedules()):
            rows = np.flatnonzero((code == i) & np.isfinite(ends) & np.isfinite(self.contracts.rate))
            left = interest_only_left(per_loan(schedule.interest_only, _Rows(self), n, 0.0), self.age - 2)
            kept = balloon_of(schedule, _Rows(self), n, self.study.loans.columns.amount)
            to_go = np.maximum(ends[rows] - self.period[rows] + 1, 1).astype(np.int64)
            out[rows] = payment_due(
                self.contracts.balance[rows], self.contracts.rate[rows] / self.per_year, to_go,
                "bullet" if schedule.schedule == "revolving" else schedule.schedule,
                interest_only=left[rows], kept=kept[rows],
            )  # fmt: skip
        return out


class _Rows(dict[str, Floats]):
    """Loan columns of rows, looked up when asked for."""

    def __init__(self, start: RowStart) -> None:
        super().__init__()
        self._start = start

    def __missing__(self, name: str) -> Floats:
        return self._start.number(name)


def check_history(study: Study) -> None:
    """Refuse moving columns that the layout of the history cannot give. Raises TextError."""
    loans = study.loans
    for name, column in study.moving_in_use.items():
        if needs_balance(column) and loans.layout == "panel" and loans.columns.balance is None:
            raise TextError(
                f"moving.{name} needs the balance at the start of every row: name loans.columns.balance, a panel's column "
                "of outstanding balances"
            )
        if (
            loans.layout == "spells"
            and study.rates is not None
            and (needs_balance(column) or needs_rate(column))
        ):
            raise TextError(
                f"moving.{name} needs balance or rate at the start of every period, and layout spells shows one row per loan: "
                "with floating rates (rates) they cannot be known. Use layout: panel, or leave the column out"
            )
        rolled = loans.columns.amount is not None and study.loss.exposure.plain
        if needs_balance(column) and loans.layout == "spells" and not rolled:
            raise TextError(
                f"moving.{name} needs the balance at the start of every period. In layout spells it is rolled down from "
                "loans.columns.amount by loss.exposure.schedule, one of annuity, linear or bullet for all loans: "
                "name the amount and such a schedule, or use layout: panel"
            )
        if type(column).__name__ == "PaymentOver":
            for _, schedule in study.loss.exposure.schedules():
                if schedule.schedule == "supplied":
                    raise TextError(
                        f"moving.{name}: a supplied schedule says nothing about payments before as_of, so a hazard cannot be "
                        "fitted on them; use another column, or another schedule"
                    )
        for use in moving_columns(name, column):
            moves = use.column in (*loans.varying, *loans.lagged)
            valued = getattr(getattr(column, "balance_over_value", None), "valued", None)
            if moves and use.place[-1] == "value" and valued == "origination" and _indexed(column):
                raise TextError(
                    f"moving.{name}: {use.column!r} changes over time (loans.varying or lagged), so it was not taken at "
                    "origination; write valued: as_of"
                )


def _indexed(column: Any) -> bool:
    return column.balance_over_value.index is not None


def moving_rows(
    study: Study, risk_set: RiskSet, contracts: ContractRows, *, history: MacroHistory | None
) -> tuple[RiskSet, tuple[LeftOut, ...]]:
    """The risk set with the study's moving columns in use, and the rows that they cost, by reason.

    Raises TextError where the layout cannot give a column, DataError for values and levels that cannot be used.
    """
    check_history(study)
    length = risk_set.stay_exit - risk_set.stay_entry
    stay = np.repeat(np.arange(length.size), length)
    first = np.cumsum(length) - length
    age = risk_set.stay_entry[stay] + np.arange(stay.size) - first[stay] + 1
    loan, period = risk_set.stay_loan[stay], risk_set.stay_origin[stay] + age
    as_of = parse_period(study.as_of, risk_set.frequency)
    end = as_of if _looks_at_as_of(study) else max(int(period.max()) if period.size else as_of, 1)
    source = MacroLevels(history, None, risk_set.frequency, end)
    bare = RowStart(study, risk_set, contracts, {}, loan, age, period, as_of)
    indices = moving_indices(study, source, bare.column, lambda: risk_set.loan_ids[loan], stay.size)
    start = RowStart(study, risk_set, contracts, indices, loan, age, period, as_of)
    columns = {
        name: np.broadcast_to(evaluate(name, column, start), stay.shape)
        for name, column in study.moving_in_use.items()
    }
    reasons = _reasons(study, start, columns)
    keep = reasons < 0
    out = _lines(risk_set, contracts, reasons, _names(study), stay=stay, loan=loan, period=period)
    return _cut(risk_set, columns, keep, stay=stay, age=age), out


def _looks_at_as_of(study: Study) -> bool:
    return any(
        getattr(part, "valued", None) == "as_of" and getattr(part, "index", None) is not None
        for column in study.moving_in_use.values()
        for part in (getattr(column, "balance_over_value", None), getattr(column, "payment_over", None))
    )


_WHY = ("no balance at the start", "no rate at the start", "no value at the start")


def _names(study: Study) -> list[str]:
    return [f"{REASON}: {name}, {why}" for name in study.moving_in_use for why in _WHY]


def _reasons(study: Study, start: RowStart, columns: Mapping[str, Floats]) -> Ints:
    """(R,) index into :func:`_names` of the first reason that applies, -1 for rows that can be used."""
    out = np.full(start.age.shape, -1, dtype=np.int64)
    for i, (name, column) in enumerate(study.moving_in_use.items()):
        bad = ~np.isfinite(columns[name])
        why = np.full(out.shape, 2, dtype=np.int64)
        if needs_rate(column):
            why[np.isnan(start.contracts.rate)] = 1
        if needs_balance(column):
            why[np.isnan(start.contracts.balance)] = 0
        new = bad & (out < 0)
        out[new] = 3 * i + why[new]
    return out


def _lines(
    risk_set: RiskSet,
    contracts: ContractRows,
    reasons: Ints,
    names: list[str],
    *,
    stay: Ints,
    loan: Ints,
    period: Ints,
) -> tuple[LeftOut, ...]:
    last = np.cumsum(risk_set.stay_exit - risk_set.stay_entry) - 1
    cause = np.zeros(stay.shape, dtype=np.int64)
    cause[last] = risk_set.stay_cause
    kept = np.zeros(risk_set.n_loans, dtype=bool)
    kept[loan[reasons < 0]] = True
    # a loan that loses all rows stands under the reason of its earliest one
    earliest = np.zeros(stay.shape, dtype=bool)
    order = np.lexsort((period, loan))
    earliest[order[np.flatnonzero(np.diff(loan[order], prepend=-1))]] = True
    gone = earliest & ~kept[loan]
    found = []
    for code in np.unique(reasons[reasons >= 0]):
        mine = reasons == code
        counted = gone & mine if contracts.per_loan else mine
        rows = np.flatnonzero(mine)
        found.append(
            LeftOut(
                reason=names[code],
                rows=int(counted.sum()),
                loans=int((gone & mine).sum()),
                events_default=int((cause[mine] == 1).sum()),
                events_payoff=int((cause[mine] == 2).sum()),
                balance=float(contracts.money[counted].sum()),
                first=tuple((str(risk_set.loan_ids[loan[r]]), int(period[r])) for r in rows[:5]),
            )
        )
    return tuple(found)


def _cut(risk_set: RiskSet, columns: Mapping[str, Floats], keep: Bools, *, stay: Ints, age: Ints) -> RiskSet:
    """The risk set without the rows that are not kept; stays are cut at them, loans without rows leave."""
    moving = dict(risk_set.moving) | dict(columns)
    rows = np.flatnonzero(keep)
    new_stay, new_age = stay[rows], age[rows]
    begins = np.ones(rows.size, dtype=bool)
    begins[1:] = (new_stay[1:] != new_stay[:-1]) | (new_age[1:] != new_age[:-1] + 1)
    first = np.flatnonzero(begins)
    last = np.append(first[1:], rows.size)[: first.size] - 1
    of = new_stay[first]
    ends = new_age[last] == risk_set.stay_exit[of]
    used, loan = np.unique(risk_set.stay_loan[of], return_inverse=True)
    return RiskSet(
        frequency=risk_set.frequency,
        causes=risk_set.causes,
        loan_ids=risk_set.loan_ids[used],
        static={name: column[used] for name, column in risk_set.static.items()},
        stay_loan=loan.astype(np.int64),
        stay_origin=risk_set.stay_origin[of],
        stay_entry=new_age[first] - 1,
        stay_exit=new_age[last],
        stay_cause=np.where(ends, risk_set.stay_cause[of], 0),
        weight=risk_set.weight[of],
        moving={name: column[rows] for name, column in moving.items()},
        count=risk_set.count,
    )
