"""Text cells of case and cash-flow tables to arrays, rule by rule; every row ends used or with one reason."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, parse_period
from stresskit.macro.table import column_problem
from stresskit.recovery.cases import CURE, KINDS, OPEN, WRITE_OFF
from stresskit.recovery.rules import Found
from stresskit.spec.recovery import CaseColumns, FlowColumns, Recovery

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

#: Stands for a period that cannot be read or is not there.
NO_PERIOD = -(10**9)

#: Reason of a cash flow whose case is left out.
CASE_LEFT_OUT = "case_left_out"


@dataclass(slots=True)
class CaseBook:
    """The case table, a row per line of the file.

    case (r,) identifiers; reason (r,) "" while used; default, closed: period of default, workout period of
    closing (0 open); rate per period, effective; static columns
    """

    frequency: Frequency
    until: int
    end: int
    found: Found
    case: NDArray[Any]
    reason: NDArray[Any]
    default: Ints
    entered: Ints
    amount: Floats
    closed: Ints
    kind: Ints
    rate: Floats
    static: Mapping[str, NDArray[Any]]

    def used(self) -> Ints:
        return np.flatnonzero(self.reason == "")

    def account(self) -> list[tuple[str, int, float, float]]:
        return _lines(self.reason, self.amount, np.zeros(self.amount.size))


@dataclass(slots=True)
class Payments:
    """Cash flows, a row per line of the file.

    case      (f,) row of the case table
    workout   (f,) workout period, 1 ..
    discount  (f,) factor to the period of default
    reason    (f,) "" while used
    """

    case: Ints
    workout: Ints
    discount: Floats
    recovery: Floats
    cost: Floats
    reason: NDArray[Any]

    def account(self) -> list[tuple[str, int, float, float]]:
        return _lines(self.reason, self.recovery + self.cost, self.recovery)


def _lines(reason: NDArray[Any], amount: Floats, recovered: Floats) -> list[tuple[str, int, float, float]]:
    """(reason, rows, amount, recovered) for every reason, "" (used) last."""
    amount, recovered = np.nan_to_num(amount), np.nan_to_num(recovered)
    codes = [*sorted({str(r) for r in reason if r}), ""]
    return [
        (code, int(here.sum()), float(amount[here].sum()), float(recovered[here].sum()))
        for code in codes
        for here in [reason == code]
    ]


def read_cases(
    spec: Recovery, frame: pd.DataFrame, found: Found, *, frequency: Frequency, until: int
) -> CaseBook:
    """Rows of the case table after all case rules."""
    c = spec.columns
    extra = (*spec.by, *(s for s in spec.static if s not in spec.by))
    _need(frame, c, extra, "recovery.columns")
    case = _text(frame, c.case)
    reason = np.full(case.size, "", dtype=object)

    def rule(code: str, bad: Bools) -> Bools:
        return found.apply(code, bad, case, reason)

    rule("missing_case", case == "")
    copied = frame.duplicated().to_numpy()
    rule("case_copied", copied)
    left = pd.Series(case).where(reason == "")
    rule("case_twice", (left.notna() & left.duplicated(keep=False)).to_numpy())
    default = _periods(frame, c.default, frequency)
    rule("default_unreadable", default == NO_PERIOD)
    amount = _numbers(frame, c.amount)
    rule("amount_not_positive", ~(amount > 0))
    kind, closing = _closing(spec, frame, rule, frequency, case.size)
    shut = (kind != OPEN) & (closing != NO_PERIOD)
    rule("closed_before_default", shut & (closing < default))
    rate, readable = _rates(spec, frame, frequency, case.size)
    rule("rate_unreadable", ~readable)
    static = {name: _text(frame, name) for name in extra}
    rule("column_missing", np.any([v == "" for v in static.values()] or [np.zeros(case.size, bool)], axis=0))
    entered, dated = _entry(spec, frame, default, frequency)
    rule("entry_unreadable", ~dated)
    rule("not_observed", (default + entered >= until) | (entered >= spec.end))
    rule("closed_before_entry", shut & (closing <= default + entered) & (entered > 0))
    later = rule("closed_later", shut & (closing > until))
    kind = np.where(later | ~shut, OPEN, kind)
    closed = np.where(kind == OPEN, 0, np.maximum(closing - default, 1))
    rule("open_past_end", (kind == OPEN) & (until - default > spec.end))
    return CaseBook(
        frequency, until, spec.end, found, case, reason, default, entered, amount, closed, kind, rate,
        {name: _typed(v, reason) for name, v in static.items()},
    )  # fmt: skip


def _closing(
    spec: Recovery, frame: pd.DataFrame, rule: Any, frequency: Frequency, n: int
) -> tuple[Ints, Ints]:
    """Kind of each case and the period of its closing."""
    c = spec.columns
    if c.kind is None or c.closed is None:
        return np.full(n, OPEN), np.full(n, NO_PERIOD)
    codes = {"": OPEN}
    for position, name in enumerate(KINDS):
        codes |= dict.fromkeys(getattr(spec.kinds, name), position)
    word = _text(frame, c.kind)
    kind = np.array([codes.get(w, -1) for w in word], dtype=np.int64)
    rule("kind_unknown", kind == -1)
    closing = _periods(frame, c.closed, frequency)
    dated = closing != NO_PERIOD
    assumed = rule("kind_missing", dated & (kind == OPEN) & (word == ""))
    rule("closing_missing", (kind > OPEN) & ~dated)
    return np.where(assumed, WRITE_OFF, np.maximum(kind, OPEN)), closing


def _entry(spec: Recovery, frame: pd.DataFrame, default: Ints, frequency: Frequency) -> tuple[Ints, Bools]:
    """Workout periods before each case came under observation, and where that could be read."""
    if spec.columns.entry is None:
        return np.zeros(default.size, dtype=np.int64), np.ones(default.size, dtype=bool)
    when = _periods(frame, spec.columns.entry, frequency)
    blank = _text(frame, spec.columns.entry) == ""
    readable = blank | ((when != NO_PERIOD) & (when >= default))
    return np.where(readable & ~blank, when - default, 0), readable


def _rates(spec: Recovery, frame: pd.DataFrame, frequency: Frequency, n: int) -> tuple[Floats, Bools]:
    """Effective rate per period of every case, and where it could be had."""
    k = frequency.per_year
    if spec.discount == "rate" and spec.columns.rate is not None:
        nominal = _numbers(frame, spec.columns.rate)
        readable = np.isfinite(nominal) & (nominal > -1.0)
        return np.where(readable, nominal, 0.0) / k, readable
    annual = 0.0 if isinstance(spec.discount, str) else float(spec.discount)
    return np.full(n, np.expm1(np.log1p(annual) / k)), np.ones(n, dtype=bool)


def read_flows(columns: FlowColumns, frame: pd.DataFrame, book: CaseBook) -> Payments:
    """Rows of the cash-flow table after all flow rules but the cap at the amount."""
    _need(frame, columns, (), "recovery.flows.columns")
    name = _text(frame, columns.case)
    reason = np.full(name.size, "", dtype=object)

    def rule(code: str, bad: Bools) -> Bools:
        return book.found.apply(code, bad, name, reason)

    row = pd.Index(book.case[book.used()]).get_indexer(pd.Index(name))
    rule("flow_without_case", ~pd.Index(name).isin(pd.Index(book.case)) | (name == ""))
    reason[(row < 0) & (reason == "")] = CASE_LEFT_OUT
    used = book.used()
    case = used[np.maximum(row, 0)] if used.size else np.zeros(name.size, dtype=np.int64)
    when = _periods(frame, columns.date, book.frequency)
    recovery = _numbers(frame, columns.recovery, blank=0.0)
    cost = np.zeros(name.size) if columns.cost is None else _numbers(frame, columns.cost, blank=0.0)
    rule("flow_unreadable", (when == NO_PERIOD) | ~np.isfinite(recovery) | ~np.isfinite(cost))
    rule("flow_negative", (recovery < 0) | (cost < 0))
    rule("flow_before_default", when < book.default[case])
    rule("flow_not_observed", when > book.until)
    entered = book.entered[case]
    rule("flow_before_entry", (entered > 0) & (when <= book.default[case] + entered))
    elapsed = np.maximum(when - book.default[case], 0)
    closed = book.closed[case]
    rule("flow_after_closing", (closed > 0) & (elapsed > np.maximum(closed, 1)))
    workout = np.maximum(elapsed, 1)
    rule("flow_past_end", workout > book.end)
    discount = np.exp(-np.log1p(book.rate[case]) * (elapsed - entered))
    return Payments(case, workout, discount, recovery, cost, reason)


def final_recoveries(spec: Recovery, frame: pd.DataFrame, book: CaseBook) -> Payments:
    """One recovery per closed case, at its closing: what was owed less what was finally lost.

    A loss stated beside a closing is taken as one in the money of the period of default: not discounted again.
    """
    loss = _numbers(frame, str(spec.columns.loss), blank=0.0)
    wrong = ~np.isfinite(loss) | (loss < 0) | (loss > book.amount * (1 + 1e-12))
    closed = (book.kind != OPEN) & (book.kind != CURE)
    book.found.apply("loss_out_of_range", wrong & closed, book.case, book.reason)
    at = np.flatnonzero(closed & (book.reason == ""))
    kept = np.clip(np.nan_to_num(loss[at]), 0.0, book.amount[at])
    workout = np.maximum(book.closed[at], 1)
    reason = np.where(workout > spec.end, "flow_past_end", "").astype(object)
    ones = np.ones(at.size)
    return Payments(at, workout, ones, book.amount[at] - kept, np.zeros(at.size), reason)


def _need(frame: pd.DataFrame, columns: CaseColumns | FlowColumns, extra: Sequence[str], place: str) -> None:
    wanted = {f"{place}.{role}": str(name) for role, name in columns.model_dump().items() if name is not None}
    wanted |= {f"recovery: {name}": name for name in extra}
    problem = column_problem(wanted, [str(c) for c in frame.columns])
    if problem is not None:
        raise DataError("the workout tables lack columns that the study names", [problem])


def _text(frame: pd.DataFrame, name: str) -> NDArray[Any]:
    return np.array([str(v).strip() for v in frame[name].to_numpy(dtype=object)], dtype=object)


def _periods(frame: pd.DataFrame, name: str, frequency: Frequency) -> Ints:
    """Ordinals; each distinct label is parsed once; NO_PERIOD for what is no period."""
    labels, code = np.unique(_text(frame, name).astype(str), return_inverse=True)
    ordinals = np.full(labels.size, NO_PERIOD, dtype=np.int64)
    for i, label in enumerate(labels):
        try:
            ordinals[i] = parse_period(str(label), frequency)
        except ValueError:
            continue
    out: Ints = ordinals[code]
    return out


def _numbers(frame: pd.DataFrame, name: str, *, blank: float = np.nan) -> Floats:
    text = _text(frame, name)
    out = pd.to_numeric(pd.Series(np.where(text == "", "nan", text)), errors="coerce").to_numpy(
        dtype=np.float64
    )
    return np.where(text == "", blank, out)


def _typed(text: NDArray[Any], reason: NDArray[Any]) -> NDArray[Any]:
    """Numbers where every used row holds one, else text."""
    number = pd.to_numeric(pd.Series(text), errors="coerce").to_numpy(dtype=np.float64)
    used = reason == ""
    return number if used.any() and np.isfinite(number[used]).all() else text
