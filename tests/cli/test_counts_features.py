"""Lines that stand for several loans, against the same lines written out, for all that a study can name of a loan."""

from __future__ import annotations

import contextlib
import json
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from unittest import mock

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.loss.provision_inputs import missing_days
from stresskit.runs.api import load_study
from stresskit.runs.cautions import assumptions
from stresskit.spec.provisions import Staging
from tests.cli import pools
from tests.cli.pools import STUDY, both, same_tables, same_words, write_forms
from tests.cli.small_study import reworded
from tests.program import stresskit

Tables = dict[str, pd.DataFrame]
SMALL = "a small book made up for this test"

CONTRACTS = """\
moving:
  ltv: {balance_over_value: {value: price, index: {by: place, of: {east: house_east, west: house_west}}}}
  usage: {balance_over_limit: {limit: line_limit}}
  spread: {rate_less: {variable: policy_rate}}
  since: {periods_since: {date: failed_before, never: 60, cap: 60}}
rates:
  by: product
  values:
    fixed: fixed
    floating: {index: policy_rate, margin: margin, floor: 0.01, cap: 0.09, reset_months: 3}
hazards:
  default:
    terms:
      - {age: log}
      - {macro: unemployment_change, expect: positive}
      - {loan: ltv}
      - {loan: spread, transform: standardise}
      - {loan: since}
      - {loan: product, as: category, reference: fixed}
  payoff: {terms: [{age: linear}, {loan: usage}]}
loss:
  exposure:
    by: kind
    values:
      term: {schedule: annuity, interest_only: waits, accrued: 3}
      linear: {schedule: linear, balloon: 0.2}
      whole: {schedule: annuity, balloon: due_at_end}
      card: {schedule: revolving, limit: line_limit, ccf: ccf, utilisation: drawn, accrued: 1}
      given: {schedule: supplied, file: given.csv}
  lgd:
    collateral:
      value: price
      index: {by: place, of: {east: house_east, west: house_west}}
      haircut: 0.2
      cost: 0.05
      floor: 0.05
  discount: rate_path
years: {first: 3, balance_sheet: [run_off, constant]}
staging:
  at_origination: {conditions: baseline}
  ratio: 2.0
  increase: 0.02
  backstop_pd: 0.6
  low_risk: 0.001
  stays_years: 1
  past_due: {column: days, days: 30}
  defaulted_lgd: 0.4
capital:
  class: product
  values: {fixed: residential_mortgage, floating: corporate}
  secured: {floating: receivables}
  stressed_weight: 0.5
  downturn_lgd: {fixed: 0.25}
  turnover: sales
  maturity: remaining
adjustments:
  floors: {pd_12m: 0.05, lgd: 0.2}
  overlays:
    - {name: east_flood, reason: claims after the flood, where: {place: [east]}, multiply: 1.2, on: el_12m}
    - {name: flat, reason: a flat sum for some, where: {product: [fixed], place: [west]}, add: 1000, scenarios: [slump]}
"""
#: Payments over income, values that are updated in the file, other estimators, other options of staging and capital.
PAYMENTS = f"""\
moving:
  burden: {{payment_over: {{income: income, index: wages, valued: as_of}}}}
  ltv: {{balance_over_value: {{value: price, index: {{by: place, of: {{east: house_east, west: house_west}}}}, valued: as_of}}}}
  now: {{rate: {{}}}}
hazards:
  default:
    link: logit
    ridge: 1.0
    covariance: period_jackknife
    accept: {{levels: {SMALL}}}
    terms:
      - {{age: spline, knots: 2}}
      - {{macro: unemployment_change, bound: positive}}
      - {{macro: house_growth, transform: standardise}}
      - {{loan: burden, transform: log}}
      - {{loan: ltv, transform: standardise}}
      - {{loan: place, as: category}}
      - {{loan: product, as: category}}
      - {{interaction: [place, unemployment_change]}}
  payoff:
    bias_reduction: firth
    covariance: period_hac
    accept: {{actual_expected: firth moves the level of the fit, levels: {SMALL}}}
    terms: [{{age: steps, bands: [12, 24]}}, {{loan: now}}, {{loan: score, transform: standardise}}, {{offset: shift}}]
loss:
  exposure: {{schedule: annuity, interest_only: waits, balloon: due_at_end}}
  lgd: {{by: product, values: {{fixed: 0.3, floating: 0.45}}}}
  discount: 0.03
  timing: end
horizon: 40
staging: {{increase: 0.02, at_origination: {{column: pd_then}}}}
capital:
  class: product
  values: {{fixed: qualifying_revolving, floating: other_retail}}
  stressed_weight: 0.5
  long_run: {{column: pd_then}}
  input_floors: false
"""
WORKOUTS = f"""\
recovery:
  cases: workouts.csv
  columns: {{case: case, default: failed, amount: due, closed: closed, kind: how}}
  kinds: {{write_off: [LOST], cure: [CURED]}}
  flows: {{file: flows.csv, columns: {{case: case, date: paid, recovery: received, cost: cost}}}}
  discount: 0.04
  end: 24
  by: [product]
  static: [score]
  resamples: 20
  hazard:
    accept: {{events_per_coefficient: {SMALL}}}
    terms: [{{age: linear}}, {{macro: unemployment_change}}, {{loan: score}}]
  cure_hazard: {{accept: {{events_per_coefficient: {SMALL}}}, terms: [{{age: linear}}]}}
hazards:
  default:
    accept: {{levels: {SMALL}}}
    terms: [{{age: log, beyond: weibull}}, {{macro: unemployment_change}}, {{loan: score}}, {{loan: product, as: category}}]
loss:
  exposure: {{schedule: annuity}}
  lgd: {{recovery: hazard, floor: 0.05}}
years: {{first: 3, balance_sheet: [run_off, constant]}}
staging: {{ratio: 2.0, past_due: {{column: days}}}}
adjustments: {{floors: {{lgd: 0.3}}}}
"""
BOOK = f"""\
portfolio: {{file: book.csv}}
hazards:
  default:
    accept: {{levels: {SMALL}}}
    when_separated: pool
    terms:
      - {{age: log, beyond: loglogistic}}
      - {{macro: unemployment_change}}
      - {{loan: score}}
      - {{loan: rare, as: category}}
loss: {{exposure: {{schedule: linear}}, lgd: {{constant: 0.4}}}}
breakdowns: [[product, kind]]
staging: {{ratio: 2.0, past_due: {{column: days}}}}
analyses:
  reverse: {{pd_12m: 45%, segment: {{product: fixed}}, surface: none, starts: 1, most_projections: 30}}
  model_choice: {{without_last_years: [1], lags: [1], out_of_time: 6}}
"""
SPELLS = f"""\
portfolio: {{from: contract}}
moving:
  ltv: {{balance_over_value: {{value: price, index: house_east}}}}
hazards:
  default:
    accept: {{levels: {SMALL}, events_per_coefficient: {SMALL}}}
    terms: [{{age: log}}, {{macro: unemployment_change}}, {{loan: product, as: category}}, {{loan: ltv}}]
  payoff: {{accept: {{levels: {SMALL}}}, terms: [{{age: linear}}, {{loan: product, as: category}}]}}
loss:
  exposure: {{schedule: annuity}}
  lgd: {{collateral: {{value: price, index: house_east, valued: as_of, haircut: 0.3}}}}
staging: {{ratio: 2.0, defaulted_lgd: 0.5}}
years: {{first: 2, balance_sheet: [run_off, constant]}}
"""
AS_SPELLS = (
    ("layout: panel", "layout: spells"),
    ("period: month, ", ""),
    ("maturity: matures, balance: owed", "term_months: term, entry: seen"),
    ("{column: state, default: [D], payoff: [P]}", "{column: state, default: [D], payoff: [P], performing: [C], default_date: failed, "
     "payoff_date: repaid, undated_payoff: observed_to_maturity, default_after_maturity: date_at_maturity}"),
)  # fmt: skip
MOVES = ("  segments:", "  varying: [price]\n  lagged: [income]\n  segments:")
CARRIED = ("  segments:", "  static: [score]\n  segments:")


