"""Workouts of the invented bank's defaulted loans: dated recoveries, closings, cures, and the truth behind them.

A case's unrecovered amount is worked out month by month. While it is neither closed nor written off, a share of it
comes back with a true hazard that depends on workout age, loan-to-value and the unemployment rate; from a stated age on the bank
writes cases off at random; in every month some cases cure. What is still owed at the end of workout is written off.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, format_period
from stresskit.demo.economy import Economy, place_linear
from stresskit.demo.simulate import PRODUCTS, REGIONS, STATUS, WINDOW_END, WINDOW_START, Book, History

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_D = STATUS.index("D")
#: A case that owes less than this share of its amount is closed as repaid.
_DONE = 0.05


@dataclass(frozen=True, slots=True)
class RecoveryTruth:
    """Monthly recovery of a case that is neither closed nor written off, on the complementary log-log scale.

    eta = intercept + rise * u * exp(1 - u), u = workout month / peak_month
        + ltv_at_start * (loan-to-value at start, a fraction) + unemployment_rate * (percent, in the month)

    1 - exp(-exp(eta)) is the expected share of the unrecovered amount that comes back in the month: with probability
    hazard / payment_share a payment arrives, of a beta-distributed share whose mean is payment_share.
    write_off: monthly chance from ``write_off_from`` on; cure: monthly chance up to month ``cure_until``. Everything
    left at ``end`` is written off. cost_share: cost of a recovery per unit of it.
    """

    intercept: float = -2.25
    rise: float = 1.10
    peak_month: float = 8.0
    ltv_at_start: float = -1.00
    unemployment_rate: float = -0.14
    payment_share: float = 0.50
    write_off: float = 0.08
    write_off_from: int = 30
    cure: float = 0.008
    cure_until: int = 48
    end: int = 48
    cost_share: float = 0.04

    def hazard(self, month: int, ltv: Floats, unemployment_rate: float | Floats) -> Floats:
        """(n,) expected share of the unrecovered amount recovered in this workout month."""
        x = month / self.peak_month
        eta = self.intercept + self.rise * x * np.exp(1.0 - x) + self.ltv_at_start * ltv
        return np.asarray(-np.expm1(-np.exp(eta + self.unemployment_rate * unemployment_rate)))

    def loss_rate(self, ltv: Floats, unemployment_rate: Floats) -> Floats:
        """(n,) expected loss per unit owed at default, undiscounted, when month u of the workout brings
        ``unemployment_rate[u - 1]``: exact, by the masses still worked out and written off."""
        working, written_off = np.ones_like(ltv), np.zeros_like(ltv)
        for u in range(1, self.end + 1):
            working = working * (1.0 - self.hazard(u, ltv, float(unemployment_rate[u - 1])))
            if u <= self.cure_until:
                working = working * (1.0 - self.cure)
            if u >= self.write_off_from:
                written_off = written_off + self.write_off * working
                working = (1.0 - self.write_off) * working
        return working + written_off


@dataclass(frozen=True, slots=True)
class Casework:
    """Workouts of all defaults of a history: columns of the case table and of the cash-flow table."""

    cases: Mapping[str, NDArray[Any]]
    flows: Mapping[str, NDArray[Any]]


def draw_workouts(
    rng: np.random.Generator, book: Book, history: History, economy: Economy, truth: RecoveryTruth
) -> Casework:
    """Every default of ``history`` worked out until the window ends: what the bank could know at that time.

    Default periods are those of the panel, amounts the balance owed at default. Kinds of closing: R repaid,
    W written off, C cured; blank while open.
    """
    at = np.flatnonzero(history.status == _D)
    loan, month, amount = history.loan[at], history.month[at], history.balance[at]
    keep = amount > 0
    loan, month, amount = loan[keep], month[keep], amount[keep]
    n, ltv = loan.size, book.ltv_at_start[loan]
    left, open_ = amount.copy(), np.ones(n, dtype=bool)
    closed, kind = np.zeros(n, dtype=np.int64), np.full(n, "", dtype=object)
    flows: list[tuple[Ints, Ints, Floats]] = []
    unemployment = place_linear(economy.values["unemployment_rate"], economy.start, WINDOW_START, WINDOW_END)
    a, b = 2.0, 2.0 * (1.0 / truth.payment_share - 1.0)
    for u in range(1, truth.end + 1):
        uniform, share, fate = rng.random(n), rng.beta(a, b, n), rng.random(n)
        here = open_ & (month + u <= WINDOW_END)
        row = np.minimum(month + u, WINDOW_END) - WINDOW_START
        pays = here & (uniform < truth.hazard(u, ltv, unemployment[row]) / truth.payment_share)
        paid = np.where(pays, left * share, 0.0)
        # The last bit comes with the last payment, so that repaid cases end at nothing owed.
        last = pays & (left - paid < _DONE * amount)
        paid = np.where(last, left, paid)
        paid = np.where(last, paid, paid.round(2))
        left = left - paid
        got = np.flatnonzero(paid > 0)
        flows.append((got, month[got] + u, paid[got]))
        cured = here & ~last & (u <= truth.cure_until) & (fate < truth.cure)
        dropped = (
            here
            & ~last
            & ~cured
            & (((u >= truth.write_off_from) & (fate < truth.write_off)) | (u == truth.end))
        )
        for mask, code in ((last, "R"), (cured, "C"), (dropped, "W")):
            kind[mask], closed[mask] = code, month[mask] + u
        open_ &= ~(last | cured | dropped)
    case, when, paid = (np.concatenate([f[k] for f in flows]) for k in range(3))
    order = np.lexsort((when, case))
    case, when, paid = case[order], when[order], paid[order]
    return Casework(
        {
            "loan": loan,
            "default": month,
            "amount": amount,
            "closed": closed,
            "kind": kind,
            "rate": history.rate[at][keep],
            "product": np.array(PRODUCTS, dtype=object)[book.floating[loan].astype(np.int64)],
            "region": np.array(REGIONS, dtype=object)[book.region[loan]],
            "ltv_at_start": ltv,
        },
        {"loan": loan[case], "month": when, "received": paid, "cost": (truth.cost_share * paid).round(2)},
    )


def casework_tables(work: Casework, names: list[str]) -> tuple[str, str]:
    """(case table, cash-flow table) as CSV text; ``names``: identifier of every loan of the book."""
    c, f = work.cases, work.flows
    lines = ["loan_id,default_month,owed,closed_month,how_closed,annual_rate,product,region,ltv_at_start"]
    for i in np.argsort(c["loan"], kind="stable"):
        closed = format_period(int(c["closed"][i]), Frequency.MONTH) if c["kind"][i] else ""
        lines.append(
            f"{names[c['loan'][i]]},{format_period(int(c['default'][i]), Frequency.MONTH)},{c['amount'][i]:.2f},{closed},"
            f"{c['kind'][i]},{c['rate'][i]:.5f},{c['product'][i]},{c['region'][i]},{c['ltv_at_start'][i]:g}"
        )
    flows = ["loan_id,month,received,cost"]
    for j in range(f["loan"].size):
        month = format_period(int(f["month"][j]), Frequency.MONTH)
        flows.append(f"{names[f['loan'][j]]},{month},{f['received'][j]:.2f},{f['cost'][j]:.2f}")
    return "\n".join(lines) + "\n", "\n".join(flows) + "\n"


def recovery_truth_json(truth: RecoveryTruth) -> dict[str, Any]:
    """Plain data for truth.json."""
    return asdict(truth) | {"age_curve": "rise * x * exp(1 - x), x = workout month / peak_month"}
