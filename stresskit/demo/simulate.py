"""Draw the invented bank's loans and let the true hazards act on them, month by month.

Ages: a loan's opening month is its first month on book, so age in month t is t - opened + 1. Money
is in an invented currency; rates are nominal annual fractions.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from stresskit.core.period import Frequency, parse_period
from stresskit.demo.economy import Economy
from stresskit.demo.truth import (
    MonthlyFeatures,
    Truth,
    joint_probabilities,
    loan_parts,
    monthly_features,
    true_odds,
)

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

WINDOW_START = parse_period("2016-01", Frequency.MONTH)
WINDOW_END = parse_period("2025-12", Frequency.MONTH)
#: A book bought from another invented lender: first seen at the end of this month.
PURCHASE_MONTH = parse_period("2019-07", Frequency.MONTH)
#: Months in which part of the floating book is sold: those loans leave view without an event.
SALE_MONTHS = (parse_period("2018-03", Frequency.MONTH), parse_period("2022-06", Frequency.MONTH))
SALE_SHARE = 0.04

OLD_SHARE = 0.26
BOUGHT_SHARE = 0.04

PRODUCTS = ("fixed", "floating")
REGIONS = ("north", "coast", "valley")
_REGION_SHARE = (0.35, 0.40, 0.25)
_REGION_LTV = (0.68, 0.74, 0.65)
_TERMS = ((60, 84, 120, 180), (84, 120, 180, 240))

PERFORMING, ARREARS, DEFAULT, PAYOFF, MATURED = "C", "A", "D", "P", "M"
STATUS = (PERFORMING, ARREARS, DEFAULT, PAYOFF, MATURED)
_C, _A, _D, _P, _M = range(5)


@dataclass(frozen=True, slots=True)
class Book:
    """The loans as opened, n of them.

    opened, matures, first_seen  (n,) int64 month ordinals; first_seen is the month of the first row
    floating                     (n,) bool
    region                       (n,) int64, index into REGIONS
    amount                       (n,) float64 > 0, at opening
    ltv_at_start, income_cover   (n,) float64
    margin                       (n,) float64: floating loans pay the policy rate plus this
    fixed_rate                   (n,) float64: what fixed loans pay
    """

    opened: Ints
    matures: Ints
    first_seen: Ints
    floating: NDArray[np.bool_]
    region: Ints
    amount: Floats
    ltv_at_start: Floats
    income_cover: Floats
    margin: Floats
    fixed_rate: Floats

    @property
    def n_loans(self) -> int:
        return int(self.opened.shape[0])


@dataclass(frozen=True, slots=True)
class History:
    """The clean monthly panel, R rows, loan after loan, months rising.

    loan     (R,) int64, index into the book
    month    (R,) int64 month ordinal
    status   (R,) int64, index into STATUS
    balance  (R,) float64, at the end of the month; a default shows the balance owed at default
    rate     (R,) float64, nominal annual fraction
    counts   number of loans by way of leaving: default, payoff, matured, sold, on book
    """

    loan: Ints
    month: Ints
    status: Ints
    balance: Floats
    rate: Floats
    counts: Mapping[str, int]


def draw_book(rng: np.random.Generator, loans: int, economy: Economy) -> Book:
    """Loans of three kinds: opened before the window, bought with another lender's book, opened in the window."""
    n_old, n_bought = round(OLD_SHARE * loans), round(BOUGHT_SHARE * loans)
    kind = np.repeat([0, 1, 2], [n_old, n_bought, loans - n_old - n_bought])
    floating = rng.random(loans) < 0.45
    terms = np.array(_TERMS)[floating.astype(np.int64), rng.integers(0, 4, loans)]
    share = rng.random(loans)
    opened = np.where(
        kind == 0,
        WINDOW_START - 1 - np.floor(share * np.minimum(72, terms - 12)),
        np.where(
            kind == 1,
            PURCHASE_MONTH - 6 - np.floor(share * np.minimum(60, terms - 24)),
            WINDOW_START + np.floor(share * (WINDOW_END - WINDOW_START + 1)),
        ),
    ).astype(np.int64)
    first_seen = np.where(kind == 0, WINDOW_START, np.where(kind == 1, PURCHASE_MONTH, opened))
    # numbered in order of opening, as a bank would
    order = np.lexsort((np.arange(loans), opened))
    opened, first_seen, terms, floating = opened[order], first_seen[order], terms[order], floating[order]

    region = rng.choice(3, size=loans, p=_REGION_SHARE)
    ltv = np.clip(np.array(_REGION_LTV)[region] + 0.10 * rng.standard_normal(loans), 0.30, 0.98).round(3)
    cover = np.exp(0.70 + 0.25 * rng.standard_normal(loans)).round(2)
    amount = (np.exp(11.6 + 0.5 * rng.standard_normal(loans)) / 500).round() * 500
    margin = (0.016 + 0.020 * np.maximum(ltv - 0.6, 0.0) + 0.003 * rng.random(loans)).round(4)
    policy = _policy_rate(economy, opened)
    fixed_rate = (policy + margin + 0.004).round(4)
    matures, where = opened + terms, region.astype(np.int64)
    return Book(opened, matures, first_seen, floating, where, amount, ltv, cover, margin, fixed_rate)


