"""How a study's year view is set up: points, cells, stage and capital inputs, loans in default at as_of."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from stresskit.core.errors import TextError
from stresskit.core.period import year_of
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.adjust import texts
from stresskit.loss.capital import defaulted_requirement
from stresskit.loss.constant import hold_book
from stresskit.loss.lgd import lgd_per_loan
from stresskit.loss.provision_inputs import (
    References,
    capital_inputs,
    capital_loans,
    missing_days,
    stage_inputs,
)
from stresskit.loss.reference import Conditions
from stresskit.loss.yearly import Plan, by_cell
from stresskit.loss.years import year_edges
from stresskit.panel.result import DefaultedBook, LoanData
from stresskit.projection.project import life_steps
from stresskit.runs.records import PORTFOLIO
from stresskit.runs.years import Breakdown, Opening, YearView
from stresskit.spec.base import meant
from stresskit.spec.provisions import YearView as YearSpec
from stresskit.spec.study import ConstantLgd, SegmentLgd, Study

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
#: Calendar-year ends that a defaulted loan is held where the study does not say.
DEFAULT_STAYS = 2


def year_view(
    study: Study,
    loans: LoanData,
    fits: Mapping[str, HazardFit],
    observed: FeatureTable,
    features_of: Callable[[str], FeatureTable],
    scenarios: Sequence[str],
    *,
    moving: Mapping[str, Floats] | None = None,
    lgd_in_default: Callable[[Portfolio], Floats] | None = None,
) -> YearView | None:
    """The year view that a study asks for; None when it asks for none.

    observed      macro features of the estimation periods
    features_of   scenario -> its macro features from the period after as_of
    moving        moving column -> (n,) its value at as_of, which yardsticks away from the scenarios keep
    lgd_in_default  loans in default at as_of -> (k,) their LGD, where loss.lgd has a value for them that no rule of the study states
    Raises TextError for conditions that name no scenario, DataError for book columns that cannot be used.
    """
    if not (study.years or study.breakdowns or study.staging or study.capital):
        return None
    portfolio, defaulted = loans.portfolio, loans.defaulted
    first = (study.years or YearSpec.model_validate({})).first
    life = life_steps(portfolio, study.horizon)
    edges = year_edges(portfolio.as_of, portfolio.frequency, int(life.max()))
    points = np.concatenate([[0], _within(edges[:first], study.horizon)]).astype(np.int64)

    def conditions(name: str) -> Conditions:
        if name == "mean":
            used = sorted({n for f in fits.values() for n in f.feature_names})
            values = [_mean_known(observed.column(n)) for n in used]
            return Conditions(tuple(used), np.array(values, dtype=np.float64).reshape(1, -1))
        if name not in scenarios:
            raise TextError(
                f"conditions {name!r} of staging or capital are no scenario of the study{meant(name, scenarios)} "
                f"(mean, {', '.join(scenarios)})"
            )
        table = features_of(name)
        return Conditions(table.names, table.values)

    known = replace(portfolio, static={**portfolio.static, **moving}) if moving else portfolio
    references = References(known, fits, life, points, conditions, {})
    stays = study.staging.stays_years if study.staging else DEFAULT_STAYS
    if study.capital and study.capital.stays_years is not None:
        stays = study.capital.stays_years
    codes, of_defaulted, count, breakdowns = year_cells(portfolio, defaulted, _breakdowns(study))
    plan = Plan(
        portfolio, codes, count, points,
        None if study.staging is None else stage_inputs(study.staging, references),
        None if study.capital is None else capital_inputs(study.capital, references),
    )  # fmt: skip
    opening = opening_stock(study, defaulted, of_defaulted, count, stays, lgd_in_default)
    standing = None
    held = standing_points(study, portfolio)
    if held is not None:
        standing = hold_book(
            portfolio, fits, study.loss, codes=codes, count=count, points=held, cap=study.horizon
        )
    return YearView(plan, edges, breakdowns, opening, stays, _notes(study, loans, opening, points), standing)


def standing_points(study: Study, portfolio: Portfolio) -> Ints | None:
    """(N + 1,) steps at which a constant balance sheet is shown, None where none is asked for.

    It does not end with the book: all calendar years asked for are shown, up to the study's cap.
    """
    if study.years is None or not study.years.constant:
        return None
    k, first = portfolio.frequency.per_year, study.years.first
    edges = year_edges(portfolio.as_of, portfolio.frequency, k * (first + 1))[:first]
    return np.concatenate([[0], _within(edges, study.horizon)]).astype(np.int64)


def _within(edges: Ints, cap: int | None) -> Ints:
    """Year ends within the cap, at least the first."""
    return edges if cap is None else edges[: max(1, int((edges <= cap).sum()))]


def _mean_known(values: Floats) -> float:
    """Mean of the periods in which a feature is known; NaN where it never is."""
    known = values[np.isfinite(values)]
    return float(known.mean()) if known.size else np.nan


def _breakdowns(study: Study) -> tuple[tuple[str, ...], ...]:
    return study.breakdowns or tuple((name,) for name in study.loans.segments)


def _notes(study: Study, loans: LoanData, opening: Opening, points: Ints) -> tuple[str, ...]:
    """Cautions that staging, capital and year view call for."""
    out = []
    if study.years is not None and study.years.constant:
        out.append(
            "Figures of a constant balance sheet assume that every exposure that is repaid, matures or defaults is replaced at once by "
            "one of the same kind; stages, capital and adjustments are of today's book in run-off."
        )
    if study.staging is not None:
        out.append(
            "Stages and impairment are an estimate by the thresholds that the study declares: not an accounting figure."
        )
        missing = missing_days(study.staging, loans.portfolio)
        if missing:
            out.append(f"{missing:,.10g} loans have no days past due on record: they count as not past due.")
    if study.capital is not None:
        out.append(
            "Risk-weighted amounts are an estimate by published formulas on modelled PD and LGD: not a regulatory figure."
        )
    if study.staging is not None or study.capital is not None:
        if loans.defaulted is None:
            out.append(
                "The book is a file of its own, so loans in default at as_of are not known: stage 3 begins at nothing."
            )
        if opening.unknown:
            out.append(
                f"{opening.unknown:,.10g} loans in default at as_of have no known balance and are not in the stock of stage 3."
            )
        if study.horizon is not None:
            out.append(f"Lifetime figures of staging end at the study's horizon of {study.horizon} periods.")
    return tuple(out)


def year_cells(
    portfolio: Portfolio, defaulted: DefaultedBook | None, wanted: Sequence[Sequence[str]]
) -> tuple[Ints, Ints, int, tuple[Breakdown, ...]]:
    """Cells of all columns crossed, of performing and of defaulted loans, and how they add up to each breakdown."""
    names = list(dict.fromkeys(n for group in wanted for n in group))
    books = [portfolio] if defaulted is None else [portfolio, defaulted.loans]
    n = portfolio.n_loans
    total = sum(b.n_loans for b in books)
    levels, inverse = [], []
    for name in names:
        values, index = np.unique(np.concatenate([texts(b.static[name]) for b in books]), return_inverse=True)
        levels.append(values)
        inverse.append(index.astype(np.int64))
    if not names:
        whole = np.zeros(total, dtype=np.int64)
        return whole[:n], whole[n:], 1, (("", (PORTFOLIO,), np.zeros(1, dtype=np.int64)),)
    code = np.zeros(total, dtype=np.int64)
    for values, index in zip(levels, inverse, strict=True):
        # renumbered at each column, so that many columns do not overflow
        _, code = np.unique(code * values.size + index, return_inverse=True)
    _, first, code = np.unique(code, return_index=True, return_inverse=True)
    out: list[Breakdown] = [("", (PORTFOLIO,), np.zeros(first.size, dtype=np.int64))]
    for group in wanted:
        mine = [names.index(n) for n in group]
        rows = list(zip(*(levels[j][inverse[j][first]] for j in mine), strict=True))
        labels = sorted(set(rows))
        place = {row: k for k, row in enumerate(labels)}
        index = np.array([place[row] for row in rows], dtype=np.int64)
        out.append(("+".join(group), tuple(" / ".join(map(str, row)) for row in labels), index))
    return code[:n].astype(np.int64), code[n:].astype(np.int64), int(first.size), tuple(out)


def opening_stock(
    study: Study,
    defaulted: DefaultedBook | None,
    codes: Ints,
    count: int,
    stays: int,
    lgd_in_default: Callable[[Portfolio], Floats] | None = None,
) -> Opening:
    """Loans in default at as_of whose calendar year of default is one of the last ``stays``."""
    none = np.zeros((count, 0))
    if defaulted is None or not (study.staging or study.capital) or not defaulted.period.size:
        return Opening(np.zeros(0, dtype=np.int64), none, none, none, none, 0.0)
    book = defaulted.loans
    now = year_of(book.as_of, book.frequency)
    year = defaulted.period // book.frequency.per_year
    held = now - year < stays
    known = held & np.isfinite(book.balance)
    balance = np.where(known, book.balance, 0.0)
    loss = balance * _lgd_in_default(study, book, lgd_in_default)
    k = np.zeros(book.n_loans)
    if study.capital is not None:
        k = defaulted_requirement(capital_loans(study.capital, book).lgd_floor * balance, loss)
    years = np.arange(now - stays + 1, now + 1)

    def by_year(values: Floats) -> Floats:
        parts = [
            by_cell(codes, np.where(known & (year == y), values, 0.0)[:, None], count)[:, 0] for y in years
        ]
        return np.stack(parts, axis=1)

    return Opening(
        years,
        by_year(book.counts),
        by_year(balance),
        by_year(loss),
        by_year(k),
        float(book.counts[held & ~known].sum()),
    )


def _lgd_in_default(study: Study, book: Portfolio, known: Callable[[Portfolio], Floats] | None) -> Floats:
    """(k,) LGD of loans in default at as_of. Raises TextError when only the path of a performing loan could give it."""
    if study.staging is not None and study.staging.defaulted_lgd is not None:
        return np.full(book.n_loans, study.staging.defaulted_lgd)
    if known is not None:
        return known(book)
    if not isinstance(study.loss.lgd, ConstantLgd | SegmentLgd):
        raise TextError(
            "staging.defaulted_lgd: loss.lgd has no value for loans in default already; state one"
        )
    return lgd_per_loan(study.loss.lgd, book)
