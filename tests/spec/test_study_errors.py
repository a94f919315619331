"""Studies that are YAML but no study: exact words and place. Every text is the good one with one change."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.spec.load import load_study
from tests.spec.texts import changed, said

HARBOUR = "harbour_study.yaml"
PERIODS = "expected '2025-12', '2025Q4', '2025 Q4' or '2025-12-31'"
TOP = "(keys here: study, frequency, as_of, loans, portfolio, macro, hazards, recovery, moving, rates, loss, scenarios, horizon, breakdowns, years, staging, capital, adjustments, analyses)"
COLUMNS = "(keys here: loan, period, origination, maturity, term_months, balance, amount, rate, count, entry, last_seen)"
LOAN_TERM = "(keys here: loan, as, transform, reference, expect, bound)"
A_NAME = "a name that begins with a letter and holds letters, digits, '_' and '-' only, 80 at most"
A_TERM = "a term starts with one of: age, loan, macro, interaction, offset"
OUTCOME = "{column: status, default: [D], payoff: [P]}"
LGD = "{by: product, values: {fixed: 0.35, floating: 0.4}}"
AGE = "{age: spline, knots: 5, beyond: hold}"

CASES: dict[str, tuple[str, str, str]] = {
    "rate of an index": (
        "house_price_index: {unit: index, place: linear}",
        "house_price_index: {unit: index, place: linear, rate: annualised}",
        "14:53: macro.variables.house_price_index.rate: rate says what kind of growth rate a variable in percent or fraction is; "
        "this one is an index",
    ),
    # keys
    "unknown key, near a required one": ("as_of:", "as_off:", f"3:1: as_off: unknown key; did you mean 'as_of'? {TOP}"),
    "unknown key below": (
        "balance: balance",
        "ballance: balance",
        f"7:83: loans.columns.ballance: unknown key; did you mean 'balance'? {COLUMNS}",
    ),
    "unknown key, other capitals": ("rate: annual", "Rate: annual", f"7:101: loans.columns.Rate: unknown key; did you mean 'rate'? {COLUMNS}"),
    "unknown key, nothing near": ("as_of:", "xyz: 1\nas_of:", f"3:1: xyz: unknown key {TOP}"),
    "key one level too high": ("  segments:", "segments:", f"9:1: segments: unknown key here; it belongs under loans {TOP}"),
    "key one level too deep": (
        "  file: macro.csv",
        "  file: macro.csv\n  horizon: 12",
        "12:3: macro.horizon: unknown key here; it belongs at the top "
        "(keys here: file, period, only, variables, features, var)",
    ),
    "missing key": ("study: harbour-retail\n", "", f"1:1: missing key 'study': expected {A_NAME}"),
    "missing key below": ("loan: loan_id, ", "", "7:3: loans.columns: missing key 'loan': expected text of 1 to 120 characters"),
    "unknown cause": ("  payoff: {link", "  prepayment: {link", "27:3: hazards.prepayment: unknown key (keys here: default, payoff)"),
    "misspelt cause": ("  default:\n    link", "  defualt:\n    link", "19:3: hazards.defualt: unknown key; did you mean 'default'? (keys here: default, payoff)"),
    "name with a space": ("unemployment_rate: {unit", "unemployment rate: {unit", f"13:5: macro.variables.'unemployment rate': not a key that can stand here: expected {A_NAME}"),
    "segment twice": (
        "segments: [product, region]",
        "segments: [product, product]",
        "9:23: loans.segments#2: segment 'product' is stated twice",
    ),
    # texts, numbers, booleans
    "number for a name": ("study: harbour-retail", "study: 5", f"1:8: study: expected {A_NAME}, got the number 5: put it in quotes, '5'"),
    "space in a name": ("study: harbour-retail", "study: harbour retail", f"1:8: study: expected {A_NAME}, got the text 'harbour retail'"),
    "number for a code": ("[D]", "[1]", "8:39: loans.outcome.default#1: expected text, got the number 1: put it in quotes, '1'"),
    "truth for a code": ("[D]", "[D, true]", "8:42: loans.outcome.default#2: expected text, got true: put it in quotes, 'true'"),
    "empty text": ("file: loans.parquet", "file: ''", "5:9: loans.file: expected text of 1 to 120 characters, got the quoted text ''"),
    "null for a text": ("file: loans.parquet", "file: null", "5:9: loans.file: expected text of 1 to 120 characters, got null"),
    "text for a number": ("lag: 1", "lag: NO", "16:87: macro.features.unemployment_change.lag: expected a whole number from 0 to 400, got the text 'NO'"),
    "time for a number": ("over: 4", "over: 12:30", "16:79: macro.features.unemployment_change.over: expected a whole number from 1 to 400, got the text '12:30'"),
    "quoted number": ("lag: 1", "lag: '1'", "16:87: macro.features.unemployment_change.lag: expected a whole number from 0 to 400, got the quoted text '1': take the quotes off"),
    "fraction for a whole number": ("lag: 1", "lag: 1.5", "16:87: macro.features.unemployment_change.lag: expected a whole number from 0 to 400, got the number 1.5"),
    "exponent for a whole number": ("over: 4", "over: 1e2", "16:79: macro.features.unemployment_change.over: expected a whole number from 1 to 400, got the number 1e2"),
    "underscore in a number": ("over: 4", "over: 1_0", "16:79: macro.features.unemployment_change.over: expected a whole number from 1 to 400, got the text '1_0': write digits with a decimal point and nothing else, such as 1234.5"),
    "leading zero": ("over: 4", "over: 04", "16:79: macro.features.unemployment_change.over: expected a whole number from 1 to 400, got the text '04': write digits with a decimal point and nothing else, such as 1234.5"),
    "percent sign": ("floating: 0.4", "floating: 40%", "30:54: loss.lgd.values.floating: expected a number from 0 to 1, got the text '40%': write it without the percent sign, in the unit that is expected here"),
    "too small": ("lag: 1", "lag: -1", "16:87: macro.features.unemployment_change.lag: expected a whole number from 0 to 400, got the number -1"),
    "too large": ("floating: 0.4", "floating: 1.4", "30:54: loss.lgd.values.floating: expected a number from 0 to 1, got the number 1.4"),
    "truth for a number": ("lag: 1", "lag: false", "16:87: macro.features.unemployment_change.lag: expected a whole number from 0 to 400, got false"),
    "word for a truth": ("    link: cloglog\n", "    link: cloglog\n    intercept: no\n", "21:16: hazards.default.intercept: expected true or false, got the text 'no'"),
    "number for a truth": ("    link: cloglog\n", "    link: cloglog\n    intercept: 0\n", "21:16: hazards.default.intercept: expected true or false, got the number 0"),
    "size in the wrong unit": ("  segments", "  memory_limit: 2TB\n  segments", "9:17: loans.memory_limit: expected a size such as 500MB or 2GB, got the text '2TB'"),
    # choices
    "unknown choice": ("frequency: month ", "frequency: week ", "2:12: frequency: expected 'month' or 'quarter', got the text 'week'"),
    "misspelt choice": ("link: cloglog\n", "link: cloglogg\n", "20:11: hazards.default.link: expected 'cloglog' or 'logit', got the text 'cloglogg'; did you mean 'cloglog'?"),
    "choice or number, misspelt": ("discount: rate", "discount: rates", "31:13: loss.discount: expected 'rate', 'rate_path', 'none' or a number from -0.05 to 1; got the text 'rates'; did you mean 'rate'?"),
    "choice or number, out of range": ("discount: rate", "discount: 5", "31:13: loss.discount: expected a number from -0.05 to 1, got the number 5"),
    "choice or number, a list": ("discount: rate", "discount: [rate]", "31:13: loss.discount: expected 'rate', 'rate_path', 'none' or a number from -0.05 to 1; got a list of 1 item"),
    # lists and mappings
    "text for a list": ("[D]", "D", "8:38: loans.outcome.default: expected a list of at least 1 text, got the text 'D': write [D]"),
    "empty list": ("[scenarios/baseline.yaml, scenarios/deep_recession.yaml]", "[]", "32:12: scenarios: expected a list of at least 1 text, got an empty list"),
    "mapping for a list": ("[{age: steps, bands: [12, 24, 36]}, {loan: product, as: category}]", "{age: steps}", "27:34: hazards.payoff.terms: expected a list of items, got a mapping with key age: begin each item with '- '"),
    "text for a mapping": ("{schedule: annuity}", "annuity", "29:13: loss.exposure: expected {schedule: ..., accrued: ..., interest_only: ...}, got the text 'annuity'"),
    "pair of one": ("[product, unemployment_change]", "[product]", "26:23: hazards.default.terms#5.interaction: expected a list of 2 items, got a list of 1 item"),
    "pair of three": ("[product, unemployment_change]", "[product, age, x]", "26:23: hazards.default.terms#5.interaction: expected a list of 2 items, got a list of 3 items"),
    "list of numbers with a text": ("knots: 5", "knots: [12, x]", "22:35: hazards.default.terms#1.knots#2: expected a number, got the text 'x'"),
    "neither number nor list": ("knots: 5", "knots: many", "22:30: hazards.default.terms#1.knots: expected a whole number from 1 to 30 or a list of numbers; got the text 'many'"),
    # one of several mappings
    "no such term": (AGE, "{column: ltv}", f"22:9: hazards.default.terms#1: {A_TERM}; got a mapping with key column"),
    "term as a text": (AGE, "ltv", f"22:9: hazards.default.terms#1: {A_TERM}; got the text 'ltv'"),
    "misspelt kind of term": (AGE, "{lone: ltv, as: category}", f"22:10: hazards.default.terms#1.lone: unknown key; did you mean 'loan'? {LOAN_TERM}"),
    "misspelt key of a term": ("transform: standardise", "trasform: standardise", f"24:30: hazards.default.terms#3.trasform: unknown key; did you mean 'transform'? {LOAN_TERM}"),
    "misspelt shape of age": ("age: spline", "age: splines", "22:15: hazards.default.terms#1.age: expected 'spline', 'steps', 'linear', 'log' or 'quadratic', got the text 'splines'; did you mean 'spline'?"),
    "misspelt kind of loss given default": (LGD, "{constnat: 0.4}", "30:9: loss.lgd.constnat: unknown key; did you mean 'constant'? (keys here: constant)"),
    "number for loss given default": (LGD, "0.4", "30:8: loss.lgd: expected {constant: ...}, {by: ..., values: ...}, {collateral: ...} or {recovery: ...}; got the number 0.4"),
    "text for an outcome": (OUTCOME, "status", "8:12: loans.outcome: expected {column: ..., default: ...}, {default_flag: ...} or {column: ..., default: ..., default_date: ...}; got the text 'status'"),
    "misspelt key of an outcome": (OUTCOME, "{column: s, default: [D], default_dat: x}", "8:38: loans.outcome.default_dat: unknown key; did you mean 'default_date'? (keys here: column, default, payoff, performing, default_date, payoff_date, undated_payoff, default_after_maturity)"),
    # periods
    "no such month": ("as_of: 2025-12", "as_of: 2025-13", f"3:8: as_of: '2025-13' has no month 13: {PERIODS}"),
    "no such day": ("as_of: 2025-12", "as_of: 2025-02-30", f"3:8: as_of: '2025-02-30' is not a date: {PERIODS}"),
    "no such quarter": ("as_of: 2025-12", "as_of: 2025Q5", f"3:8: as_of: '2025Q5' is not a period: {PERIODS}"),
    "year alone": ("as_of: 2025-12", "as_of: 2025", f"3:8: as_of: '2025' is not a period: {PERIODS}"),
    "time": ("as_of: 2025-12", "as_of: 12:30", f"3:8: as_of: '12:30' is not a period: {PERIODS}"),
    "decimal number": ("as_of: 2025-12", "as_of: 2025.12", "3:8: as_of: expected a period such as 2025-12, 2025Q4 or 2025-12-31, got the number 2025.12"),
    "counter without a period": ("  segments", "  counter_starts: 1\n  segments", f"9:19: loans.counter_starts: '1' is not a period: {PERIODS}"),
    "end of observation": ("  segments", "  observed_until: 2025-00\n  segments", f"9:19: loans.observed_until: '2025-00' has no month 0: {PERIODS}"),
    # what fits by itself and not together: the validators' own words
    "panel without period": ("period: month, ", "", "7:3: loans.columns: layout 'panel' needs columns.period"),
    "spells without dates": ("layout: panel", "layout: spells", "8:3: loans.outcome: layout 'spells' needs outcome with default_date; layout 'panel' needs outcome with column or default_flag"),
    "two ends of contract": ("maturity: matures", "maturity: matures, term_months: t", "7:83: loans.columns.term_months: give columns.maturity or columns.term_months, not both"),
    "no hazard of default": ("  default:\n    link", "  payoff:\n    link", "27:3: hazards.payoff: duplicate key, given first at line 19, column 3"),
    "no such feature": ("macro: unemployment_change", "macro: unemployment_chng", "26:33: hazards.default.terms#5.interaction#2: interaction of 'unemployment_change': no such term; did you mean 'unemployment_chng'? (terms: age, unemployment_chng, ltv_at_start, product, product:unemployment_change)"),
    "no such variable": ("of: house_price_index", "of: house_prices", "17:27: macro.features.house_price_growth.of: no macro variable 'house_prices'; did you mean 'house_price_index'? (macro.variables: house_price_index, unemployment_rate)"),
    "term stated twice": ("{loan: ltv_at_start, transform: standardise}", "{loan: product}", "25:9: hazards.default.terms#4: stated twice: product"),
    "knots of steps": ("age: spline, knots", "age: steps, knots", "22:22: hazards.default.terms#1.knots: knots belong to age: spline"),
    "falling bands": ("[12, 24, 36]", "[12, 36, 24]", "27:48: hazards.payoff.terms#1.bands: bands must rise"),
    "bound of a category": ("reference: fixed", "bound: positive", "25:39: hazards.default.terms#4.bound: bound belongs to as: number"),
    "bound against the expected sign": ("expect: positive", "expect: positive, bound: negative", "23:56: hazards.default.terms#2.bound: bound is negative, but expect is positive"),
    "ridge below 0": ("    link: cloglog\n", "    link: cloglog\n    ridge: -1\n", "21:12: hazards.default.ridge: expected a number at least 0, got the number -1"),
    "separation left to a ridge that is not there": ("    link: cloglog\n", "    link: cloglog\n    when_separated: ridge\n", "21:5: hazards.default.when_separated: the choice ridge needs a ridge above 0"),
    "two penalties": ("    link: cloglog\n", "    link: cloglog\n    ridge: 1\n    bias_reduction: firth\n", "22:5: hazards.default.bias_reduction: firth and ridge are two penalties: state one"),
    "reference of a number": ("as: category, reference", "reference", "25:25: hazards.default.terms#4.reference: reference belongs to as: category"),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_words_and_place(name: str, tmp_path: Path) -> None:
    old, new, expected = CASES[name]
    assert said(tmp_path / "x.yaml", changed(HARBOUR, (old, new)), load_study) == f"file:{expected}"


def test_all_errors_are_told_and_the_first_in_the_text_is_the_place(tmp_path: Path) -> None:
    text = changed(
        HARBOUR,
        ("discount: rate", "discount: rates"),
        ("as_of: 2025-12", "as_of: 2025-13"),
        ("layout: panel", "layuot: panel"),
        ("lag: 1", "lag: NO"),
    )
    lines = said(tmp_path / "x.yaml", text, load_study).splitlines()
    assert lines[0] == f"file:3:8: as_of: '2025-13' has no month 13: {PERIODS}"
    assert lines[1] == "3 more errors:"
    assert lines[2].startswith("  file:6:3: loans.layuot: unknown key; did you mean 'layout'?")
    assert lines[3].startswith(
        "  file:16:87: macro.features.unemployment_change.lag: expected a whole number"
    )
    assert lines[4].startswith(
        "  file:31:13: loss.discount: expected 'rate', 'rate_path', 'none' or a number"
    )
    assert len(lines) == 5


def test_no_hazard_of_default(tmp_path: Path) -> None:
    whole = changed(HARBOUR)
    first, second = whole.index("  default:\n"), whole.index("  payoff:")
    text = whole[:first] + whole[second:]
    assert said(tmp_path / "x.yaml", text, load_study) == "file:18:1: hazards: hazards needs 'default'"


def test_feature_that_no_macro_section_has(tmp_path: Path) -> None:
    text = changed(
        HARBOUR,
        ("macro: unemployment_change", "macro: rent"),
        ("product, unemployment_change", "product, rent"),
    )
    expected = (
        "file:23:10: hazards.default.terms#2.macro: no macro feature 'rent' "
        "(macro.features: house_price_growth, unemployment_change)"
    )
    assert said(tmp_path / "x.yaml", text, load_study) == expected


def test_many_errors_are_cut_and_counted(tmp_path: Path) -> None:
    labels = ", ".join(f"s{i}: x" for i in range(150))
    text = changed(HARBOUR, ("{fixed: 0.35, floating: 0.4}", "{" + labels + "}"))
    lines = said(tmp_path / "x.yaml", text, load_study).splitlines()
    assert lines[0] == "file:30:35: loss.lgd.values.s0: expected a number from 0 to 1, got the text 'x'"
    assert lines[1] == "at least 99 more errors:"
    assert lines[-1] == "  and at least 80 more"
    assert len(lines) == 2 + 19 + 1


def test_scenario_where_a_study_was_expected(tmp_path: Path) -> None:
    said_of_scenario = said(tmp_path / "x.yaml", "# title\nscenario: a\nstarts: 2026Q1\n", load_study)
    assert said_of_scenario == "file:2:1: this file is a scenario, where a study was expected"
