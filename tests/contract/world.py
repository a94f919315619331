"""A small book of mortgages with floating and fixed rates, whose default hazard depends on current loan-to-value."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

MONTHS = 60
AS_OF = "2020-12"

STUDY = """\
study: quay-mortgages
frequency: month
as_of: 2020-12
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: month, origination: opened, maturity: matures, balance: owed, amount: lent, rate: interest}
  outcome: {column: state, default: [D], payoff: [P]}
  segments: [kind, place]
macro:
  file: macro.csv
  variables:
    house_north: {unit: index, place: linear}
    house_south: {unit: index, place: linear}
    policy_rate: {unit: percent, place: step}
hazards:
  default:
    link: cloglog
    terms:
      - {loan: current_ltv, expect: positive}
  payoff:
    link: cloglog
    terms: []
moving:
  current_ltv: {balance_over_value: {value: price, index: {by: place, of: {north: house_north, south: house_south}}}}
rates:
  by: kind
  values:
    fixed: fixed
    floating: {index: policy_rate, margin: margin, floor: 0.015, cap: 0.09, reset_months: 3}
loss:
  exposure: {schedule: annuity, accrued: 1}
  lgd: {collateral: {value: price, index: {by: place, of: {north: house_north, south: house_south}}, haircut: 0.2, cost: 0.05, floor: 0.05}}
  discount: rate_path
scenarios: [baseline.yaml, slump.yaml]
"""
BASELINE = """\
scenario: baseline
weight: 0.7
starts: 2021Q1
paths:
  house_north: {values: [131, 132, 133, 134]}
  house_south: {values: [96, 96.5, 97]}
  policy_rate: {values: [1.0, 1.25, 1.5]}
afterwards: hold
"""
SLUMP = """\
scenario: slump
based_on: baseline
weight: 0.3
starts: 2021Q1
paths:
  house_north: {change_from: baseline, peak: -30%, at: 2022Q2, back_by: 2026Q4}
  house_south: {change_from: baseline, peak: -35%, at: 2022Q4, back_by: 2026Q4}
  policy_rate: {add_to: baseline, values: [1.0, 2.0, 4.0, 6.0, 8.0], then: hold}
"""


@dataclass(frozen=True)
class Truth:
    """Coefficients of the simulated default hazard: eta = level + slope x current LTV at the start."""

    level: float = -7.5
    slope: float = 3.5
    payoff: float = -4.6


def quarters() -> pd.PeriodIndex:
    return pd.period_range("2013Q1", "2020Q4", freq="Q")


def macro_frame() -> pd.DataFrame:
    n = np.arange(len(quarters()))
    north = 100.0 * np.exp(0.008 * n - 0.25 * np.exp(-((n - 20) ** 2) / 12.0))
    south = 110.0 * np.exp(-0.004 * n - 0.30 * np.exp(-((n - 22) ** 2) / 8.0))
    rate = 2.0 + 1.5 * np.sin(n / 5.0)
    return pd.DataFrame(
        {
            "period": quarters().astype(str),
            "house_north": north.round(6),
            "house_south": south.round(6),
            "policy_rate": rate.round(4),
        }
    )


def monthly(
    frame: pd.DataFrame, name: str, start: str, months: int, *, place: str = "linear"
) -> NDArray[np.float64]:
    """A quarterly series on months by hand: quarter values at the quarter's last month, straight lines between."""
    dates = pd.period_range(start, periods=months, freq="M")
    if place == "step":
        by_quarter = dict(zip(frame["period"], frame[name], strict=True))
        return np.array([by_quarter[str(d.asfreq("Q"))] for d in dates])
    ends = [pd.Period(q, "Q").asfreq("M", "end").ordinal for q in frame["period"]]
    return np.interp([d.ordinal for d in dates], ends, frame[name].to_numpy())


def panel(rng: np.random.Generator, n: int, truth: Truth = Truth()) -> pd.DataFrame:
    """Monthly rows, 60 months to 2020-12; the state at the end of a month follows from the LTV at its start."""
    first = pd.Period("2016-01", "M")
    frame = macro_frame()
    house = {
        p: monthly(frame, f"house_{p}", "2015-01", MONTHS + 12) for p in ("north", "south")
    }  # 2015-01 is column 0, so month t of the panel is column t + 12
    rows: list[tuple[object, ...]] = []
    for i in range(n):
        start, term = int(rng.integers(0, MONTHS - 6)), int(rng.choice([60, 120, 180]))
        kind, place = str(rng.choice(["fixed", "floating"])), str(rng.choice(["north", "south"]))
        lent, rate = float(np.round(rng.uniform(5e4, 3e5), 2)), float(np.round(rng.uniform(0.02, 0.05), 4))
        price, margin = (
            float(np.round(lent / rng.uniform(0.5, 1.05), 2)),
            float(np.round(rng.uniform(0.005, 0.02), 4)),
        )
        index, owed = house[place], lent
        for t in range(start, MONTHS):
            paid = t - start
            if paid > term - 1:
                break
            value = price * (index[t - 1 + 12] / index[start + 12] if t > start else 1.0)
            hazard = np.exp(truth.level + truth.slope * owed / value)
            odds = np.expm1(hazard), np.expm1(np.exp(truth.payoff))
            draw = rng.random() * (1.0 + sum(odds))
            state = "D" if draw < odds[0] else "P" if draw < sum(odds) else "C"
            v = 1.0 / (1.0 + rate / 12.0)
            owed = round(lent * (1 - v ** (term - 1 - paid)) / (1 - v ** (term - 1)), 2) if paid else lent
            rows.append(
                (
                    f"Q{i:05d}", str(first + t), str(first + start), str(first + start + term - 1), owed, lent, rate,
                    state, kind, place, price, margin,
                )
            )  # fmt: skip
            if state != "C":
                break
    names = [
        "id",
        "month",
        "opened",
        "matures",
        "owed",
        "lent",
        "interest",
        "state",
        "kind",
        "place",
        "price",
        "margin",
    ]
    return pd.DataFrame(rows, columns=names)


def write_world(folder: Path, *, loans: int = 800, study: str = STUDY, seed: int = 20240) -> Path:
    """study.yaml and its inputs; returns the study file."""
    panel(np.random.default_rng(seed), loans).to_csv(folder / "loans.csv", index=False)
    macro_frame().to_csv(folder / "macro.csv", index=False)
    (folder / "study.yaml").write_text(study)
    (folder / "baseline.yaml").write_text(BASELINE)
    (folder / "slump.yaml").write_text(SLUMP)
    return folder / "study.yaml"
