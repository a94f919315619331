"""A quarterly book whose defaults follow one known feature: the change of ``driver`` over 2 quarters, 2 quarters ago.

mirror  minus the driver with noise: right feature, wrong sign when a positive one is expected
twin    the driver with a little noise: collinear with it
decoy   stationary and unrelated
walk    a random walk, unrelated
flat    never moves
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.runs.api import Prepared, StudyFile
from stresskit.spec.load import Loaded, load_search
from stresskit.spec.search import SearchSpec

FIRST, LAST = pd.Period("2009Q1"), pd.Period("2020Q4")
SLOPE = 0.45
STUDY = """\
study: quay-loans
frequency: quarter
as_of: 2020Q4
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: quarter, origination: opened, maturity: matures, balance: owed, rate: interest}
  outcome: {column: state, default: [D]}
  static: [score]
  segments: [product]
macro:
  file: macro.csv
  variables:
    driver: {unit: level}
    mirror: {unit: level}
    twin: {unit: level}
    decoy: {unit: level}
    walk: {unit: level}
    flat: {unit: level}
  features:
    driver_now: {of: driver, transform: difference, over: 2, lag: 0}
    decoy_now: {of: decoy}
hazards:
  default:
    link: cloglog
    terms:
      - {age: log, support: 1}
      - {loan: product, as: category, reference: fixed}
      - {loan: score}
      - {macro: driver_now, expect: positive}
      - {macro: decoy_now}
      - {interaction: [product, driver_now]}
loss:
  lgd: {constant: 0.4}
scenarios: [baseline.yaml]
"""
BASELINE = """\
scenario: baseline
starts: 2021Q1
paths:
  driver: {values: [0.0, 0.0]}
  decoy: {values: [0.0, 0.0]}
afterwards: hold
"""


def macro_frame() -> pd.DataFrame:
    rng = np.random.default_rng(811)
    quarters = pd.period_range("2004Q1", LAST, freq="Q")
    n = len(quarters)

    def persistent(rho: float) -> np.ndarray:
        shocks, x = rng.normal(size=n), np.zeros(n)
        for t in range(1, n):
            x[t] = rho * x[t - 1] + shocks[t]
        return x

    driver = persistent(0.5)
    columns = {
        "driver": driver,
        "mirror": -driver + 0.1 * rng.normal(size=n),
        "twin": driver + 0.2 * rng.normal(size=n),
        "decoy": persistent(0.3),
        "walk": rng.normal(size=n).cumsum(),
        "flat": np.full(n, 2.0),
    }
    return pd.DataFrame({"period": quarters.astype(str), **columns})


def loan_frame(macro: pd.DataFrame, loans: int) -> pd.DataFrame:
    rng = np.random.default_rng(812)
    driver = pd.Series(macro["driver"].to_numpy(), index=pd.PeriodIndex(macro["period"], freq="Q"))
    effect = SLOPE * (driver - driver.shift(2)).shift(2)
    months = pd.period_range(FIRST, LAST, freq="Q")
    rows = []
    for i in range(loans):
        begin, term = int(rng.integers(0, 40)), int(rng.choice([16, 24, 32]))
        product, score = str(rng.choice(["fixed", "floating"])), round(float(rng.normal()), 4)
        for t in range(begin, min(begin + term, len(months))):
            age = t - begin + 1
            eta = -4.2 + 0.2 * np.log(age) + effect[months[t]] + 0.3 * (product == "floating") - 0.3 * score
            state = "D" if rng.random() < -np.expm1(-np.exp(eta)) else "C"
            opened, matures = str(months[begin]), str(months[begin] + term - 1)
            owed = round(1e4 * (1 - age / (term + 1)), 2)
            rows.append((f"L{i:04d}", str(months[t]), opened, matures, owed, 0.05, state, product, score))
            if state == "D":
                break
    names = ["id", "quarter", "opened", "matures", "owed", "interest", "state", "product", "score"]
    return pd.DataFrame(rows, columns=names)


def write_world(folder: Path, *, loans: int = 1200) -> tuple[StudyFile, Prepared]:
    (folder / "study.yaml").write_text(STUDY)
    (folder / "baseline.yaml").write_text(BASELINE)
    macro = macro_frame()
    file = sk.load_study(folder / "study.yaml")
    return file, sk.prepare(file, loans=loan_frame(macro, loans), macro=macro)


def search_text(folder: Path, text: str) -> Loaded[SearchSpec]:
    path = folder / "search.yaml"
    path.write_text(text)
    return load_search(path)
