"""The texts of a first study: study.yaml, two scenarios, and the macro table to fill in."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from importlib import resources
from string import Template

from stresskit.core.period import Frequency, format_period, parse_period
from stresskit.core.words import visible
from stresskit.starter.guess import Guess

#: Stands for a column that the study needs and nobody could guess.
UNKNOWN = "COLUMN_TO_NAME"
_WORDS = {"y", "n", "yes", "no", "on", "off", "true", "false", "null"}
#: role -> what it is for a reader.
ROLE_WORDS: Mapping[str, str] = {
    "loan": "identifier of the loan",
    "period": "the period that the row is about",
    "origination": "when the loan was opened",
    "maturity": "contract end",
    "term_months": "contract term in months, instead of maturity",
    "balance": "outstanding at the end of the row's period; at as_of where there is a row per loan",
    "amount": "lent at opening",
    "rate": "nominal annual interest rate",
    "entry": "first period under observation, for loans that were bought or joined late",
    "last_seen": "last period in which the loan was seen performing",
}


def quoted(text: str) -> str:
    """The text as a YAML scalar that can only be read as this text."""
    plain = re.fullmatch(r"[A-Za-z_][A-Za-z0-9_]*", text) and text.lower() not in _WORDS
    return text if plain else json.dumps(text, ensure_ascii=False)


def listed(texts: Sequence[str]) -> str:
    return "[" + ", ".join(map(quoted, texts)) + "]"


def _line(code: str, words: str) -> str:
    """A line of YAML with a comment that stands where those of its neighbours do."""
    return f"{code:<31} # {words}"


def study_text(parts: Mapping[str, str]) -> str:
    """study.yaml from the template and the parts that differ."""
    template = Template((resources.files("stresskit.starter") / "study.txt").read_text(encoding="utf-8"))
    text = template.substitute(parts)
    return "\n".join(line.rstrip() for line in text.splitlines()).rstrip() + "\n"


FRESH: Mapping[str, str] = {
    "title": "A first study: an invented loan book, to look at how everything hangs together and to put your own in its place.",
    "name": "first-study",
    "frequency": "month",
    "as_of": "2025-12",
    "as_of_words": "last period in which loans were observed; the projection starts in the next one",
    "loans": """\
loans:
  file: loans.csv               # .csv or .parquet: one file, a glob or a folder, relative to this file
  layout: panel                 # panel: a row per loan and period; spells: a row per loan, with dates
  columns:                      # role: column of the file. Roles not needed may be left out
    loan: loan_id               # identifier of the loan
    period: month               # the period that the row is about; dates, 2025-12 and 2025Q4 all do
    origination: opened         # when the loan was opened: its age counts from there
    maturity: matures           # contract end; or term_months with the term in months
    balance: balance            # outstanding at the end of the row's period
    rate: annual_rate           # nominal annual rate as a fraction: 0.045 is 4.5 %
  #rate_unit: percent            # when the file says 4.5
  outcome:
    column: status              # how the loan stood at the END of the row's period
    default: [D]                # codes that mean default
    payoff: [P]                 # codes that mean full early repayment
    performing: [C, A, M]       # all other codes that may occur; anything else is reported as unknown
  segments: [product, region]   # results are broken down by these columns
  static: [home_value]          # further columns to carry along: every column that a term or option below names
  # A loan first seen after its opening shows how it ENTERED in its first row and is at risk from the next row on:
  first_row: entry
  #observed_until: 2025-12       # last period in which exits were recorded, if that is before as_of
  # Rows after the contract end are set aside: such a loan is not at risk any more. Codes: docs/errors.md.
  rules: {period_after_maturity: leave_out}""",
    "portfolio": "#portfolio: {file: book.csv}    # or a book of its own, a row per loan, columns named as above",
    "place": ", place: linear",
    "place_words": "place: how quarters become months, linear or step.",
    "loan_terms": "      - {loan: product, as: category, reference: fixed}  # a column with levels; reference is the level that others differ from",
    "payoff": """\
  payoff:                       # early repayment; leave it out if it was not recorded
    link: cloglog
    terms:
      - {age: log}""",
    "lgd": "{by: product, values: {fixed: 0.25, floating: 0.30}}   # CHECK: invented. Or one for all: {constant: 0.3}",
    "options": """
# Risk-weighted amounts by the published formulas, an estimate (docs/capital.md):
#capital: {class: product, values: {fixed: residential_mortgage, floating: residential_mortgage}, stressed_weight: 0.3}

# Loan columns that move along a path, for the terms of a hazard (docs/moving-columns.md):
#moving: {current_ltv: {balance_over_value: {value: home_value, index: house_price_index}}}""",
}


