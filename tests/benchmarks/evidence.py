"""``python -m tests.benchmarks evidence [--quick] [--json]``: what attribution and reverse stress cost, in projections.

A study of its own: an invented quarterly history of six macro variables, hazards that read all six, a book of 100,000 loans
projected over 60 quarters. One projection and the analyses are timed in turn, round by round; what is printed is the
median of the rounds, in seconds and as a multiple of one projection of the same book.
"""

from __future__ import annotations

import argparse
import importlib
import importlib.util
import json
import os
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from rich.console import Console
from rich.table import Table

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.runs.api import checked_setting
from stresskit.runs.setting import Setting
from stresskit.spec.attribution import Attribution
from stresskit.spec.reverse import Reverse

VARIABLES = {
    "unemployment_rate": ("percent", 5.0), "house_price_index": ("index", 150.0), "policy_rate": ("percent", 3.0),
    "gdp_index": ("index", 100.0), "credit_spread": ("percent", 1.8), "income_index": ("index", 100.0),
}  # fmt: skip
#: Variables of the VAR, and of the reverse stress: three over twelve quarters.
FREE = ("unemployment_rate", "house_price_index", "policy_rate")
QUARTERS = 60


def _study() -> str:
    variables = "".join(f"    {n}: {{unit: {unit}}}\n" for n, (unit, _) in VARIABLES.items())
    features = "".join(
        f"    f_{n}: {{of: {n}, transform: {'log_growth' if unit == 'index' else 'difference'}, over: 4, lag: 1}}\n"
        for n, (unit, _) in VARIABLES.items()
    )
    var = ", ".join(f"{n}: {'log_difference' if VARIABLES[n][0] == 'index' else 'difference'}" for n in FREE)
    terms = "".join(f"      - {{macro: f_{n}}}\n" for n in VARIABLES)
    return f"""\
study: evidence-costs
frequency: quarter
as_of: 2025Q4
horizon: {QUARTERS}
loans:
  file: history.parquet
  layout: panel
  columns: {{loan: id, period: quarter, origination: opened, maturity: matures, balance: owed, rate: interest}}
  outcome: {{column: state, default: [D], payoff: [P]}}
  segments: [grade]
portfolio: {{file: book.parquet}}
macro:
  file: macro.csv
  variables:
{variables}  features:
{features}  var: {{variables: {{{var}}}, lags: 1}}
hazards:
  default:
    link: cloglog
    accept: {{}}
    terms:
      - {{age: log}}
      - {{loan: grade, as: category, reference: A}}
{terms}  payoff:
    link: cloglog
    terms:
      - {{age: log}}
      - {{macro: f_policy_rate}}
loss:
  exposure: {{schedule: annuity}}
  lgd: {{by: grade, values: {{A: 0.2, B: 0.3, C: 0.4}}}}
  discount: rate
scenarios: [baseline.yaml, storm.yaml]
"""


def _macro(rng: np.random.Generator) -> pd.DataFrame:
    quarters = pd.period_range("1996Q1", "2025Q4", freq="Q")
    out = {"period": quarters.astype(str)}
    for name, (unit, end) in VARIABLES.items():
        walk = np.cumsum(rng.normal(size=len(quarters)))
        out[name] = (
            end * np.exp(0.01 * (walk - walk[-1])) if unit == "index" else end + 0.15 * (walk - walk[-1])
        )
    return pd.DataFrame(out)


def _history(rng: np.random.Generator, macro: pd.DataFrame, loans: int) -> pd.DataFrame:
    """A panel whose defaults answer to all six variables."""
    quarters = pd.PeriodIndex(macro["period"], freq="Q")
    push = np.zeros(len(quarters))
    for name, (unit, _) in VARIABLES.items():
        x = macro[name].to_numpy()
        change = np.zeros(x.size)
        change[5:] = (np.log(x[4:-1] / x[:-5]) * 10 if unit == "index" else x[4:-1] - x[:-5]) * 0.25
        push += change if name in ("unemployment_rate", "policy_rate", "credit_spread") else -change
    first = 20
    rows = []
    for i in range(loans):
        start, term = int(rng.integers(first, len(quarters) - 8)), 60
        grade, rate = str(rng.choice(list("ABC"))), float(rng.uniform(0.03, 0.08))
        for t in range(start, min(len(quarters), start + term)):
            age = t - start + 1
            hazard = np.exp(-5.5 + 0.4 * np.log(age) + push[t] + 0.4 * "ABC".index(grade))
            odds = np.expm1(min(hazard, 1.0)), np.expm1(np.exp(-4.2))
            draw = rng.random() * (1 + sum(odds))
            state = "D" if draw < odds[0] else "P" if draw < sum(odds) else "C"
            rows.append((i, t, start, start + term - 1, 1e4 * (1 - age / (term + 1)), rate, state, grade))
            if state != "C":
                break
    frame = pd.DataFrame(
        rows, columns=["id", "quarter", "opened", "matures", "owed", "interest", "state", "grade"]
    )
    frame["id"] = np.char.add("H", frame["id"].to_numpy().astype("U8"))
    more = pd.period_range(quarters[0], periods=len(quarters) + 80, freq="Q").astype(str)
    for c in ("quarter", "opened", "matures"):
        frame[c] = np.asarray(more, dtype=object)[frame[c]]
    return frame


