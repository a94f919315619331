"""The loans to project: who is on book at as_of, with what term, balance and rate; and who is not, and why."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import duckdb
import numpy as np
import pandas as pd
from numpy.typing import NDArray

from stresskit.core.values import Portfolio, RiskSet
from stresskit.kernels.schedule import balance_after
from stresskit.panel.fetch import carried, fetch, integers, numbers, texts
from stresskit.panel.judge import Judge, words_to_policy
from stresskit.panel.parse import Parsed, parse
from stresskit.panel.plan import Plan
from stresskit.panel.result import DefaultedBook
from stresskit.panel.rules.content import BOOK_CONTRADICTS_HISTORY, BOOK_DUPLICATE, CATEGORY_NOT_IN_HISTORY
from stresskit.panel.rules.counts import COUNT_NOT_POSITIVE
from stresskit.panel.rules.dates import CONTRACT_END_FAR, FARTHEST_END
from stresskit.panel.source import Source, Workspace
from stresskit.panel.twins import mark_twins

#: Stands for a period that is not known, later than any real one.
_NEVER = 10**6


@dataclass(slots=True)
class Candidates:
    """Every loan that could be on book, in the order of its identifier; arrays of n.

    reason     why a loan is not projected, "" while it is
    mat, o     contract end and origination, _NEVER when unknown
    balance    outstanding at as_of, or what is on record when the loan is not on book; NaN when unknown
    ended      period of the exit, _NEVER when there is none or it is not known
    """

    loan: NDArray[Any]
    reason: NDArray[Any]
    o: NDArray[np.int64]
    mat: NDArray[np.int64]
    balance: NDArray[np.float64]
    amount: NDArray[np.float64]
    rate: NDArray[np.float64]
    static: dict[str, NDArray[Any]]
    ended: NDArray[np.int64]

    def drop(self, bad: NDArray[np.bool_], reason: str) -> None:
        """Marks loans that have no reason yet."""
        self.reason[bad & (self.reason == "")] = reason


def book_of_history(
    connection: duckdb.DuckDBPyConnection, plan: Plan, judge: Judge, parsed: Parsed, *, assume_contract: bool
) -> Candidates:
    """Candidates from the loan history: those seen at as_of, or with ``assume_contract`` those whose contract runs on."""
    columns = parsed.columns
    panel = plan.layout == "panel"
    static = {name: f"c{i}" for name, i in columns.static.items()} | {
        name: f"w{i}" for name, i in columns.moving.items()
    }
    seen = "f.last_t" if panel else "f.seen AS last_t"
    out = "f.exit_out" if panel else "f.out AS exit_out"
    rows = fetch(
        connection,
        f"SELECT l.loan, f.o, f.mat, f.bal, f.amount, f.rate, {seen}, {out}, f.exit_t, f.k IS NULL AS lost, "
        "f.reason AS loan_reason, r.reason AS row_reason, b.money"
        + ("" if columns.count is None else ", n.count")
        + "".join(f", f.{place}" for place in static.values())
        + " FROM loans AS l LEFT JOIN facts AS f USING (k) LEFT JOIN loan_reasons AS r ON r.k = l.k LEFT JOIN "
        "(SELECT v.k, max(struct_pack(t := coalesce(v.t, 0), m := coalesce(v.money, 0))).m AS money FROM verdict AS v "
        "ANTI JOIN facts ON facts.k = v.k GROUP BY v.k) AS b ON b.k = l.k "
        + ("" if columns.count is None else _lost_counts(columns.count))
        + "ORDER BY l.k",
    )
    book = _candidates(
        plan, rows, {name: carried(rows[p], parsed.levels.get(name)) for name, p in static.items()}
    )
    lost = np.asarray(rows["lost"], dtype=bool)
    codes = np.where(lost, integers(rows["row_reason"]), integers(rows["loan_reason"]))
    for code in np.unique(codes[codes > 0]):
        book.drop(codes == code, judge.reason_text(int(code)))
    book.balance[lost] = numbers(rows["money"])[lost]
    if plan.columns.count is not None:
        told = book.static[plan.columns.count]
        book.static[plan.columns.count] = np.where(lost, numbers(rows["count"]), told)

    exit_t, exit_out = integers(rows["exit_t"], _NEVER), integers(rows["exit_out"])
    book.ended = exit_t
    last = integers(rows["last_t"], -1)
    gone = exit_t <= plan.as_of
    defaulted, paid = gone & (exit_out == 1), gone & (exit_out == 2)
    if not panel and not assume_contract:
        paid |= (exit_out == 2) & (exit_t == _NEVER)
    if plan.columns.balance is None:
        before = np.where(defaulted, exit_t - 1, plan.as_of)
        book.balance = np.where(lost, book.balance, _rolled(book, before, plan))
    # a loan whose exit is dated after as_of was there, and one without last_seen is when the study keeps it
    there = (last >= plan.as_of) | ((exit_t > plan.as_of) & (exit_t < _NEVER))
    if not panel:
        there |= (last < 0) & (exit_out == 0) & (book.mat > plan.as_of)
    ended = book.mat <= plan.as_of
    book.balance[(book.reason == "") & ~defaulted & ~there & (paid | ended)] = 0.0
    book.drop(defaulted, "defaulted")
    book.drop(paid, "paid_off")
    book.drop(book.o > plan.as_of, "not_yet_originated")
    if not assume_contract:
        book.drop(~there & ended, "matured")
        book.drop(~there, "not_seen_at_as_of")
    else:
        book.drop(ended, "matured")
        on_book = book.reason == ""
        undated = int((on_book & (exit_out == 2)).sum())
        judge.note(
            "assumed_on_book", int(on_book.sum()),
            f"{int(on_book.sum()):,} loans without a dated exit are assumed on book because their contract runs beyond "
            f"as_of; {undated:,} of them have a payoff status without a date", book.loan[on_book],
        )  # fmt: skip
    return book


def _lost_counts(place: int) -> str:
    """SQL: the counts of lines none of whose rows can be used, so that they are counted as what they stand for."""
    return (
        f"LEFT JOIN (SELECT j.k, max(j.c{place}) AS count FROM judged AS j ANTI JOIN facts ON facts.k = j.k GROUP BY j.k) "
        "AS n ON n.k = l.k "
    )


def book_of_file(work: Workspace, plan: Plan, judge: Judge, source: Source) -> Candidates:
    """Candidates from the portfolio's own file, a row per loan; needs the tables of the history."""
    needed = tuple(replace(c, moves="no") for c in plan.carried if c.used or c.book)
    book_plan = replace(plan, carried=needed)
    connection = work.connection
    parsed = parse(work, source, book_plan, prefix="book_", book=True)
    mark_twins(connection, keys="k", prefix="book_")
    static = {name: f"c{i}" for name, i in parsed.columns.static.items()}
    wanted = "".join(f", r.{place}" for place in static.values())
    rows = fetch(
        connection,
        "SELECT l.loan, r.o, r.mat, r.bal, r.amount, r.rate, coalesce(w.kind, 0) AS kind, f.exit_out, f.exit_t"
        f"{wanted} FROM book_rows AS r LEFT JOIN book_loans AS l USING (k) LEFT JOIN book_twins AS w ON w.rid = r.rowid "
        "LEFT JOIN loans AS h ON h.loan = l.loan LEFT JOIN facts AS f ON f.k = h.k "
        f"ORDER BY l.loan, r.o, r.mat, r.bal, r.amount, r.rate{wanted}",
    )
    book = _candidates(
        plan, rows, {name: carried(rows[p], parsed.levels.get(name)) for name, p in static.items()}
    )
    kind = integers(rows["kind"])
    doubled = kind > 0
    if doubled.any():
        judge.file(BOOK_DUPLICATE, int(doubled.sum()), dict.fromkeys(book.loan[doubled]))
    book.drop(kind == 1, "book_duplicate: copy")
    book.drop(kind == 2, "book_duplicate")
    book.balance[kind == 1] = 0.0
    book.drop(np.ma.getmaskarray(np.ma.asarray(rows["loan"])), "missing_loan")
    book.drop(book.o == _NEVER, "missing_origination")
    counts = _counts(book, plan)
    if counts is not None and (none := (book.reason == "") & ~(counts > 0)).any():
        judge.file(COUNT_NOT_POSITIVE, int(none.sum()), book.loan[none], column=plan.columns.count)
        book.drop(none, COUNT_NOT_POSITIVE.code)
    ended = (integers(rows["exit_t"], _NEVER) <= plan.as_of) & (integers(rows["exit_out"]) > 0)
    if (ended & (book.reason == "")).any():
        clash = ended & (book.reason == "")
        judge.file(BOOK_CONTRADICTS_HISTORY, int(clash.sum()), book.loan[clash])
        if words_to_policy(judge.words[BOOK_CONTRADICTS_HISTORY.code]) != "keep":
            book.drop(ended, BOOK_CONTRADICTS_HISTORY.code)
    book.drop(book.o > plan.as_of + 1, "not_yet_originated")
    if plan.columns.balance is None:
        book.balance = _rolled(book, np.full(len(book.o), plan.as_of), plan)
    return book


