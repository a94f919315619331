"""A fit as text for a terminal of 100 columns."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from stresskit.hazard.covariance import BY_PERIOD, FEWEST_PERIODS, WORDS, CovarianceKind, known_kind
from stresskit.hazard.estimation import MAXIMUM_LIKELIHOOD, RIDGE
from stresskit.hazard.newton import DEVIANCE_TOLERANCE, GRADIENT_TOLERANCE
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
    KeyedMacro,
    LoanCategory,
    LoanNumber,
    MacroNumber,
    Offset,
)

if TYPE_CHECKING:
    from stresskit.hazard.result import HazardFit

WIDTH = 100
#: Fewer periods than this leave errors clustered by period too uncertain to lean on.
FEW_PERIODS = 30


def summary_text(fit: HazardFit) -> str:
    """Facts, terms, coefficients and notes."""
    rule = "-" * WIDTH
    parts = [f"Hazard of {fit.cause}", rule, *_facts(fit), rule, *_table(fit), rule, *_terms(fit)]
    parts += [rule, *_gates(fit)]
    notes = _notes(fit)
    if notes:
        parts += [rule, *notes]
    return "\n".join(parts) + "\n"


def _number(value: float) -> str:
    return f"{value:,.0f}" if float(value).is_integer() else f"{value:,.2f}"


def _p(value: float) -> str:
    return "<0.0001" if value < 5e-5 else f"{value:.4f}"


def _clusters(fit: HazardFit, kind: CovarianceKind) -> str:
    """How many clusters, and the small-sample factor."""
    c = fit.covariances
    if kind == "two_way":
        mended = f"; {c.repaired} negative eigenvalues set to 0" if c.repaired else ""
        return f" ({c.clusters['loan']:,} loans, {c.clusters['period']:,} periods, each with G/(G-1){mended})"
    if kind not in ("loan", *BY_PERIOD):
        return ""
    unit = "loan" if kind == "loan" else "period"
    g = c.clusters[unit]
    if g < 2:
        return f" ({g} {unit})"
    if kind == "period_jackknife":
        return f" ({g:,} periods, factor (G-1)/G = {(g - 1) / g:.4f})"
    lag = f"lag {c.lag}, " if kind == "period_hac" else ""
    return f" ({g:,} {unit}s, {lag}factor G/(G-1) = {g / (g - 1):.4f})"


def _facts(fit: HazardFit) -> list[str]:
    f = fit.facts
    kind = known_kind(fit.covariance_kind)
    df = fit.df
    quantiles = "normal quantiles" if np.isinf(df) else f"t quantiles, {df:.0f} degrees of freedom"
    clusters = _clusters(fit, kind)
    left, right = (
        [
            ("link", fit.link.name),
            ("rows at risk", _number(f.nobs)),
            ("lines" if f.count else "loans", f"{f.n_loans:,}"),
            ("events", _number(f.n_events)),
        ],
        [
            (f"periods ({f.frequency}s)", f"{f.n_periods:,}"),
            ("ages", f"{f.smallest_age} to {f.largest_age}, supported to {f.supported_age}"),
            ("log-likelihood", f"{f.llf:,.4f}"),
            ("AIC", f"{fit.aic:,.2f}"),
        ],
    )
    lines = [
        f"{a + ':':<22}{b:>24}    {c + ':':<24}{d:>24}".rstrip()
        for (a, b), (c, d) in zip(left, right, strict=True)
    ]
    lines.append(
        f"converged:            {f.iterations} iterations; relative change of deviance {f.deviance_change:.1e} <= "
        f"{DEVIANCE_TOLERANCE:.0e},"
    )
    lines.append(f"                      scaled gradient {f.scaled_gradient:.1e} <= {GRADIENT_TOLERANCE:.0e}")
    lines += _estimator(fit)
    lines.append(f"standard errors:      {WORDS[kind]}{clusters}")
    lines.append(f"                      {quantiles}")
    if f.nobs != f.n_rows:
        says = f"column {f.count!r}" if f.count else "its weight"
        lines.append(
            f"weights:              {f.n_rows:,} rows as given, of which one counts as often as {says} says"
        )
        if kind in ("loan", "two_way"):
            lines.append("                      by loan: an identifier is one cluster, whatever its weight")
    if f.rows_without_feature:
        lines.append(
            f"left out:             {_number(f.rows_without_feature)} rows ({_number(f.events_without_feature)} events): "
            "a macro feature is not known"
        )
    return lines


def _estimator(fit: HazardFit) -> list[str]:
    e = fit.estimation
    if e.method == MAXIMUM_LIKELIHOOD:
        return []
    more = ""
    if e.method == RIDGE:
        more = f", {fit.spec.ridge:g} on {sum(w > 0.0 for w in e.weights)} standardised coefficients"
    lines = [f"estimator:            {e.method}{more}"]
    if e.penalty:
        lines.append(
            f"                      penalty {e.penalty:,.4f}, penalised log-likelihood {fit.llf + e.penalty:,.4f}"
        )
    if e.effective is not None:
        lines.append(
            f"                      effective number of coefficients {e.effective:.2f} of {fit.design.k}"
        )
    return lines


def _choices(fit: HazardFit) -> list[str]:
    """Notes on bounds and on separation."""
    e, free = fit.estimation, dict(zip(fit.design.labels, fit.estimation.free, strict=False))
    notes = [f"Joined, because nothing tells them apart: {'; '.join(e.pooled)}."] if e.pooled else []
    if e.separated and not e.pooled:
        notes.append(
            f"No finite maximum likelihood estimate, kept finite by the estimator: {'; '.join(e.separated)}."
        )
        notes.append(
            "Their estimates are far from normal: read the intervals of these coefficients as rough."
        )
    if e.at_bound:
        held = ", ".join(f"{name} (free fit: {free[name]:.4g})" for name in e.at_bound)
        penalised = "penalised log-likelihood" if e.method == RIDGE else "log-likelihood"
        loss = (
            f" The {penalised} is {e.free_llf - fit.llf - e.penalty:,.4f} below that of the free fit."
            if e.free_llf is not None
            else ""
        )
        notes.append(
            f"Held at the bound 0, no standard error: {held}.{loss} Errors of the others are given that those are 0."
        )
    return notes


def _table(fit: HazardFit) -> list[str]:
    table = fit.coefficient_table()
    width = min(max(11, *(len(t) for t in table["term"])), 34)
    letter = "z" if np.isinf(fit.df) else "t"
    head = (
        f"{'':<{width}} {'coef':>11} {'std err':>10} {letter:>7} {'p':>8} {'[0.025':>10} {'0.975]':>10}  sign"
    )
    lines = [head]
    for name, expect, ok, *values in zip(
        *(
            table[c].tolist()
            for c in ("term", "expect", "sign_ok", "coef", "se", "statistic", "p_value", "lower", "upper")
        ),
        strict=True,
    ):
        term = name if len(name) <= width else name[: width - 1] + "…"
        sign = "" if ok is None else (f"{expect[:3]} ok" if ok else f"NOT {expect[:3]}")
        coef, se, statistic, p, lower, upper = values
        hidden = name in fit.withheld
        p_text, interval = ("withheld", f"{'':>21}") if hidden else (_p(p), f"{lower:>10.4g} {upper:>10.4g}")
        ratio = "" if hidden else f"{statistic:.2f}"
        if name in fit.at_bound:
            lines.append(f"{term:<{width}} {coef:>11.5g} {'at bound':>10}")
            continue
        lines.append(
            f"{term:<{width}} {coef:>11.5g} {se:>10.4g} {ratio:>7} {p_text:>8} {interval}  {sign}".rstrip()
        )
    return lines


def _tail(fit: HazardFit) -> list[str]:
    t = fit.tail
    if t is None:
        return []
    interval = [
        f"{value:.4g} (95 % {value * np.exp(-1.96 * se):.4g} to {value * np.exp(1.96 * se):.4g})"
        for value, se in ((t.shape, t.log_shape_se), (t.scale, t.log_scale_se))
    ]
    return [
        f"age beyond {t.join}: {t.family} tail, shape {interval[0]}, scale {interval[1]} {fit.facts.frequency}s; fitted on ages "
        f"{t.first} to {t.last} ({_number(t.events)} events), hazard multiplied by {np.exp(t.step):.3g} to join at age {t.join}"
        + (
            ": the tail misses the baseline there, so its shape is in doubt"
            if abs(t.step) > np.log(2.0)
            else ""
        )
    ]


def _held(fit: HazardFit, low: str, high: str) -> str:
    """Where predictions leave the fitted curve: past the last supported age, or a spline's last knot, not the largest age."""
    return f"held below {low}" + (
        f" and beyond {high}" if fit.tail is None else f", a tail beyond {fit.tail.join}"
    )