def _contracts() -> Tables:
    """With a supplied schedule: balances of the whole line."""
    frame = pools.lines(110)
    now = pd.Period("2020-12")
    rows: list[dict[str, Any]] = []
    for r in frame[frame["month"] == "2020-12"].to_dict("records"):
        left = (pd.Period(r["matures"]) - now).n
        rows += [
            {"loan": r["id"], "period": str(now + h), "balance": r["owed"] * (1 - (h / left) ** 1.3), "n": r["n"]}
            for h in range(1, left)
        ]  # fmt: skip
    return {"loans.csv": frame, "given.csv": pd.DataFrame(rows)}


def _dirty() -> Tables:
    """Gaps, lines that cannot be used, and lines of the book without what a projection needs."""
    frame = pools.lines(150)
    number = frame["id"].str[1:].astype(int)
    last = frame["month"] == "2020-12"
    frame["shift"] = 0.1 * (number % 3)
    frame.loc[number % 31 == 5, "score"] = np.nan
    frame.loc[number % 37 == 5, "opened"] = None
    frame.loc[last & (number % 41 == 5), "interest"] = None
    frame.loc[last & (number % 29 == 5), "owed"] = None
    return {"loans.csv": frame[(number % 9 != 0) | ~frame["month"].isin(["2019-05", "2019-06"])]}


