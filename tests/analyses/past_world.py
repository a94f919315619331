"""A book with a known truth: two slumps, defaults that follow unemployment, late entry, payoffs; quarters 2000 to 2012."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.runs.inputs import StudyFile
from tests.cli import small_study
from tests.cli.small_study import reworded

STUDY = reworded(
    small_study.STUDY,
    (
        "study: pier-loans\nfrequency: month\nas_of: 2020-12",
        "study: past-world\nfrequency: quarter\nas_of: 2012Q4",
    ),
    ("period: month", "period: quarter"),
    ("segments: [product, place]", "segments: [product]\n  static: [score]"),
    ("unit: percent, place: linear", "unit: percent"),
    ("    policy_rate: {unit: percent, place: step}\n", ""),
    ("reference: fixed}", "reference: fixed}\n      - {loan: score}"),
)
BASELINE = """\
scenario: baseline
starts: 2013Q1
paths:
  unemployment_rate: {values: [8.0, 7.5, 7.0, 6.5]}
afterwards: hold
"""
SLUMP = reworded(
    BASELINE, ("scenario: baseline", "scenario: slump"), ("8.0, 7.5, 7.0, 6.5", "9.0, 10.0, 11.0, 11.0")
)
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
    study = small_study.write_texts(folder, text, BASELINE, SLUMP)
    macro().to_csv(folder / "macro.csv", index=False)
    return sk.load_study(study)