def _terms(fit: HazardFit) -> list[str]:
    lines = _tail(fit)
    for term in fit.design.terms:
        if isinstance(term, AgeSpline):
            knots = ", ".join(f"{k:g}" for k in term.knots)
            against = "" if term.full else f", heights against age {term.knots[term.reference]:g}"
            ends = _held(fit, f"{term.knots[0]:g}", f"{term.knots[-1]:g}")
            lines.append(f"age: natural cubic spline, knots {knots}{against}; {ends}")
        elif isinstance(term, AgeSteps):
            against = "" if term.full else f", against {term.labels[term.reference]}"
            ends = _held(fit, f"{term.lowest}", f"{fit.supported_age}")
            lines.append(f"age: {len(term.labels)} steps{against}; {ends}")
        elif isinstance(term, AgeFunction):
            lines.append(f"age: {term.function}; {_held(fit, f'{term.lowest}', f'{fit.supported_age}')}")
        elif isinstance(term, LoanCategory) and not term.full:
            pooled = f", with which {', '.join(map(repr, term.pooled))} count" if term.pooled else ""
            lines.append(f"{term.source}: against {term.levels[term.reference]!r}{pooled}")
        elif isinstance(term, LoanNumber) and term.log:
            lines.append(f"{term.source}: natural logarithm")
        elif isinstance(term, LoanNumber | MacroNumber) and (term.centre, term.scale) != (0.0, 1.0):
            lines.append(f"{term.source}: {_scaling(term)}")
        elif isinstance(term, KeyedMacro):
            scaling = f", {_scaling(term)}" if (term.centre, term.scale) != (0.0, 1.0) else ""
            lines.append(f"{term.source}: by {term.by}, {len(term.levels)} levels{scaling}")
        elif isinstance(term, Crossing):
            lines.append(f"{term.name}: product of the two terms' columns")
        elif isinstance(term, Offset):
            lines.append(f"{term.name}: coefficient 1, needed at prediction")
    return [piece for line in lines for piece in textwrap.wrap(line, WIDTH, subsequent_indent="  ")]


