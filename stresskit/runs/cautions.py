"""Sentences that a reader of the figures must see, most important first."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from stresskit.core.values import MacroHistory, ScenarioPath
from stresskit.hazard.result import HazardFit
from stresskit.panel.result import LoanData, loans_alike
from stresskit.runs.gates import accepted_gates, gate_table
from stresskit.runs.records import WEIGHTED
from stresskit.scenario.checks import path_findings
from stresskit.spec.study import RecoveryLgd, SpellOutcome, Study
from stresskit.spec.terms import HazardSpec

#: Said in the report, the workbook and the README, word for word.
STANDING = (
    "A stressed figure is a model estimate. Independent validation, the supervisor's own rules and the bank's "
    "accounting policy decide what it may be used for.",
    "Not for decisions on single borrowers.",
)

#: Below this many periods, errors clustered by period are themselves uncertain (Cameron, Gelbach & Miller 2008: few clusters).
FEW_PERIODS = 30
#: Levels of a feature by a loan column that are told one by one.
MOST_LEVELS = 3
#: Reasons not to project a loan that are no gap: it has left the book.
GONE = ("matured", "paid_off")
#: Share of lifetime default incidence from beyond the data above which it is said up front.
NOTABLE_SHARE = 0.10
#: Last words of the places under which a study names loan columns that hold an amount.
LINE_AMOUNTS = ("value", "limit", "income", "balloon")


def assumptions(study: Study) -> list[str]:
    """What the study assumes where the data do not say."""
    out = []
    if "rate" in study.loans.assume:
        out.append(
            f"No interest rates in the loan file: every loan is assumed to pay {study.loans.assume['rate']:g} ({study.loans.rate_unit})."
        )
    outcome = study.loans.outcome
    if isinstance(outcome, SpellOutcome):
        if outcome.undated_payoff == "observed_to_maturity":
            out.append(
                "Loans paid off without a date are treated as performing to their contract end (or the end of observation): "
                "time at risk is overstated where they were repaid early, so default hazards are understated."
            )
        if outcome.default_after_maturity == "date_at_maturity":
            out.append("Defaults dated after the contract end are dated at the contract end.")
    if study.loans.observed_until is not None:
        out.append(
            f"Exits are known up to {study.loans.observed_until} only: loans still performing then count as censored there."
        )
    if study.portfolio.from_ == "contract":
        out.append(
            "The projected book is ASSUMED: loans whose contract runs beyond as_of count as on book, with the balance of their schedule."
        )
    if study.rates is not None and study.loss.discount == "rate":
        out.append(
            "Floating rates move along the path, but losses are discounted at each loan's rate at as_of (loss.discount: rate; rate_path "
            "discounts at the rate in force)."
        )
    if study.loss.discount == "rate_path" and study.rates is None:
        out.append("loss.discount is rate_path, but no rate floats: it is each loan's own rate throughout.")
    out += _whole_lines(study)
    if "payoff" not in study.hazards:
        out.append(
            "No early-repayment hazard is declared: lifetime figures assume that every loan stays to contract maturity or default."
        )
    return out


def _whole_lines(study: Study) -> list[str]:
    """Hazards that read an amount of a line, where lines stand for several loans."""
    out: list[str] = []
    c = study.loans.columns
    if c.count is None:
        return out
    amounts = {c.balance, c.amount}
    amounts |= {use.column for use in study.contract_columns() if use.place[-1] in LINE_AMOUNTS}
    hazards: dict[str, HazardSpec] = {str(cause): hazard for cause, hazard in study.hazards.items()}
    if isinstance(study.loss.lgd, RecoveryLgd) and study.loss.lgd.recovery == "hazard":
        # fitted on workouts, each its own amount, and read off the book, where the amount is that of many loans
        names = {"hazard": "recovery", "cure_hazard": "cure"}
        hazards |= {names[key]: hazard for key, hazard in study.recovery_hazards().items()}
    for cause, hazard in hazards.items():
        out += [
            f"The {cause} hazard reads {name}, an amount of the whole line: {c.count} loans alike are read as one large one. "
            "Give it a column with the amount of one loan."
            for name in hazard.loan_columns()
            if name in amounts
        ]
    return out


def _signs(coefficients: pd.DataFrame) -> list[str]:
    wrong = coefficients[coefficients["sign_ok"].eq(False)]
    return [
        f"The {r.cause} hazard's coefficient of {r.term} is {r.coef:+.3g}, against the expected sign ({r.expect})."
        for r in wrong.itertuples()
    ]


def _estimation(fits: Mapping[str, HazardFit]) -> list[str]:
    """Coefficients at a bound, and levels that the fit could not have estimated as they stand."""
    out = []
    for cause, fit in fits.items():
        e = fit.estimation
        if e.at_bound:
            out.append(
                f"The {cause} hazard's coefficient of {', '.join(e.at_bound)} is held at its bound 0: without the bound the data "
                "give the other sign."
            )
        if e.pooled:
            out.append(f"The {cause} hazard joins what its data cannot tell apart: {'; '.join(e.pooled)}.")
        elif e.separated:
            out.append(
                f"The {cause} hazard has no maximum likelihood estimate for {'; '.join(e.separated)}; the estimate shown "
                f"rests on the method: {e.method}."
            )
    return out


def _beyond(summary: pd.DataFrame) -> list[str]:
    total = summary[(summary["by"] == "") & (summary["scenario"] != WEIGHTED)]
    out = []
    for column, words in (
        ("from_extrapolated_age", "comes from ages beyond those observed"),
        ("beyond_path", "falls after the scenario's last given value"),
    ):
        worst = total.sort_values(column, ascending=False, na_position="last", kind="stable").iloc[0]
        if worst[column] > NOTABLE_SHARE:
            out.append(
                f"{worst[column]:.0%} of lifetime default incidence {words} (scenario {worst['scenario']})."
            )
    return out


def _outside(features: pd.DataFrame) -> list[str]:
    """A sentence per scenario and feature; of a feature by a loan column one per level, or the worst of many levels."""
    out = []
    ahead = features[(features["scenario"] != "history") & (features["outside"] > 0)]
    name = ahead["feature"].str.split("[", regex=False).str[0].rename("name")
    for (scenario, feature), rows in ahead.groupby(["scenario", name], sort=False):
        worst = (
            rows.groupby("feature", sort=False)["outside"].max().sort_values(ascending=False, kind="stable")
        )
        shown = list(dict.fromkeys(rows["feature"])) if len(worst) <= MOST_LEVELS else [worst.index[0]]
        out += [f"Scenario {scenario}: {_left(c, rows[rows['feature'] == c])}." for c in shown]
        if len(shown) < len(worst):
            out[-1] = f"{out[-1][:-1]}; so do {len(worst) - 1} more levels of {feature}, less far."
    return out


def _left(feature: str, rows: pd.DataFrame) -> str:
    """When and to which side a feature leaves its range, and how far."""
    span = float(rows["highest"].iloc[0] - rows["lowest"].iloc[0])
    above = rows["value"].astype(float) > rows["highest"].astype(float)
    parts = []
    for word, mine in (("above", rows[above]), ("below", rows[~above])):
        if not len(mine):
            continue
        far = float(mine["outside"].max())
        times = f" ({far / span:.0%} of its width)" if span > 0 else ""
        parts.append(f"{word} it in {_when(mine['period'])}, by up to {far:.3g}{times}")
    return f"{feature} leaves the range on which hazards were estimated: {'; '.join(parts)}"


def _when(periods: pd.Series) -> str:
    """``2027-03``, or how many from when to when."""
    first, last = str(periods.iloc[0]), str(periods.iloc[-1])
    return first if len(periods) == 1 else f"{len(periods)} periods, {first} to {last}"


def _evidence(study: Study, fits: Mapping[str, HazardFit]) -> list[str]:
    out = []
    for cause, f in fits.items():
        if f.feature_names and f.n_periods < FEW_PERIODS:
            out.append(
                f"The {cause} hazard rests on {f.n_periods} calendar periods: errors of macro coefficients are uncertain themselves."
            )
        if f.facts.count and f.covariance_kind in ("loan", "two_way"):
            out.append(
                f"Errors of the {cause} hazard are clustered by loan: a line is one cluster, whatever its count ({f.facts.count})."
            )
        if f.withheld:
            out.append(
                f"p-values and intervals of the {cause} hazard's macro coefficients are withheld: {f.n_periods} periods are too few."
            )
        if f.n_events < 10 * len(f.params):
            out.append(
                f"The {cause} hazard has {f.n_events:,.0f} events for {len(f.params)} coefficients: fewer than ten each."
            )
        if f.feature_names and not f.definitions:
            out.append(
                f"The {cause} hazard's model does not say how its macro features ({', '.join(f.design.features)}) were made: that the "
                "study still makes them so could not be checked."
            )
    reads_macro = any(f.feature_names for f in fits.values()) or study.contract_variables()
    if study.macro is not None and not reads_macro:
        out.append("No hazard uses a macro feature: scenarios cannot change the result.")
    return out


def without_feature(
    cause: str, names: Sequence[str], *, rows: float, all_rows: float, events: float, all_events: float
) -> list[str]:
    """What a hazard's rows lose because a macro feature is not known in their periods; nothing when none is lost.

    rows, events          left out
    all_rows, all_events  of the cause, those left out included
    """
    if rows <= 0:
        return []
    share = rows / all_rows
    return [
        f"The {cause} hazard leaves out {f'{share:.1%}' if share >= 0.001 else 'under 0.1%'} of its rows ({rows:,.0f} of "
        f"{all_rows:,.0f}) and {events:,.0f} of its {all_events:,.0f} events: a macro feature ({', '.join(names)}) is not known "
        "in their periods. An earlier start of the macro history or a shorter lag keeps them."
    ]


def _left_out(fits: Mapping[str, HazardFit]) -> list[str]:
    out = []
    for cause, f in fits.items():
        rows, events = f.facts.rows_without_feature, f.facts.events_without_feature
        out += without_feature(
            cause, f.design.features,
            rows=rows, all_rows=f.facts.nobs + rows, events=events, all_events=f.facts.n_events + events,
        )  # fmt: skip
    return out


def _data(loans: LoanData) -> list[str]:
    table = loans.reconciliation
    given, used = table[table["what"] == "in"], table[table["what"] == "used"]
    out = []
    rows_in, rows_used = float(given["rows"].sum()), float(used["rows"].sum())
    if rows_in and rows_used < 0.95 * rows_in:
        # the account of rows is that of the file
        rows = "loan rows" if not loans.risk_set.count else "the rows of lines, whatever their counts,"
        out.append(
            f"{1 - rows_used / rows_in:.1%} of {rows} are not used in estimation; the reconciliation says why."
        )
    left = loans.not_projected
    reason = left["reason"].to_numpy(dtype=str)
    alike = loans_alike(left)
    defaulted = float(alike[reason == "defaulted"].sum())
    if defaulted:
        out.append(
            f"{defaulted:,.10g} loans of the history are in default and not projected: losses still to come from them are not in these figures."
        )
    missed = ~np.isin(reason, [*GONE, "defaulted"])
    if missed.any():
        book = float(loans.portfolio.balance.sum())
        missing = float(np.nansum(left["balance"].to_numpy(dtype=float)[missed]))
        share = missing / (missing + book) if missing + book > 0 else 0.0
        out.append(
            f"{float(alike[missed].sum()):,.10g} loans that may be on book ({share:.1%} of the known balance) are not projected; "
            "the list gives the reason of each."
        )
    return out


def cautions(
    study: Study,
    loans: LoanData,
    paths: Sequence[ScenarioPath],
    history: MacroHistory | None,
    summary: pd.DataFrame,
    features: pd.DataFrame,
    coefficients: pd.DataFrame,
    fits: Mapping[str, HazardFit],
    notes: Sequence[str] = (),
) -> tuple[str, ...]:
    """All cautions of a run: what the engine found, ``notes`` of later parts, then the standing ones."""
    found = [
        *accepted_gates(gate_table(study, fits)),
        *_signs(coefficients),
        *_estimation(fits),
        *_beyond(summary),
        *_outside(features),
        *_evidence(study, fits),
        *assumptions(study),
        *(path_findings(paths, history) if history is not None else []),
        *_left_out(fits),
        *_data(loans),
        *notes,
    ]
    return (*found, *STANDING)


def before_standing(cautions: Sequence[str], more: Sequence[str]) -> tuple[str, ...]:
    """The cautions with more of them, the standing ones last."""
    found = tuple(c for c in cautions if c not in STANDING)
    return (*found, *more, *(c for c in cautions if c in STANDING))
