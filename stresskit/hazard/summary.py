"""A fit as text for a terminal of 100 columns."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING

import numpy as np

from stresskit.hazard.covariance import WORDS, known_kind
from stresskit.hazard.newton import DEVIANCE_TOLERANCE, GRADIENT_TOLERANCE
from stresskit.hazard.terms import (
    AgeFunction,
    AgeSpline,
    AgeSteps,
    Crossing,
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
    notes = _notes(fit)
    if notes:
        parts += [rule, *notes]
    return "\n".join(parts) + "\n"


def _number(value: float) -> str:
    return f"{value:,.0f}" if float(value).is_integer() else f"{value:,.2f}"


def _p(value: float) -> str:
    return "<0.0001" if value < 5e-5 else f"{value:.4f}"


def _facts(fit: HazardFit) -> list[str]:
    f = fit.facts
    kind = known_kind(fit.covariance_kind)
    df = fit.df
    quantiles = "normal quantiles" if np.isinf(df) else f"t quantiles, {df:.0f} degrees of freedom"
    clusters = ""
    if kind in ("loan", "period"):
        g = fit.covariances.clusters[kind]
        clusters = f" ({g:,} {kind}s, factor G/(G-1) = {g / (g - 1):.4f})" if g > 1 else f" ({g} {kind})"
    left, right = [
        ("link", fit.link.name),
        ("rows at risk", _number(f.nobs)),
        ("loans", f"{f.n_loans:,}"),
        ("events", _number(f.n_events)),
    ], [
        (f"periods ({f.frequency}s)", f"{f.n_periods:,}"),
        ("ages", f"{f.smallest_age} to {f.largest_age}"),
        ("log-likelihood", f"{f.llf:,.4f}"),
        ("AIC", f"{fit.aic:,.2f}"),
    ]
    lines = [
        f"{a + ':':<22}{b:>24}    {c + ':':<24}{d:>24}".rstrip() for (a, b), (c, d) in zip(left, right, strict=True)
    ]
    lines.append(
        f"converged:            {f.iterations} iterations; relative change of deviance {f.deviance_change:.1e} <= "
        f"{DEVIANCE_TOLERANCE:.0e},"
    )
    lines.append(f"                      scaled gradient {f.scaled_gradient:.1e} <= {GRADIENT_TOLERANCE:.0e}")
    lines.append(f"standard errors:      {WORDS[kind]}{clusters}")
    lines.append(f"                      {quantiles}")
    if f.rows_without_feature:
        lines.append(
            f"left out:             {_number(f.rows_without_feature)} rows ({_number(f.events_without_feature)} events): "
            "a macro feature is not known"
        )
    return lines


def _table(fit: HazardFit) -> list[str]:
    table = fit.coefficient_table()
    width = min(max(11, *(len(t) for t in table["term"])), 34)
    letter = "z" if np.isinf(fit.df) else "t"
    head = f"{'':<{width}} {'coef':>11} {'std err':>10} {letter:>8} {'p':>7} {'[0.025':>10} {'0.975]':>10}  sign"
    lines = [head]
    for name, expect, ok, *values in zip(
        *(table[c].tolist() for c in ("term", "expect", "sign_ok", "coef", "se", "statistic", "p_value", "lower", "upper")),
        strict=True,
    ):
        term = name if len(name) <= width else name[: width - 1] + "…"
        sign = "" if ok is None else (f"{expect[:3]} ok" if ok else f"NOT {expect[:3]}")
        coef, se, statistic, p, lower, upper = values
        lines.append(
            f"{term:<{width}} {coef:>11.5g} {se:>10.4g} {statistic:>8.2f} {_p(p):>7} {lower:>10.4g} {upper:>10.4g}  {sign}".rstrip()
        )
    return lines


def _terms(fit: HazardFit) -> list[str]:
    lines = []
    for term in fit.design.terms:
        if isinstance(term, AgeSpline):
            knots = ", ".join(f"{k:g}" for k in term.knots)
            against = "" if term.full else f", heights against age {term.knots[term.reference]:g}"
            lines.append(f"age: natural cubic spline, knots {knots}{against}; held beyond both ends")
        elif isinstance(term, AgeSteps):
            against = "" if term.full else f", against {term.labels[term.reference]}"
            lines.append(f"age: {len(term.labels)} steps{against}; held beyond {term.lowest} and {term.last[-1]}")
        elif isinstance(term, AgeFunction):
            lines.append(f"age: {term.function}; held beyond {term.lowest} and {term.largest}")
        elif isinstance(term, LoanCategory) and not term.full:
            lines.append(f"{term.source}: against {term.levels[term.reference]!r}")
        elif isinstance(term, LoanNumber) and term.log:
            lines.append(f"{term.source}: natural logarithm")
        elif isinstance(term, LoanNumber | MacroNumber) and (term.centre, term.scale) != (0.0, 1.0):
            lines.append(f"{term.source}: (x - {term.centre:.6g}) / {term.scale:.6g}")
        elif isinstance(term, Crossing):
            lines.append(f"{term.name}: product of the two terms' columns")
        elif isinstance(term, Offset):
            lines.append(f"{term.name}: coefficient 1, needed at prediction")
    return [piece for line in lines for piece in textwrap.wrap(line, WIDTH, subsequent_indent="  ")]


def _notes(fit: HazardFit) -> list[str]:
    notes = []
    table = fit.coefficient_table()
    wrong = [str(t) for t, ok in zip(table["term"], table["sign_ok"], strict=True) if ok is False]
    if wrong:
        notes.append(f"Sign against expectation: {', '.join(wrong)}.")
    if fit.covariance_kind == "period" and fit.n_periods < FEW_PERIODS:
        notes.append(
            f"Only {fit.n_periods} periods: errors clustered by period rest on few clusters and tend to be too small."
        )
    if fit.covariance_kind == "period" and fit.n_periods <= fit.design.k:
        notes.append(f"{fit.n_periods} periods for {fit.design.k} coefficients: their joint covariance is singular.")
    lone = table["term"][table["se_period"] < 1e-6 * table["se_model"]].tolist()
    if lone:
        notes.append(
            f"Errors clustered by period are 0 for {', '.join(lone)}: each lives in a single period, so they say nothing."
        )
    return [piece for note in notes for piece in textwrap.wrap(note, WIDTH)]