def _scaling(term: LoanNumber | MacroNumber | KeyedMacro) -> str:
    return f"(x - {term.centre:.6g}) / {term.scale:.6g}"


def _gates(fit: HazardFit) -> list[str]:
    """The gates that passed by name, the others in full."""
    if not fit.gates:
        return ["gates: none recorded"]
    passed = [g.name for g in fit.gates if g.passed]
    lines = [f"gates passed: {', '.join(passed)}"] if passed else []
    for g in fit.failed_gates:
        reason = fit.spec.accept.get(g.name)  # type: ignore[call-overload]
        end = (
            f"Accepted: {reason}"
            if reason
            else f"{g.remedy}, or accept it with a reason; until then the fit is not projected."
        )
        lines.append(f"GATE {g.name} FAILED: asked {g.asked}; found {g.found}. {end}")
    return [piece for line in lines for piece in textwrap.wrap(line, WIDTH, subsequent_indent="  ")]


def _notes(fit: HazardFit) -> list[str]:
    notes = _choices(fit)
    table = fit.coefficient_table()
    wrong = [str(t) for t, ok in zip(table["term"], table["sign_ok"], strict=True) if ok is False]
    if wrong:
        notes.append(f"Sign against expectation: {', '.join(wrong)}.")
    by_period = fit.covariance_kind in BY_PERIOD
    if by_period and fit.n_periods < 2:
        notes.append(
            "No errors: those by period need two calendar periods, and there is one. Use covariance: model, which takes loan-periods "
            "for independent."
        )
    elif by_period and fit.covariance_kind != "period_jackknife" and fit.n_periods < FEW_PERIODS:
        notes.append(
            f"Only {fit.n_periods} periods: errors clustered by period rest on few clusters and tend to be too small."
        )
    if fit.withheld:
        notes.append(
            f"p-values and intervals of macro coefficients are withheld below {FEWEST_PERIODS} periods; there are {fit.n_periods}."
        )
    if fit.covariance_kind == "period_jackknife" and fit.n_periods > 1 and fit.bse.isna().all():
        notes.append(
            "No errors by leaving out periods: without one of them a coefficient has no estimate. Use covariance: period."
        )
    if by_period and fit.covariance_kind != "two_way" and 2 <= fit.n_periods <= fit.design.k:
        notes.append(
            f"{fit.n_periods} periods for {fit.design.k} coefficients: their joint covariance is singular."
        )
    lone = table["term"][table["se_period"] < 1e-6 * table["se_model"]].tolist()
    if lone:
        notes.append(
            f"Errors clustered by period are 0 for {', '.join(lone)}: each lives in a single period, so they say nothing."
        )
    return [piece for note in notes for piece in textwrap.wrap(note, WIDTH)]