def _with_workouts() -> Tables:
    rng = np.random.default_rng(5)
    cases: list[dict[str, Any]] = []
    flows: list[dict[str, Any]] = []
    for i in range(90):
        failed, owed = pd.Period("2017-01") + int(rng.integers(0, 40)), float(rng.uniform(1e3, 2e4))
        case = {"case": f"W{i}", "failed": str(failed), "due": owed, "closed": "", "how": ""}
        for t in range(1, 25):
            if failed + t > pd.Period("2020-12"):
                break
            if rng.random() < 0.25:
                paid = owed * rng.uniform(0.1, 0.5)
                owed -= paid
                flows.append(
                    {"case": f"W{i}", "paid": str(failed + t), "received": paid, "cost": 0.02 * paid}
                )
            if t > 8 and rng.random() < 0.1:
                case |= {"how": "LOST" if i % 3 else "CURED", "closed": str(failed + t)}
                break
        cases.append(case | {"product": ("fixed", "floating")[i % 2], "score": rng.normal()})
    return {"loans.csv": pools.lines(), "workouts.csv": pd.DataFrame(cases), "flows.csv": pd.DataFrame(flows)}


def _with_book() -> Tables:
    """A level of a loan column without events; a book with a copy of a line and a line without a score."""
    frame = pools.lines()
    number = frame["id"].str[1:].astype(int)
    frame["rare"] = np.select(
        [frame["id"].isin(["L0003", "L0010"]), number % 4 == 0], ["none", "other"], "usual"
    )
    frame["state"] = frame["state"].mask((frame["rare"] == "none") & (frame["state"] == "D"), "C")
    book = pools.lines(60, seed=99).query("month == '2020-12'").drop(columns=["month", "state"])
    book["rare"] = np.where(np.arange(len(book)) % 4 == 0, "other", "usual")
    book["id"] = "B" + book["id"]
    book = pd.concat([book, book.iloc[[5]]], ignore_index=True)
    book.loc[3, "score"] = np.nan
    return {"loans.csv": frame, "book.csv": book}


def _spells() -> Tables:
    """A row per line, some with a later entry, a payoff without a date, or without an origination."""
    rng = np.random.default_rng(3)
    rows = []
    for i in range(260):
        opened, term, count = (
            pd.Period("2016-06") + int(rng.integers(0, 44)),
            int(rng.choice([36, 60])),
            (1, 2, 3, 5)[i % 4],
        )
        line = {
            "id": f"L{i:04d}", "opened": str(opened), "term": term, "lent": rng.uniform(5e3, 5e4) * count,
            "interest": rng.uniform(0.03, 0.08), "state": "C", "failed": "", "repaid": "", "seen": "",
            "product": ("fixed", "floating")[i % 2], "place": ("east", "west")[i % 3 > 0], "n": count,
        }  # fmt: skip
        line["price"] = line["lent"] * 1.3
        months = min(term, (pd.Period("2020-12") - opened).n)
        draws = rng.random(months)
        hit = np.flatnonzero(draws < 0.018 + 0.006 * (i % 2))
        if hit.size:
            when = str(opened + int(hit[0]) + 1)
            failed = draws[hit[0]] < 0.006 * (1 + i % 2)
            line |= (
                {"state": "D", "failed": when} if failed else {"state": "P", "repaid": when if i % 11 else ""}
            )
        if i % 5 == 0 and (hit.size == 0 or hit[0] > 6):
            line["seen"] = str(opened + int(rng.integers(1, 5)))
        if i == 7:
            line["opened"] = ""
        rows.append(line)
    return {"loans.csv": pd.DataFrame(rows)}


@dataclass(frozen=True)
class Case:
    """A study, its tables, further words of ``run``, and files that the run must hold."""

    rest: str
    tables: Callable[[], Tables]
    changes: tuple[tuple[str, str], ...] = ()
    words: tuple[str, ...] = ("--no-evidence",)
    files: frozenset[str] = field(default_factory=frozenset)

    @property
    def study(self) -> str:
        return reworded(STUDY, *self.changes) + self.rest


