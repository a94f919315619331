"""A small study for tests of commands: 600 loans, 48 months, two scenarios, a few seconds for a run."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

STUDY = """\
study: pier-loans
frequency: month
as_of: 2020-12
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: month, origination: opened, maturity: matures, balance: owed, rate: interest}
  outcome: {column: state, default: [D], payoff: [P]}
  segments: [product, place]
macro:
  file: macro.csv
  variables:
    unemployment_rate: {unit: percent, place: linear}
    policy_rate: {unit: percent, place: step}
  features:
    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}
hazards:
  default:
    link: cloglog
    terms:
      - {age: log}
      - {macro: unemployment_change, expect: positive}
      - {loan: product, as: category, reference: fixed}
  payoff:
    link: cloglog
    terms:
      - {age: linear}
loss:
  exposure: {schedule: annuity}
  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}
  discount: rate
scenarios: [baseline.yaml, slump.yaml]
"""
BASELINE = """\
scenario: baseline
weight: 0.7
starts: 2021Q1
paths:
  unemployment_rate: {values: [5.0, 5.0, 4.9, 4.9]}
afterwards: hold
"""
SLUMP = """\
scenario: slump
based_on: baseline
weight: 0.3
starts: 2021Q1
paths:
  unemployment_rate: {add_to: baseline, values: [1.0, 2.0, 3.0, 3.5, 3.0, 2.0, 1.0], then: zero}
"""


def reworded(text: str, *changes: tuple[str, str]) -> str:
    """A text with each (part, other part) exchanged. Raises ValueError for a part that it does not hold just once."""
    for old, new in changes:
        if text.count(old) != 1:
            raise ValueError(f"the text holds {text.count(old)} times: {old}")
        text = text.replace(old, new)
    return text


def write_texts(folder: Path, study: str = STUDY, baseline: str = BASELINE, slump: str = SLUMP) -> Path:
    """study.yaml and its two scenarios; returns the study file."""
    folder.mkdir(parents=True, exist_ok=True)
    for name, text in (("study", study), ("baseline", baseline), ("slump", slump)):
        (folder / f"{name}.yaml").write_text(text)
    return folder / "study.yaml"


def _panel(rng: np.random.Generator, n: int) -> pd.DataFrame:
    months = pd.period_range("2017-01", "2020-12", freq="M")
    quarter = np.arange(48) // 3
    change = np.where((quarter >= 6) & (quarter < 11), 2.0, -0.3)
    rows = []
    for i in range(n):
        start, term = int(rng.integers(0, 36)), int(rng.choice([36, 48, 60]))
        product, place = str(rng.choice(["fixed", "floating"])), str(rng.choice(["east", "west"]))
        amount, rate = float(rng.uniform(5e3, 5e4)), float(rng.uniform(0.03, 0.08))
        for t in range(start, 48):
            age = t - start + 1
            if age > term:
                break
            hazard = np.exp(-5.2 + 0.3 * np.log(age) + 0.5 * change[t] + 0.4 * (product == "floating"))
            odds = np.expm1(hazard), np.expm1(np.exp(-4.6))
            draw = rng.random() * (1 + sum(odds))
            state = "D" if draw < odds[0] else "P" if draw < sum(odds) else "C"
            owed = round(amount * (1 - age / (term + 1)), 2)
            rows.append(
                (
                    f"L{i:04d}",
                    str(months[t]),
                    str(months[start]),
                    str(months[start] + term - 1),
                    owed,
                    rate,
                    state,
                    product,
                    place,
                )
            )
            if state != "C":
                break
    names = ["id", "month", "opened", "matures", "owed", "interest", "state", "product", "place"]
    return pd.DataFrame(rows, columns=names)


def write_small_study(folder: Path, *, loans: int = 600) -> Path:
    """study.yaml and its inputs; returns the study file."""
    rng = np.random.default_rng(4711)
    _panel(rng, loans).to_csv(folder / "loans.csv", index=False)
    quarters = pd.period_range("2014Q1", "2020Q4", freq="Q")
    rate = 5.0 + np.where((quarters >= pd.Period("2018Q3")) & (quarters < pd.Period("2019Q4")), 2.0, 0.0)
    rate = rate + 0.1 * np.sin(np.arange(len(quarters)))
    pd.DataFrame(
        {"period": quarters.astype(str), "unemployment_rate": rate.round(3), "policy_rate": 2.0}
    ).to_csv(folder / "macro.csv", index=False)
    return write_texts(folder)
