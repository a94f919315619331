"""The tables of a finished study, as one frozen value: what report, workbook and notebooks read.

``by`` names the columns of a breakdown joined by "+", "" for the whole book; ``segment`` is the
matching label, values joined by " / ", "portfolio" for the whole book.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import pandas as pd

from stresskit.spec.study import Study

if TYPE_CHECKING:
    # Evidence pulls in statsmodels, which commands that only read a study should not wait for.
    from stresskit.evidence.collect import Evidence
    from stresskit.runs.recovery import RecoveryResult

PORTFOLIO = "portfolio"
WEIGHTED = "weighted"


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
    loans           scenario, loan, segment columns, balance, pd_12m, pd_lifetime, pd_no_payoff,
                    payoff_lifetime, lgd, el_12m, el_lifetime
    paths           scenario ("history" for observed values), variable, unit, period, value, flag
    features        scenario, feature, period, value, lowest, highest, outside: range is that of estimation
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
    evidence        what was asked of the fits and what was found; None when it was left out
    recovery        workouts, recovery curves and what they say; None when the study has no workouts
    """

    study: Study
    summary: pd.DataFrame
    segments: pd.DataFrame
    loans: pd.DataFrame
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
    evidence: Evidence | None = None
    recovery: RecoveryResult | None = None