def _policy_rate(economy: Economy, month: Ints) -> Floats:
    """Policy rate as a fraction that lenders price with in a month: last quarter's published value."""
    quarter = np.asarray(month) // 3 - 1 - economy.start
    return economy.values["policy_rate"][quarter] / 100.0


def simulate(rng: np.random.Generator, book: Book, economy: Economy, truth: Truth) -> History:
    """The clean panel: true competing hazards, sales, maturities, balances by annuity."""
    features = monthly_features(economy, start=WINDOW_START, end=WINDOW_END)
    parts = loan_parts(truth, floating=book.floating, ltv=book.ltv_at_start, cover=book.income_cover)
    sold_in = _sales(rng, book)
    balance = _opening_balance(book, economy)
    alive = np.zeros(book.n_loans, dtype=bool)
    gone = np.zeros(book.n_loans, dtype=bool)
    rows: list[tuple[Ints, Ints, Ints, Floats, Floats]] = []
    counts = dict.fromkeys(("default", "payoff", "matured", "sold"), 0)
    for month in range(WINDOW_START, WINDOW_END + 1):
        leaving = alive & (sold_in == month)
        counts["sold"] += int(leaving.sum())
        alive &= ~leaving
        gone |= leaving
        entering = (book.first_seen == month) & ~gone
        # a loan seen from its opening month is at risk in it; a loan first seen later only shows its entry
        at_risk = alive | (entering & (book.opened == month))
        alive |= entering
        here = np.flatnonzero(alive)
        uniform = rng.random(book.n_loans)[here]
        status = _exits(truth, features, month, book, parts, here, np.where(at_risk[here], uniform, 1.0))
        reset = _policy_rate(economy, np.full(here.size, month)) + book.margin[here]
        rate = np.where(book.floating[here], reset, book.fixed_rate[here])
        owed = balance[here]
        paying = (status == _C) & (month > book.first_seen[here])
        owed = np.where(paying, _after_payment(owed, rate, book.matures[here] - month + 1), owed)
        owed = np.where((status == _P) | (status == _M), 0.0, owed)
        balance[here] = owed
        rows.append((here, np.full(here.size, month), status, owed, rate))
        for cause, code in (("default", _D), ("payoff", _P), ("matured", _M)):
            counts[cause] += int((status == code).sum())
        alive[here[status > _A]] = False
    counts["on_book"] = int(alive.sum())
    return _sorted(rng, rows, counts)


def _exits(
    truth: Truth,
    features: MonthlyFeatures,
    month: int,
    book: Book,
    parts: tuple[Floats, Floats],
    here: Ints,
    uniform: Floats,
) -> Ints:
    """Status code of each loan on book: an exit by the true joint probabilities, else matured, else performing."""
    odds = true_odds(
        truth,
        features,
        month,
        age=month - book.opened[here] + 1,
        floating=book.floating[here],
        fixed_parts=(parts[0][here], parts[1][here]),
    )
    p_default, p_payoff = joint_probabilities(*odds)
    exits = np.where(uniform < p_default, _D, np.where(uniform < p_default + p_payoff, _P, _C))
    return np.where((exits == _C) & (book.matures[here] == month), _M, exits).astype(np.int64)


def _sales(rng: np.random.Generator, book: Book) -> Ints:
    """(n,) month in which a loan is sold if it is still there, far in the future for most."""
    sold_in = np.full(book.n_loans, WINDOW_END + 10_000)
    for month in SALE_MONTHS:
        chosen = book.floating & (book.first_seen < month - 1) & (rng.random(book.n_loans) < SALE_SHARE)
        sold_in = np.where(chosen, np.minimum(sold_in, month), sold_in)
    return sold_in


def _opening_balance(book: Book, economy: Economy) -> Floats:
    """(n,) balance at the end of the first month seen; loans seen late have paid their annuity until then."""
    rate = np.where(book.floating, _policy_rate(economy, book.opened) + book.margin, book.fixed_rate) / 12.0
    paid = book.first_seen - book.opened
    term = book.matures - book.opened
    left = np.expm1((paid - term) * np.log1p(rate)) / np.expm1(-term * np.log1p(rate))
    return np.asarray(book.amount * left, dtype=np.float64)


def _after_payment(balance: Floats, rate: Floats, payments_left: Ints) -> Floats:
    """Balance after one annuity payment at the month's rate, ``payments_left`` including this one."""
    monthly = rate / 12.0
    return np.asarray(
        balance * (1.0 - monthly / np.expm1(payments_left * np.log1p(monthly))), dtype=np.float64
    )


def _sorted(
    rng: np.random.Generator, rows: list[tuple[Ints, Ints, Ints, Floats, Floats]], counts: Mapping[str, int]
) -> History:
    """Rows loan after loan, with arrears put in: in the months before most defaults, now and then elsewhere."""
    columns: list[NDArray[Any]] = [np.concatenate([r[k] for r in rows]) for k in range(5)]
    order = np.lexsort((columns[1], columns[0]))
    loan, month, status, balance, rate = (c[order] for c in columns)
    performing = status == _C
    late = rng.random(loan.size) < 0.008
    before = np.zeros(loan.size, dtype=bool)
    for step in (1, 2):
        before[:-step] |= (status[step:] == _D) & (loan[step:] == loan[:-step])
    late |= before & (rng.random(loan.size) < 0.85)
    status = np.where(performing & late, _A, status)
    return History(loan, month, status, balance.round(2), rate, MappingProxyType(dict(counts)))