def _book(rng: np.random.Generator, loans: int) -> pd.DataFrame:
    quarters = np.asarray(pd.period_range("1990Q1", "2060Q4", freq="Q").astype(str), dtype=object)
    now = int(np.flatnonzero(quarters == "2025Q4")[0])
    age, left = rng.integers(1, 60, loans), rng.integers(QUARTERS, QUARTERS + 20, loans)
    return pd.DataFrame(
        {
            "id": np.char.add("B", np.arange(loans).astype("U8")).astype(object), "opened": quarters[now - age + 1],
            "matures": quarters[now + left], "owed": rng.uniform(5e3, 5e4, loans).round(2),
            "interest": rng.uniform(0.03, 0.08, loans).round(4),
            "grade": rng.choice(np.array(list("ABC"), dtype=object), loans),
        }
    )  # fmt: skip


def _scenario(name: str, storm: bool) -> str:
    lines = [f"scenario: {name}", "starts: 2026Q1", "paths:"]
    shape = np.interp(np.arange(16), [0, 5, 15], [0.2, 1.0, 0.0])
    for k, (n, (unit, end)) in enumerate(VARIABLES.items()):
        size = (
            (0.15 if unit == "index" else 1.5)
            * (1 if storm else 0)
            * (-1 if unit == "index" or k == 2 else 1)
        )
        path = end * (1 + size * shape) if unit == "index" else end + size * shape
        lines.append(f"  {n}: {{values: [{', '.join(f'{x:.4f}' for x in path)}]}}")
    return "\n".join([*lines, "afterwards: hold", ""])


def evidence_setting(folder: Path, *, loans: int, history: int = 2500) -> Setting:
    """The study, fitted and set up, with its files in ``folder``."""
    rng = np.random.default_rng(20)
    macro = _macro(rng)
    macro.to_csv(folder / "macro.csv", index=False)
    _history(rng, macro, history).to_parquet(folder / "history.parquet", index=False)
    _book(rng, loans).to_parquet(folder / "book.parquet", index=False)
    (folder / "baseline.yaml").write_text(_scenario("baseline", False))
    (folder / "storm.yaml").write_text(_scenario("storm", True))
    (folder / "study.yaml").write_text(_study())
    file = sk.load_study(folder / "study.yaml")
    data = sk.prepare(file)
    return checked_setting(file, data, sk.fit(file, data))[0]


def attribution_run(setting: Setting) -> tuple[str, Callable[[], int]]:
    """Six variables: all 64 coalitions, channels and elasticities with them."""
    asked = Attribution.model_validate({"from": "baseline", "to": "storm", "matrix": False})
    return "attribution, 6 variables", lambda: int(
        analyse(setting, "attribution", asked).facts["projections"]
    )


def reverse_run(setting: Setting) -> tuple[str, Callable[[], int]]:
    """Three variables free over twelve quarters, three starts, without the surface."""
    asked = Reverse.model_validate({"loss_rise": "30%", "surface": "none"})
    return "reverse stress, 3 variables x 12 quarters", lambda: int(
        analyse(setting, "reverse", asked).facts["projections"]
    )


def rows(quick: bool, say: Console) -> list[dict[str, Any]]:
    """Attribution and reverse stress in turn with one projection."""
    loans, rounds = (20_000, 2) if quick else (100_000, 3)
    with tempfile.TemporaryDirectory() as folder:
        setting = evidence_setting(Path(folder), loans=loans)
    one = [setting.reference()]
    runs = [
        ("one projection", lambda: len(setting.along(one))),
        attribution_run(setting),
        reverse_run(setting),
    ]
    times: list[list[float]] = [[] for _ in runs]
    counts = [0] * len(runs)
    for n in range(rounds + 1):
        for k, (_, run) in enumerate(runs):
            # a projection is short: several, so that one pause of the machine does not stand for it
            repeats = 5 if k == 0 else 1
            begun = time.perf_counter()
            for _ in range(repeats):
                counts[k] = run()
            if n:  # the first round warms up
                times[k].append((time.perf_counter() - begun) / repeats)
        say.print(f"round {n} of {rounds}", style="dim")
    base = float(np.median(times[0]))
    return [
        {
            "what": what, "loans": loans, "quarters": QUARTERS, "projections": counts[k],
            "seconds": float(np.median(times[k])), "one_projection": base, "ratio": float(np.median(times[k])) / base,
        }
        for k, (what, _) in enumerate(runs)
    ]  # fmt: skip


def print_rows(lines: list[dict[str, Any]], console: Console) -> None:
    table = Table(title="Cost of evidence")
    heads = (
        "what",
        "loans",
        "quarters",
        "projections",
        "seconds",
        "in projections of the same book",
        "per projection made",
    )
    for name in heads:
        table.add_column(name, justify="left" if name == "what" else "right")
    for x in lines:
        each = f"{x['ratio'] / x['projections']:.2f}" if x.get("projections") else "-"
        table.add_row(
            x["what"], f"{x['loans']:,}", str(x.get("quarters", "")), f"{x['projections']:,}" if x.get("projections") else "-",
            f"{x['seconds']:.3f}", f"{x['ratio']:.1f}", each,
        )  # fmt: skip
    console.print(table)


def main(arguments: list[str] | None = None) -> int:
    """0; the figures are for reading."""
    parser = argparse.ArgumentParser(prog="python -m tests.benchmarks evidence")
    parser.add_argument("--quick", action="store_true", help="a fifth of the loans, within two minutes")
    parser.add_argument("--json", action="store_true", help="print the figures instead of the table")
    given = parser.parse_args(arguments)
    say = Console(stderr=True)
    lines = rows(given.quick, say)
    if importlib.util.find_spec("tests.benchmarks.evidence_bands") is not None:
        lines += importlib.import_module("tests.benchmarks.evidence_bands").rows(given.quick)
    if given.json:
        print(json.dumps({"figures": lines, "load": os.getloadavg()[0]}, indent=1))
    else:
        print_rows(lines, Console(width=None if sys.stdout.isatty() else 150))
        print(f"load average {os.getloadavg()[0]:.1f}")
    return 0
