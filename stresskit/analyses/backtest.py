"""Out-of-time backtest: at past dates, what the study would have said with what was known then, and what came."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from stresskit.analyses import backtest_tables as tables
from stresskit.analyses.backtest_date import FLAT, LAST_YEAR, MODEL, NO_MACRO, Dated, at_cutoff
from stresskit.core.errors import NumericError, StresskitError, UsageError
from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.values import RiskSet
from stresskit.runs.records import Analysis, AnalysisTable
from stresskit.runs.setting import Setting
from stresskit.spec.backtest import Backtest

KEY = "backtest"
TITLE = "Would the model have seen it? Out-of-time backtest"
_PD_NOTE = "Rolled forward from the cut-off with nothing known of the loans after it; actual: Aalen-Johansen."
#: A rise of defaults over last year's rates by less than this share is no downturn.
RISE = 0.15
#: A rise expected so many times too large is not called seen.
TOO_MUCH = 3.0
_DEFAULT_DATES, _YEARS_BEFORE = 5, 3


def backtest(setting: Setting, spec: Backtest, say: Any, progress: Any) -> Analysis:
    """Raises NumericError when no cut-off is possible, UsageError for one that cannot be read or lies outside the data."""
    file = setting.file
    last = last_observed(setting.data.loans.risk_set)
    dates = cutoffs(setting, spec, last)
    done: list[Dated] = []
    refused: list[tuple[str, str]] = []
    progress(0, len(dates))
    for k, (label, cutoff) in enumerate(dates.items(), start=1):
        steps = last - cutoff if spec.steps is None else min(spec.steps, last - cutoff)
        try:
            done.append(at_cutoff(setting, spec, label, cutoff, steps, say))
        except StresskitError as error:
            refused.append((format_period(cutoff, file.frequency), str(error).splitlines()[0]))
        progress(k, len(dates))
    if not done:
        listed = "; ".join(f"{label}: {why}" for label, why in refused)
        raise NumericError(f"no cut-off is possible. {listed}")
    return _analysis(done, refused, spec)


def last_observed(risk_set: RiskSet) -> int:
    """Last period in which any loan was under observation."""
    return int((risk_set.stay_origin + risk_set.stay_exit).max())


def cutoffs(setting: Setting, spec: Backtest, last: int) -> Mapping[str, int]:
    """Text of each cut-off -> period, rising. Raises UsageError for one that leaves nothing before or after it."""
    frequency, r = setting.file.frequency, setting.data.loans.risk_set
    first = int((r.stay_origin + r.stay_entry).min()) + 1
    if not spec.cutoffs:
        return _default_dates(frequency, first, last)
    found: dict[str, int] = {}
    for text in spec.cutoffs:
        try:
            at = parse_period(text, frequency)
        except ValueError as error:
            raise UsageError(f"cut-off {text!r}: {error}") from None
        if not first <= at < last:
            raise UsageError(
                f"cut-off {text} leaves nothing to {'fit' if at < first else 'compare'}: loans are observed from "
                f"{format_period(first, frequency)} to {format_period(last, frequency)}"
            )
        if at in found.values():
            raise UsageError(f"cut-off {text} is a period that another one names already")
        found[text] = at
    return dict(sorted(found.items(), key=lambda item: item[1]))


def _default_dates(frequency: Frequency, first: int, last: int) -> Mapping[str, int]:
    year = frequency.per_year
    ends = [p for p in range(first + _YEARS_BEFORE * year - 1, last - year + 1) if (p + 1) % year == 0]
    if not ends:
        raise UsageError(
            f"loans are observed from {format_period(first, frequency)} to {format_period(last, frequency)}, which leaves no end "
            "of a year with three years before it and one after it; name cut-offs"
        )
    at = np.unique(np.linspace(0, len(ends) - 1, min(_DEFAULT_DATES, len(ends))).round().astype(int))
    return {format_period(ends[i], frequency): ends[i] for i in at}


def _analysis(done: Sequence[Dated], refused: Sequence[tuple[str, str]], spec: Backtest) -> Analysis:
    def table(name: str, title: str, make: Any, *, shown: bool = True, note: str = "") -> AnalysisTable:
        return AnalysisTable(name, title, tables.joined(done, make), shown=shown, note=note)

    made = [
        table(
            "summary",
            "Share of loans that defaulted, and that the models expected",
            tables.summary_row,
            note=_PD_NOTE,
        ),
        table("totals", "Defaults, and those expected given who was still there", tables.total_row),
        table("scores", "Log score of the default hazard and its rivals", tables.score_rows),
        table(
            "payoff_scores",
            "Log score of the payoff hazard and its rivals",
            tables.payoff_score_rows,
            shown=False,
        ),
        table(
            "ranking",
            "AUC of the ranking at the cut-off, by horizon in periods",
            tables.auc_rows,
            shown=False,
        ),
        table("periods", "By period", tables.period_rows, shown=False),
        table(
            "groups", "By segment, cohort, year on book and predicted risk", tables.group_rows, shown=False
        ),
        table("calibration", "Cumulative PD against defaults", tables.calibration_rows, shown=False),
    ]
    if refused:
        frame = pd.DataFrame(refused, columns=["cutoff", "reason"])
        made.insert(1, AnalysisTable("not_possible", "Dates that were not possible", frame))
    shown = tuple(t for t in made if len(t.frame))
    return Analysis(
        KEY, TITLE, answer(done), shown, notes=_notes(done, spec), cautions=_cautions(done, refused),
        facts={
            "cutoffs": [d.past.label for d in done], "not_possible": dict(refused),
            "steps": {d.past.label: d.past.steps for d in done}, "publication": spec.publication,
            "vintages": dict(spec.vintages), "failed_gates": {d.past.label: list(d.past.failed) for d in done},
            "shock_sd": {d.past.label: d.band.shock_sd for d in done},
        },
    )  # fmt: skip


# ---- words


def _pd(d: Dated, name: str) -> float:
    return d.seen.mean(d.said[name].rolled.pd)


def hardest(done: Sequence[Dated]) -> Dated:
    """The cut-off after which defaults rose most over the rates of the year before it."""
    return max(done, key=lambda d: float(d.actual["default"][-1]) / max(_pd(d, LAST_YEAR), 1e-12))


def answer(done: Sequence[Dated]) -> str:
    """One to three sentences: what came, what the model and its rivals had said, and how much of the rise it saw."""
    d = hardest(done)
    came, last, model = float(d.actual["default"][-1]), _pd(d, LAST_YEAR), _pd(d, MODEL)
    until = format_period(d.past.cutoff + d.past.steps, d.past.setting.file.frequency)
    off = model / came if came > 0 else float("nan")
    facts = (
        f"At {d.past.label}, fitted on what was known then and given the macro that came, the model expected {model:.2%} of "
        f"{d.seen.loans:,.10g} loans to default by {until}; {came:.2%} did (expected over come: {off:.2f}). Without macro terms it would have said {_pd(d, NO_MACRO):.2%}, "
        f"with the flat historical rate {_pd(d, FLAT):.2%}, with last year's rates {last:.2%}."
    )
    if d.past.signs:
        named = ", ".join(s.split(": ")[1] for s in d.past.signs if s.startswith("default: "))
        if named:
            facts += f" By then the fit had found the unexpected sign for {named}."
    if d.past.failed:
        many = len(d.past.failed) > 1
        facts += (
            f" The fit of that date fails the gate{'s' if many else ''} {', '.join(d.past.failed)}: a study would not have projected it "
            "without an accepted reason."
        )
    if came < (1.0 + RISE) * last:
        return (
            "Open: after none of these dates did defaults rise over the rates of the year before, so no downturn was there to be seen. "
            f"{facts}"
        )
    seen = (model - last) / (came - last)
    if seen >= TOO_MUCH:
        verdict = f"No: it expected a rise {seen:.0f} times the one that came over last year's rates."
    elif seen >= 1.25:
        verdict = f"It saw the downturn and overstated it: the rise it expected is {seen:.1f} times the one that came."
    elif seen >= 0.75:
        verdict = f"Yes: it saw {seen:.0%} of the rise over last year's rates."
    elif seen >= 0.25:
        verdict = f"In part: it saw {seen:.0%} of the rise over last year's rates."
    elif seen > 0.0:
        verdict = f"No: it saw {seen:.0%} of the rise over last year's rates."
    else:
        verdict = "No: it expected fewer defaults than last year's rates, and more came."
    return f"{verdict} {facts}"


def _notes(done: Sequence[Dated], spec: Backtest) -> tuple[str, ...]:
    notes = [
        "At each cut-off the loans are read again as of that date and the study's hazards are fitted again to them and to the macro "
        "history up to it; the macro values that came are then put in. So this tests the model, not the forecast of the economy. The "
        "specification was chosen by people who know what came: no backtest takes that advantage away.",
        "expected adds the hazard over the loan-periods that were really under observation, so losing sight of a loan costs nothing; "
        "projected and pd_ roll the book forward from the cut-off with nothing known of the loans after it, and stand beside the "
        "Aalen-Johansen share that really defaulted.",
        "Compared are the loans that were under observation in the first period after the cut-off; new loans after it are not in it.",
        "log_score is the mean log-likelihood per loan-period (nearer 0 is better); lead_se takes calendar periods as independent "
        "clusters, which understates it where shocks last. Flat and last-year rates have half a default added per segment.",
        "Jeffreys, binomial and Hosmer-Lemeshow take loans as independent; a shock that they share makes their p-values too small. "
        "coverage_90 is the share of periods whose defaults lie in a 90% band with chance, the period shock seen in the fit's own "
        "periods, and the error of coefficients.",
        "Losses are not discounted; loss_at_model_lgd is the balance at each real default times the model's own LGD, so it tests "
        "defaults and exposure, not the LGD. balance_projected holds what the study adds to the balance, such as accrued interest.",
    ]
    if spec.publication:
        notes.append(
            f"The last {spec.publication} macro periods before a cut-off are not used by its fit (publication). The values used are "
            f"{'those of the vintages where given, else ' if spec.vintages else ''}as they are known today."
        )
    elif not spec.vintages:
        notes.append(
            "Macro values are those known today, later revisions included; give vintages to do without them."
        )
    if all(np.isnan(d.realised_loss).all() for d in done):
        notes.append(
            "What was owed at the defaults is not known here, so amounts and losses that came are blank."
        )
    for d in done:
        if d.seen.not_seen or d.seen.lost:
            notes.append(
                f"{d.past.label}: {d.seen.not_seen:,.10g} loans of the book have no row after the cut-off and are not compared; {d.seen.lost:,.10g} "
                "were lost from sight before the end without an exit or the contract's end."
            )
        if d.past.signs:
            notes.append(
                f"{d.past.label}: coefficients against the expected sign by then: {', '.join(d.past.signs)}."
            )
        if d.past.joined:
            notes.append(
                f"{d.past.label}: too few defaults by then, joined in the fits: {'; '.join(d.past.joined)}."
            )
    if any(d.past.lgd_now for d in done):
        dates = ", ".join(d.past.label for d in done if d.past.lgd_now)
        notes.append(
            f"{dates}: the workouts of that date gave no recovery curve; the LGD is that of today's workouts."
        )
    return tuple(notes)


def _cautions(done: Sequence[Dated], refused: Sequence[tuple[str, str]]) -> tuple[str, ...]:
    out = [f"Backtest: the cut-off {label} was not possible: {why}" for label, why in refused]
    failed = [f"{d.past.label} ({', '.join(d.past.failed)})" for d in done if d.past.failed]
    if failed:
        out.append(
            f"Backtest: fits of past dates failed gates and were used all the same: {'; '.join(failed)}."
        )
    d = hardest(done)
    low, high = d.band.total
    came = d.seen.exits("default")
    if not low <= came <= high:
        out.append(
            f"Backtest from {d.past.label}: {came:,.0f} loans defaulted, outside the model's 90% band of {low:,.0f} to {high:,.0f}."
        )
    return tuple(out)
