"""The tables of a finished study, as one frozen value: what report, workbook and notebooks read.

``by`` names the columns of a breakdown joined by "+", "" for the whole book; ``segment`` is the
matching label, values joined by " / ", "portfolio" for the whole book.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pandas as pd

from stresskit.runs.loan_rows import LoanRows
from stresskit.spec.study import Study

if TYPE_CHECKING:
    # Evidence pulls in statsmodels, which commands that only read a study should not wait for.
    from stresskit.evidence.collect import Evidence
    from stresskit.runs.recovery import RecoveryResult

PORTFOLIO = "portfolio"
WEIGHTED = "weighted"
#: Names that no scenario may have: rows and columns of results are called so.
RESERVED = (WEIGHTED, "history", "variable", "period")


@dataclass(frozen=True, slots=True, eq=False)
class AnalysisTable:
    """One table of an analysis: a CSV and a sheet; ``shown``: in the terminal and open in the report, not behind a fold."""

    name: str
    title: str
    frame: pd.DataFrame
    shown: bool = True
    note: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Analysis:
    """What one analysis of a study found.

    key       its name in the study's section ``analyses`` and of its folder
    title     heading in the report
    answer    the finding in one to three sentences with figures
    tables    in the order in which they are read
    notes     how it was done and what it cannot say, one sentence each
    cautions  what the reader of the stressed figure must know: joins the run's cautions
    facts     for the run record: seeds, draws, thresholds, precision reached
    files     extra texts, name -> content (scenario YAML)
    """

    key: str
    title: str
    answer: str
    tables: tuple[AnalysisTable, ...]
    notes: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    facts: Mapping[str, Any] = field(default_factory=dict)
    files: Mapping[str, str] = field(default_factory=dict)

    def table(self, name: str) -> pd.DataFrame:
        """The frame of a table. Raises KeyError for a name that is not there."""
        return {t.name: t.frame for t in self.tables}[name]


@dataclass(frozen=True, slots=True)
class PlausibilityTables:
    """How far scenarios lie from the forecast of the study's VAR (docs/plausibility.md).

    model      facts of the VAR: variables, lags, criterion, first, last, periods, largest_root, band
    scenarios  scenario, span ("whole path" or "first year"), first, last, periods, stated, d2, tail, in_words, rank,
               windows, beyond_5pct: tail is the share of paths further away; rank among the path and that many windows of
               history, of which the share beyond_5pct lies where 5 % should
    variables  scenario, variable, how (given or filled), periods, z, at, d2, dof, tail: z is the largest one, in period at
    pairs      scenario, first, second, d2_together, dof, tail_together, d2_apart, excess: the pair least like history
    episodes   scenario, span, place, first, last, d2, tail: the furthest windows of history that do not overlap
    forecast   variable, unit, period, middle, low, high: what the VAR expects when no scenario is known
    sentences  the same in words, scenario by scenario
    """

    model: Mapping[str, Any]
    scenarios: pd.DataFrame
    variables: pd.DataFrame
    pairs: pd.DataFrame
    episodes: pd.DataFrame
    forecast: pd.DataFrame
    sentences: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class StudyResult:
    """Everything a study computed.

    study           the study as checked
    summary         scenario, by, segment, loans, exposure, pd_12m, pd_lifetime, pd_no_payoff, payoff_lifetime,
                    lgd, el_12m, el_lifetime, from_extrapolated_age, beyond_path. Scenario "weighted"
                    is the probability-weighted mean where weights are given. PDs are means over loans,
                    amounts sums in the currency of the loan file; lgd = loss-weighted; the last two are
                    shares (0..1) of lifetime default incidence that come from ages beyond the observed
                    ones, and from periods after a scenario's last given value
    segments        scenario, by, segment, step, period, survival, default, payoff, matured (shares of the
                    loans at as_of, per step flows except survival and matured which are states),
                    default_cumulative, balance (expected performing balance at the START of the step),
                    default_amount, el (discounted, per step)
    loan_rows       the loan table as it is written, row group by row group; ``loans`` is all of it as one frame, made
                    when it is first asked for and kept: a gigabyte for a million loans and five scenarios. scenario, loan, segment columns, balance, pd_12m, pd_lifetime, pd_no_payoff,
                    payoff_lifetime, lgd, el_12m, el_lifetime
    paths           scenario ("history" for observed values), variable, unit, period, value, flag; with macro.var also
                    low, high (band of filled values) and at_floor (whether a filled value was put at its floor)
    features        scenario, feature, period, value, lowest, highest, outside, flag: range is that of estimation, flag
                    the worst one of the path values that the feature was made from
    hazard_by_age   cause, age, at_risk, events, observed, lower, upper, fitted
    actual_expected cause, period, at_risk, events, expected
    coefficients    cause, term, coef, se, se_kind, statistic, p_value, lower, upper, se_model, se_loan,
                    se_period, expect, sign_ok, at_bound, coef_free
    fits            cause -> dict of facts: link, rows, loans, events, periods, llf, converged, iterations,
                    largest_age, df
    reconciliation  what, reason, rows, loans, events_default, events_payoff, balance
    findings        code, policy, severity, count, first, message
    alignment       model period, feature, macro period used, value
    not_projected   loan, reason, balance
    cautions        sentences for the reader, most important first
    record          manifest without output digests
    years           scenario, by, segment, year, until, periods, then what docs/year-view.md lists: a row for as_of and for
                    each calendar-year end; None when the study asks for no year view, staging or capital
    adjustments     scenario, by, segment, step, kind, name, reason, loans, el_12m_before, el_12m_after,
                    el_lifetime_before, el_lifetime_after: floors and overlays one by one; None without them. The
                    summary then has el_12m_adjusted and el_lifetime_adjusted beside the model's own
    evidence        what was asked of the fits and what was found; None when it was left out
    recovery        workouts, recovery curves and what they say; None when the study has no workouts
    plausibility    how far scenarios lie from a forecast; None when the study declares no macro.var
    hazard_by_macro what each hazard makes of each macro feature, see runs.responses; None where that was not asked
    analyses        what the study's section ``analyses`` asked for, in the order of that section's keys
    base            folder that the names of inputs are relative to; None when it is not known
    """

    study: Study
    summary: pd.DataFrame
    segments: pd.DataFrame
    loan_rows: LoanRows | pd.DataFrame
    paths: pd.DataFrame
    features: pd.DataFrame
    hazard_by_age: pd.DataFrame
    actual_expected: pd.DataFrame
    coefficients: pd.DataFrame
    fits: Mapping[str, Mapping[str, Any]]
    reconciliation: pd.DataFrame
    findings: pd.DataFrame
    alignment: pd.DataFrame
    not_projected: pd.DataFrame
    cautions: tuple[str, ...]
    record: Mapping[str, Any]
    years: pd.DataFrame | None = None
    adjustments: pd.DataFrame | None = None
    evidence: Evidence | None = None
    recovery: RecoveryResult | None = None
    plausibility: PlausibilityTables | None = None
    hazard_by_macro: pd.DataFrame | None = None
    analyses: tuple[Analysis, ...] = ()
    base: Path | None = None

    @property
    def loans(self) -> pd.DataFrame:
        """The loan table as one frame, made on first use and kept."""
        return self.loan_rows if isinstance(self.loan_rows, pd.DataFrame) else self.loan_rows.frame()
