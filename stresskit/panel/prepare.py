"""Loans in: a study and its files or frames to risk set, portfolio, reconciliation and findings.

Sums over rows happen inside the database, which may spill to disk; what comes out is one entry per loan or
stay, except for moving columns, which have one value per row at risk.
"""

from __future__ import annotations

from pathlib import Path

import duckdb
import pandas as pd

from stresskit.core.values import Portfolio, RiskSet
from stresskit.panel.account import reconcile
from stresskit.panel.book import book_of_file, book_of_history, in_default, settle
from stresskit.panel.contracts import fetch_contract_rows
from stresskit.panel.ends import judge_ends
from stresskit.panel.fetch import fetch_risk_set
from stresskit.panel.history import judge_panel
from stresskit.panel.judge import Judge
from stresskit.panel.parse import Parsed, parse
from stresskit.panel.plan import Plan, plan_of
from stresskit.panel.result import DefaultedBook, LoanData
from stresskit.panel.rules.registry import policies
from stresskit.panel.source import Source, Workspace, open_files, open_frame, within_means, workspace
from stresskit.panel.spells import judge_spells
from stresskit.spec.study import SpellOutcome, Study


def prepare_loans(
    study: Study, *, base: Path, frame: pd.DataFrame | None = None, book: pd.DataFrame | None = None
) -> LoanData:
    """Everything the later rooms need to know about the loans.

    base   folder that file names in the study are relative to
    frame  the loan history, in place of loans.file;  book: the portfolio, in place of portfolio.file
    Raises TextError for demands of the study that cannot be met whatever the data hold, and DataError for data
    that cannot be used, with every problem found.
    """
    plan = plan_of(study, own_book=book is not None)
    words = policies(study.loans.rules, _policies_of_outcome(study))
    with workspace(study.loans.memory_limit) as work, within_means(study.loans.file):
        connection = work.connection
        if frame is not None:
            source = open_frame(connection, frame, "history_frame", "the frame of loans")
        else:
            source = open_files(connection, study.loans.file, base)
        parsed = parse(work, source, plan)
        judge = Judge(connection, plan, parsed.columns, words)
        if plan.layout == "panel":
            judge_panel(connection, plan, judge, parsed)
        else:
            judge_spells(connection, plan, judge, parsed)
        reconciliation = reconcile(connection, plan, judge)
        judge_ends(connection, plan, judge, parsed)
        book_source = _book_source(connection, study, base, book)
        judge.verdict()
        risk_set = fetch_risk_set(connection, plan, parsed)
        contracts = None
        if plan.contract_rows:
            contracts = fetch_contract_rows(connection, plan, risk_set, rates=study.rates)
        portfolio, not_projected, defaulted = _portfolio(
            work, study, plan, judge, parsed, risk_set, book_source
        )
    judge.verdict()
    digests = {**source.digests, **(book_source.digests if book_source else {})}
    return LoanData(
        risk_set,
        portfolio,
        reconciliation,
        tuple(judge.findings),
        not_projected,
        digests,
        defaulted,
        contracts,
    )


def _policies_of_outcome(study: Study) -> dict[str, str]:
    outcome = study.loans.outcome
    if not isinstance(outcome, SpellOutcome):
        return {}
    return {
        "undated_payoff": outcome.undated_payoff,
        "default_after_maturity": outcome.default_after_maturity,
    }


def _book_source(
    connection: duckdb.DuckDBPyConnection, study: Study, base: Path, book: pd.DataFrame | None
) -> Source | None:
    if book is not None:
        return open_frame(connection, book, "book_frame", "the frame of the book")
    if study.portfolio.file is not None:
        return open_files(connection, study.portfolio.file, base)
    return None


def _portfolio(
    work: Workspace,
    study: Study,
    plan: Plan,
    judge: Judge,
    parsed: Parsed,
    risk_set: RiskSet,
    book_source: Source | None,
) -> tuple[Portfolio, pd.DataFrame, DefaultedBook | None]:
    if book_source is not None:
        candidates = book_of_file(work, plan, judge, book_source)
    else:
        contract = study.portfolio.from_ == "contract"
        candidates = book_of_history(work.connection, plan, judge, parsed, assume_contract=contract)
    if plan.assumed_rate is not None:
        judge.note(
            "assumed_rate", len(candidates.loan),
            f"no rate column: every loan is given the rate {plan.assumed_rate:g} a year "
            "(loans.assume.rate)",
        )  # fmt: skip
    portfolio, rest = settle(candidates, plan, judge, risk_set)
    return portfolio, rest, None if book_source is not None else in_default(candidates, plan)