def guessed_parts(g: Guess, *, file: str, name: str) -> dict[str, str]:
    """What differs in the study of a table whose columns were guessed."""
    quarterly = g.frequency == "quarter"
    as_of = g.as_of or "2025-12"
    product = g.segments[0] if g.segments else None
    terms = (
        f"      #- {{loan: {quoted(product)}, as: category}}   # levels of a loan column; see also {{loan: NUMBER, transform: standardise}}"
        if product else "      #- {loan: COLUMN_TO_NAME, as: category}   # levels of a loan column"
    )  # fmt: skip
    return {
        "title": f"A study for {visible(file)}. Columns and codes were guessed from names and values: look at every CHECK.",
        "name": name,
        "frequency": g.frequency,
        "as_of": as_of,
        "as_of_words": "CHECK: "
        + (
            "the last date in the file"
            if g.as_of
            else "no date was found; last period in which loans were observed"
        ),
        "loans": _loans(g, file),
        "portfolio": _portfolio(g),
        "place": "" if quarterly else ", place: linear",
        "place_words": "Quarterly like the model, so nothing says how quarters become months."
        if quarterly
        else "place: how quarters become months, linear or step.",
        "loan_terms": terms,
        "payoff": _payoff(g),
        "lgd": "{constant: 0.4}        # CHECK: a placeholder. Or by a column: {by: COLUMN, values: {a: 0.3, b: 0.5}}",
        "options": "",
    }


def _payoff(g: Guess) -> str:
    """A hazard of early repayment where the table dates it."""
    dated = g.layout == "panel" or "payoff_date" in g.roles
    if g.payoff and dated:
        return "  payoff:                       # early repayment\n    link: cloglog\n    terms:\n      - {age: log}"
    why = "no code of early repayment was found" if not g.payoff else "repayments carry no date in the file"
    return f"  # payoff: none, because {why}: lifetime figures then hold for borrowers who stay to the contract end"


def _loans(g: Guess, file: str) -> str:
    lines = [
        "loans:",
        f"  file: {quoted(file)}",
        _line(
            f"  layout: {g.layout}",
            "CHECK: a row per loan and period"
            if g.layout == "panel"
            else "CHECK: a row per loan, with dates",
        ),
        _line("  columns:", "role: column of the file"),
    ]
    needed = ["loan", *(["period"] if g.layout == "panel" else []), "origination"]
    needed += [] if "maturity" in g.roles or "term_months" in g.roles else ["maturity"]
    needed += [] if "balance" in g.roles or "amount" in g.roles else ["balance"]
    shown = [*needed, *(r for r in ROLE_WORDS if r in g.roles and r not in needed)]
    shown = [r for r in shown if not (r == "term_months" and "maturity" in g.roles)]
    for role in shown:
        column = g.roles.get(role)
        words = f"CHECK: {g.why[role]}" if column else "CHECK: could not be guessed; name the column"
        lines.append(
            _line(f"    {role}: {quoted(column or UNKNOWN)}", f"{ROLE_WORDS[role]}. {visible(words)}")
        )
    spells = ("entry", "last_seen") if g.layout == "spells" else ()
    for role in (r for r in ("maturity", "balance", "amount", "rate", *spells) if r not in shown):
        if role != "maturity" or "term_months" not in g.roles:
            lines.append(_line(f"    #{role}: {UNKNOWN}", f"{ROLE_WORDS[role]}; none was found"))
    lines += _rate(g) + _outcome(g)
    if g.segments:
        lines.append(
            _line(f"  segments: {listed(g.segments)}", "CHECK: results are broken down by these columns")
        )
    else:
        lines.append(_line(f"  #segments: [{UNKNOWN}]", "results are broken down by these columns"))
    if g.others:
        lines.append(
            "  # Columns without a role so far; those that a term names are listed under static (constant over"
        )
        lines.append("  # a loan's life), varying or lagged (docs/own-loans.md):")
        lines.append(f"  #static: {listed(g.others)}")
    if g.layout == "panel":
        lines.append(
            _line(
                "  first_row: entry", "CHECK: a loan first seen after its opening shows its entry; or at_risk"
            )
        )
    lines.append(
        _line(
            "  #observed_until: 2025-12", "last period in which exits were recorded, if that is before as_of"
        )
    )
    lines.append(
        _line(
            "  #rules: {period_after_maturity: leave_out}", "other treatment of a finding that check reports"
        )
    )
    return "\n".join(lines)


def _rate(g: Guess) -> list[str]:
    if "rate" not in g.roles:
        return [
            _line(
                "  assume: {rate: 0.05}",
                "CHECK: no rate column was found; every loan pays this, and the report says so",
            )
        ]
    if g.percent:
        return [_line("  rate_unit: percent", "CHECK: rates look like 4.5, not like 0.045")]
    return [_line("  #rate_unit: percent", "when rates read 4.5 instead of 0.045")]