#: The case whose report page is read.
READ = "payments"
WHAT_IF = ("--what-if", "unemployment_rate + 4 over 4 quarters")
CASES = {
    "contracts": Case(
        CONTRACTS, _contracts, (), WHAT_IF, frozenset({"years.csv", "adjustments.csv", "evidence/auc.csv"})
    ),
    "payments": Case(PAYMENTS, _dirty, (MOVES,)),
    "workouts": Case(WORKOUTS, _with_workouts, (CARRIED,)),
    "book": Case(BOOK, _with_book, files=frozenset({"analyses/reverse/paths.csv"})),
    "spells": Case(SPELLS, _spells, AS_SPELLS),
}  # fmt: skip


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("features")


@pytest.fixture(scope="module", params=list(CASES))
def ran(request: pytest.FixtureRequest, place: Path) -> tuple[str, Path, list[Any]]:
    """Name of the case, folder with both forms and their runs, what they printed."""
    case = CASES[request.param]
    folder = write_forms(place / request.param, case.study, case.tables())
    with contextlib.nullcontext() if request.param == READ else without_page():
        return request.param, folder, both(folder, "run", "study.yaml", "--out", "run", *case.words)


def without_page() -> contextlib.AbstractContextManager[Any]:
    """Runs without the pictures of their report page, which take most of the time and are not looked at here."""
    return mock.patch("stresskit.report.folder.write_report", lambda result, file: file.write_text("no page"))


@pytest.mark.slow
def test_a_run_is_that_of_the_lines_written_out(ran: tuple[str, Path, list[Any]]) -> None:
    name, folder, (lines, loans) = ran
    files = same_tables(folder, "run")
    assert {"summary.csv", "loans.parquet", "segments.parquet"} | CASES[name].files <= files
    same_words(lines["cautions"], loans["cautions"])
    checked = both(folder, "check", "study.yaml")
    reasons = [pd.DataFrame(told["not_projected"]) for told in checked]
    pools.same(*reasons, "not projected")
    facts = [
        pd.Series(told["facts"]).drop(["lines_at_risk", "book_lines"], errors="ignore") for told in checked
    ]
    assert facts[0].index.tolist() == facts[1].index.tolist()
    for key, value in facts[0].items():
        other = facts[1][key]
        assert value == (pytest.approx(other, rel=pools.EXACT) if isinstance(value, float) else other), key


@pytest.mark.slow
@pytest.mark.parametrize("ran", [READ], indirect=True)
def test_loans_of_unknown_balance_are_counted_by_loans(ran: tuple[str, Path, list[Any]]) -> None:
    _, folder, _ = ran
    told = [
        re.findall(r">([\d,]+ unknown)<", (folder / k / "run" / "report.html").read_text())
        for k in pools.KINDS
    ]
    assert told[0] == told[1]
    assert told[0]


@pytest.mark.slow
@pytest.mark.parametrize("ran", ["contracts", "workouts", "book"], indirect=True)
def test_the_analyses_of_their_own_are_those_of_the_lines_written_out(
    ran: tuple[str, Path, list[Any]],
) -> None:
    """Projection with a given model, attribution, evidence and LGD by their commands; verify and compare."""
    name, folder, _ = ran
    models = ("--models", "run/models")
    with without_page():
        if name == "contracts":
            both(folder, "explain", "study.yaml", *models, "--out", "why")
            assert {"variables.csv", "channels.csv", "elasticities.csv"} <= same_tables(folder, "why")
            both(folder, "project", "study.yaml", *models, "--out", "again", "--no-evidence")
            assert "years.csv" in same_tables(folder, "again")
        if name == "workouts":
            both(folder, "lgd", "study.yaml", "--out", "lgd")
            assert same_tables(folder, "lgd")
        if name == "book":
            done = stresskit("verify", "run", cwd=folder / "lines")
            assert done.returncode == 0, done.stdout
            for kind in pools.KINDS:
                text = (folder / kind / "study.yaml").read_text()
                other = reworded(text[: text.index("analyses:")], ("constant: 0.4", "constant: 0.5"))
                (folder / kind / "other.yaml").write_text(other)
            both(folder, "project", "other.yaml", *models, "--out", "other", "--no-evidence")
            both(folder, "compare", "run", "other", "--out", "change")
            assert "losses.csv" in same_tables(folder, "change")


