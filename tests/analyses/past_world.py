"""A book with a known truth: two slumps, defaults that follow unemployment, late entry, payoffs; quarters 2000 to 2012."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.runs.api import checked_setting
from stresskit.runs.inputs import StudyFile
from stresskit.runs.setting import Setting

STUDY = """\
study: past-world
frequency: quarter
as_of: 2012Q4
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: quarter, origination: opened, maturity: matures, balance: owed, rate: interest}
  outcome: {column: state, default: [D], payoff: [P]}
  segments: [product]
  static: [score]
macro:
  file: macro.csv
  variables:
    unemployment_rate: {unit: percent}
  features:
    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}
hazards:
  default:
    link: cloglog
    terms:
      - {age: log}
      - {macro: unemployment_change, expect: positive}
      - {loan: product, as: category, reference: fixed}
      - {loan: score}
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
starts: 2013Q1
paths:
  unemployment_rate: {values: [8.0, 7.5, 7.0, 6.5]}
afterwards: hold
"""
SLUMP = """\
scenario: slump
starts: 2013Q1
paths:
  unemployment_rate: {values: [9.0, 10.0, 11.0, 11.0]}
afterwards: hold
"""
QUARTERS = pd.period_range("2000Q1", "2012Q4", freq="Q")
T = len(QUARTERS)


def unemployment() -> pd.Series[float]:
    """Calm, a small slump in 2002, calm, a large one in 2008 and 2009."""
    quarters = pd.period_range("1998Q1", "2012Q4", freq="Q")
    level = np.full(len(quarters), 5.0)
    level += 0.05 * np.sin(np.arange(len(quarters)))
    for start, size, length in (("2002Q1", 1.8, 5), ("2008Q2", 4.0, 6)):
        at = quarters.get_loc(pd.Period(start, "Q"))
        rise = np.minimum(np.arange(len(quarters)) - at + 1, length) / length
        fall = np.clip((np.arange(len(quarters)) - at - length - 3) / 12, 0, 1)
        level += size * np.clip(rise, 0, 1) * (1 - fall)
    return pd.Series(level.round(3), index=quarters)


def panel(loans: int = 3000, seed: int = 20071231, shock_sd: float = 0.0) -> pd.DataFrame:
    """A row per loan and quarter: truth cloglog, -5 + 0.3 log(age) + 0.7 change + 0.4 floating + 0.5 score."""
    rng = np.random.default_rng(seed)
    level = unemployment()
    change = (level - level.shift(4)).shift(1).loc[QUARTERS].to_numpy()
    shock = shock_sd * rng.standard_normal(T) - 0.5 * shock_sd**2
    start = rng.integers(-6, T - 4, loans)
    term = rng.choice([16, 24, 40], loans)
    floating, score = rng.random(loans) < 0.4, rng.normal(0, 1, loans).round(3)
    amount, rate = rng.uniform(5e3, 5e4, loans).round(2), rng.uniform(0.03, 0.08, loans).round(4)
    names = np.array([f"L{i:05d}" for i in range(loans)])
    alive = np.ones(loans, dtype=bool)
    parts = []
    for t in range(T):
        age = t - start + 1
        on = alive & (age >= 1) & (age <= term)
        i = np.flatnonzero(on)
        eta = -5.0 + 0.3 * np.log(age[i]) + 0.7 * change[t] + 0.4 * floating[i] + 0.5 * score[i] + shock[t]
        d, p = np.expm1(np.exp(eta)), np.expm1(np.exp(-4.2 + 0.01 * age[i]))
        draw = rng.random(i.size) * (1 + d + p)
        state = np.where(draw < d, "D", np.where(draw < d + p, "P", "C"))
        parts.append(
            pd.DataFrame(
                {
                    "id": names[i],
                    "quarter": str(QUARTERS[t]),
                    "opened": [str(QUARTERS[0] + int(s)) for s in start[i]],
                    "matures": [
                        str(QUARTERS[0] + int(s + n - 1)) for s, n in zip(start[i], term[i], strict=True)
                    ],
                    "owed": (amount[i] * (1 - age[i] / (term[i] + 1))).round(2),
                    "interest": rate[i],
                    "state": state,
                    "product": np.where(floating[i], "floating", "fixed"),
                    "score": score[i],
                }
            )
        )
        alive[i[state != "C"]] = False
    return pd.concat(parts, ignore_index=True).sort_values(["id", "quarter"], ignore_index=True)


def macro() -> pd.DataFrame:
    level = unemployment()
    return pd.DataFrame({"period": level.index.astype(str), "unemployment_rate": level.to_numpy()})


def write_world(folder: Path, text: str = STUDY) -> StudyFile:
    """The study's texts and its macro file; loans are handed over as a frame."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / "study.yaml").write_text(text)
    (folder / "baseline.yaml").write_text(BASELINE)
    (folder / "slump.yaml").write_text(SLUMP)
    macro().to_csv(folder / "macro.csv", index=False)
    return sk.load_study(folder / "study.yaml")


def set_up_world(file: StudyFile, loans: pd.DataFrame, economy: pd.DataFrame | None = None) -> Setting:
    data = sk.prepare(file, loans=loans, macro=economy)
    return checked_setting(file, data, sk.fit(file, data))[0]