def _outcome(g: Guess) -> list[str]:
    column = g.roles.get("status")
    why = (
        f"CHECK: {visible(g.why['status'])}"
        if column
        else "CHECK: no column with the state of a loan was found"
    )
    default = listed(g.default) if g.default else "[CODE_TO_NAME]"
    lines = ["  outcome:", _line(f"    column: {quoted(column or UNKNOWN)}", why)]
    lines.append(_line(f"    default: {default}", "CHECK: codes that mean default"))
    if g.payoff:
        lines.append(_line(f"    payoff: {listed(g.payoff)}", "CHECK: codes that mean full early repayment"))
    else:
        lines.append(
            _line("    #payoff: [CODE_TO_NAME]", "codes that mean full early repayment; none was found")
        )
    if g.unwritable:
        lines.append(
            f"    # CHECK: {g.unwritable} codes hold invisible characters and cannot be named here; clean the file"
        )
    if g.performing:
        lines.append(
            _line(f"    performing: {listed(g.performing)}", "CHECK: every other code that may occur")
        )
    if g.layout == "spells":
        dated = g.roles.get("default_date")
        words = visible(g.why["default_date"]) if dated else "could not be guessed; name the column"
        lines.append(
            _line(f"    default_date: {quoted(dated or UNKNOWN)}", f"when it defaulted. CHECK: {words}")
        )
        paid = g.roles.get("payoff_date")
        if paid:
            lines.append(
                _line(
                    f"    payoff_date: {quoted(paid)}",
                    f"when it was repaid. CHECK: {visible(g.why['payoff_date'])}",
                )
            )
        elif g.payoff:
            lines.append(
                "    # Repayments without a date: at risk to the contract end (below), left out (leave_out), or refused (reject)"
            )
            lines.append(_line("    undated_payoff: observed_to_maturity", "CHECK"))
        lines.append(
            _line("    #default_after_maturity: date_at_maturity", "or keep, leave_out, reject (the default)")
        )
    return lines


def _portfolio(g: Guess) -> str:
    if g.layout == "spells" and "last_seen" not in g.roles:
        return (
            "# CHECK: the table does not say until when a loan was seen. contract ASSUMES that every loan without a dated\n"
            "# exit is on book until its contract end; a book of its own is better: portfolio: {file: book.csv}\n"
            "portfolio: {from: contract}"
        )
    return "#portfolio: {file: book.csv}    # or a book of its own, a row per loan, columns named as above"


def quarter_after(as_of: str, frequency: str) -> int:
    """The first quarter that no longer lies within the observed periods."""
    ordinal = parse_period(as_of, Frequency(frequency))
    return (ordinal + 1) // 3 if frequency == "month" else ordinal + 1


def baseline_text(start: int, *, unemployment: Sequence[float], prices: Sequence[float], why: str) -> str:
    """scenarios/baseline.yaml from a first quarter on."""
    label = format_period(start, Frequency.QUARTER)
    return f"""\
# What is expected. Other scenarios are stated as changes from it.
# {why}
scenario: baseline              # its name in every table
title: What is expected         # longer words for the report
weight: 0.7                     # CHECK: probabilities of all scenarios sum to 1; without any weight there is no weighted mean
starts: {label}                  # the first quarter after as_of

paths:                          # a path for every variable that a feature of the study uses, quarter by quarter
  unemployment_rate:            # percent
    values: {_numbers(unemployment)}
  house_price_index:
    values: {_numbers(prices)}

afterwards:                     # what comes after the last stated value: hold, or back to the mean of the history
  unemployment_rate: {{revert_to: long_run_mean, over: 8}}
  house_price_index: hold

notes:                          # free words that the report shows
  origin: Written by stresskit as a place to start from; not a forecast.
"""


def adverse_text(start: int) -> str:
    """scenarios/adverse.yaml: peaks after six quarters, back after about five years."""
    label, peak, back, later = (format_period(start + k, Frequency.QUARTER) for k in (0, 5, 19, 23))
    return f"""\
# A downturn, stated as a change from the baseline: the shock is its own, the rest follows the baseline.
scenario: adverse
title: Downturn with falling house prices
based_on: baseline              # what is not stated here is taken from there
weight: 0.3
starts: {label}

paths:
  # straight up to the peak and straight back. CHECK: sizes are examples
  unemployment_rate: {{change_from: baseline, peak_points: 4, at: {peak}, back_by: {back}}}
  house_price_index: {{change_from: baseline, peak: -20%, at: {peak}, back_by: {later}}}
  # Other ways: {{add_to: baseline, values: [1, 2, 3], then: zero}}, {{values: [6.0, 7.5, 8.0]}} (docs/scenarios.md)

notes:
  origin: Written by stresskit as a place to start from; not a forecast.
"""


def _numbers(values: Sequence[float]) -> str:
    return "[" + ", ".join(f"{v:g}" for v in values) + "]"


def macro_to_fill(first: int, last: int) -> str:
    """macro.csv with its periods and no values."""
    rows = [f"{format_period(q, Frequency.QUARTER)},," for q in range(first, last + 1)]
    return "\n".join(["period,unemployment_rate,house_price_index", *rows]) + "\n"