def settle(book: Candidates, plan: Plan, judge: Judge, risk_set: RiskSet) -> tuple[Portfolio, pd.DataFrame]:
    """Portfolio of the candidates that can be projected, and loan, reason, balance of all others."""
    book.drop(book.mat == _NEVER, "missing_maturity")
    book.drop(book.mat <= plan.as_of, "no_remaining_term")
    _far_ends(book, plan, judge)
    book.drop(np.isnan(book.rate), "missing_rate")  # first: without it no balance can be rolled down either
    book.drop(book.rate <= -1.0, "rate_below_minus_100")
    book.drop(np.isnan(book.balance), "missing_balance")
    book.drop(book.balance < 0, "negative_balance")
    for column in plan.carried:
        values = book.static.get(column.name)
        if column.at_risk and column.kind != "date" and values is not None and values.dtype.kind == "f":
            book.drop(np.isnan(values), f"missing_value: {column.name}")
    _unseen_categories(book, plan, judge, risk_set)
    counts = _counts(book, plan)
    keep = book.reason == ""
    if not keep.any():
        judge.note(
            "empty_portfolio", 0, "no loan is left to project: see the loans not projected and their reasons"
        )
    portfolio = Portfolio(
        frequency=plan.calendar,
        as_of=plan.as_of,
        loan_ids=book.loan[keep],
        age=plan.as_of - book.o[keep] + 1,
        remaining=book.mat[keep] - plan.as_of,
        balance=book.balance[keep],
        rate=book.rate[keep],
        static={name: values[keep] for name, values in book.static.items() if name != plan.hidden},
        count=None if counts is None else counts[keep],
    )
    rest = pd.DataFrame(
        {"loan": book.loan[~keep], "reason": book.reason[~keep], "balance": book.balance[~keep]}
    )
    if counts is not None:
        rest["count"] = counts[~keep]
        judge.note(
            "loans_alike", int(keep.sum()),
            f"{int(keep.sum()):,} lines of the book stand for {float(counts[keep].sum()):,.10g} loans, and "
            f"{risk_set.n_loans:,} lines of the history for {risk_set.loans_alike:,.10g} "
            f"(loans.columns.count: {risk_set.count}); findings and reconciliation count lines",
        )  # fmt: skip
    return portfolio, rest