@pytest.mark.slow
def test_all_counts_times_a_number_gives_that_many_loans_and_the_same_book(tmp_path: Path) -> None:
    """2.5, 5, 7.5 and 12.5 loans to a line against 1, 2, 3 and 5: amounts of lines stay as they are."""
    study = reworded(STUDY, ("  segments:", "  static: [score]\n  segments:")) + (
        "hazards:\n  default: {terms: [{age: log}, {macro: unemployment_change}, {loan: score, transform: standardise},\n"
        "    {loan: product, as: category}]}\n"
        "loss: {exposure: {schedule: annuity}, lgd: {constant: 0.4}}\n"
        "staging: {ratio: 1.2, past_due: {column: days}}\n"
    )
    tables = []
    for name, times in (("once", 1.0), ("more", 2.5)):
        pools.write_inputs(tmp_path / name, study)
        frame = pools.lines(110)
        frame.assign(n=frame["n"] * times).to_csv(tmp_path / name / "loans.csv", index=False)
        with without_page():
            done = stresskit("run", "study.yaml", "--out", "run", "--no-evidence", cwd=tmp_path / name)
        assert done.returncode == 0, done.stderr
        tables.append([pd.read_csv(tmp_path / name / "run" / f) for f in ("summary.csv", "years.csv")])
    for once, more in zip(*tables, strict=True):
        numbers = [c for c in once if "loans" in c]
        assert numbers
        assert np.allclose(2.5 * once[numbers], more[numbers], rtol=pools.EXACT, atol=1e-9, equal_nan=True)
        pools.same(once.drop(columns=numbers), more.drop(columns=numbers), "all but numbers of loans")


def test_an_amount_that_a_hazard_reads_is_said_wherever_the_study_declares_it(tmp_path: Path) -> None:
    """Balance and amount by their roles; a limit, a value, an income and an amount due by what reads them."""
    terms = "".join(f", {{loan: {n}}}" for n in ("lent", "line_limit", "due_at_end"))
    study = reworded(WORKOUTS, ("{age: log, beyond: weibull}", "{age: log}" + terms), ("schedule: annuity", "by: kind, values: {"
        "card: {schedule: revolving, limit: line_limit}, term: {schedule: annuity, balloon: due_at_end}}"),
        ("    terms: [{age: linear}, {macro: unemployment_change}, {loan: score}]", "    terms: [{age: linear}, {loan: lent}]"),
    )  # fmt: skip
    pools.write_inputs(tmp_path / "here", STUDY + study)
    told = " ".join(assumptions(load_study(tmp_path / "here" / "study.yaml").study))
    for hazard, column in (
        ("default", "lent"),
        ("default", "line_limit"),
        ("default", "due_at_end"),
        ("recovery", "lent"),
    ):
        assert f"The {hazard} hazard reads {column}, an amount of the whole line" in told
    assert told.count("an amount of the whole line") == 4


def test_a_line_whose_count_is_not_known_is_one_loan_in_every_table(tmp_path: Path) -> None:
    study = reworded(STUDY, ("  segments:", "  rules: {count_not_positive: leave_out}\n  segments:"))
    pools.write_inputs(tmp_path / "here", study + BOOK[BOOK.index("hazards") : BOOK.index("    when")] + "    terms: [{age: log}]\n"
                       "loss: {lgd: {constant: 0.4}}\n")  # fmt: skip
    frame = pools.lines(60)
    gone = frame.loc[frame["month"] == "2020-12", "id"].iloc[0]
    frame.loc[frame["id"] == gone, "n"] = 0
    frame.to_csv(tmp_path / "here" / "loans.csv", index=False)
    done = stresskit("check", "study.yaml", "--json", cwd=tmp_path / "here")
    assert done.returncode == 0, done.stderr
    reasons = {r["reason"]: r["loans"] for r in json.loads(done.stdout)["not_projected"]}
    assert reasons["count_not_positive: n"] == 1


def test_part_of_a_loan_without_days_past_due_is_not_none() -> None:
    book = Portfolio(
        frequency=Frequency.MONTH, as_of=0, loan_ids=np.array(["a", "b"], dtype=object), age=np.ones(2, dtype=np.int64),
        remaining=np.ones(2, dtype=np.int64), balance=np.ones(2), rate=np.zeros(2), static={"days": np.array([np.nan, 5.0])},
        count=np.array([0.5, 4.0]),
    )  # fmt: skip
    rule = Staging.model_validate({"ratio": 2.0, "past_due": {"column": "days"}})
    assert missing_days(rule, book) == 0.5