def _counts(book: Candidates, plan: Plan) -> NDArray[np.float64] | None:
    """(n,) for how many loans each candidate stands, NaN where not known; None without a column of counts."""
    if plan.columns.count is None:
        return None
    counts = book.static[plan.columns.count].astype(np.float64)
    return np.where(counts > 0, counts, np.nan)


def in_default(book: Candidates, plan: Plan) -> DefaultedBook:
    """The loans that defaulted by as_of, with what they owed when they did."""
    of = book.reason == "defaulted"
    counts = _counts(book, plan)
    loans = Portfolio(
        frequency=plan.calendar, as_of=plan.as_of, loan_ids=book.loan[of], age=plan.as_of - book.o[of] + 1,
        remaining=np.maximum(book.mat[of] - plan.as_of, 1), balance=book.balance[of], rate=book.rate[of],
        static={name: values[of] for name, values in book.static.items() if name != plan.hidden}, count=None if counts is None else counts[of],
    )  # fmt: skip
    return DefaultedBook(loans, book.ended[of])


def _candidates(plan: Plan, rows: dict[str, Any], static: dict[str, NDArray[Any]]) -> Candidates:
    loan = texts(rows["loan"])
    rate = numbers(rows["rate"])
    if plan.columns.rate is None and plan.assumed_rate is not None:
        rate = np.full(len(loan), plan.assumed_rate)
    return Candidates(
        loan=loan,
        reason=np.full(len(loan), "", dtype=object),
        o=integers(rows["o"], _NEVER),
        mat=integers(rows["mat"], _NEVER),
        balance=numbers(rows["bal"]),
        amount=numbers(rows["amount"]),
        rate=rate,
        static=static,
        ended=np.full(len(loan), _NEVER),
    )


def _rolled(book: Candidates, period: NDArray[np.int64], plan: Plan) -> NDArray[np.float64]:
    """Amount at origination rolled down by the schedule to the end of ``period``; NaN where something is unknown."""
    known = (book.o < _NEVER) & (book.mat < _NEVER) & (book.mat >= book.o) & (book.o <= period)
    known &= np.isfinite(book.rate) & (book.rate > -plan.calendar.per_year)
    term, steps = np.where(known, book.mat - book.o, 0), np.where(known, period - book.o, 0)
    rate = np.where(known, book.rate, 0.0) / plan.calendar.per_year
    rolled = balance_after(book.amount, rate, term, steps, plan.schedule)
    early = (book.o > period) & (book.o < _NEVER)
    return np.where(known, rolled, np.where(early, book.amount, np.nan))


def _far_ends(book: Candidates, plan: Plan, judge: Judge) -> None:
    """Loans whose contract would be projected for longer than any contract runs."""
    far = (book.reason == "") & (book.mat > plan.as_of + FARTHEST_END * plan.calendar.per_year)
    if far.any():
        judge.file(CONTRACT_END_FAR, int(far.sum()), book.loan[far])
        if words_to_policy(judge.words[CONTRACT_END_FAR.code]) != "keep":
            book.drop(far, CONTRACT_END_FAR.code)


def _unseen_categories(book: Candidates, plan: Plan, judge: Judge, risk_set: RiskSet) -> None:
    """Loans with a category that a hazard uses and no row at risk ever had."""
    for name in plan.hazard_categories:
        values = book.static.get(name)
        known = risk_set.static.get(name, risk_set.moving.get(name))
        if values is None or known is None:
            continue
        unseen = (book.reason == "") & ~np.isin(values.astype(str), np.unique(known.astype(str)))
        if unseen.any():
            levels = sorted({str(v) for v in values[unseen]})
            note = f"Categories: {', '.join(levels[:5])}."
            judge.file(CATEGORY_NOT_IN_HISTORY, int(unseen.sum()), book.loan[unseen], column=name, note=note)
            if words_to_policy(judge.words[CATEGORY_NOT_IN_HISTORY.code]) != "keep":
                book.drop(unseen, f"{CATEGORY_NOT_IN_HISTORY.code}: {name}")
