"""A random book with every kind of contract, its macro calendar on model months, and the same loans for the oracle."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import MacroHistory, Portfolio, ScenarioPath
from stresskit.spec.load import load_study
from stresskit.spec.study import Study
from tests.contract.plain import Plain

AS_OF = parse_period("2020-12", Frequency.MONTH)
BACK, AHEAD = 240, 200

KINDS = ("level", "waiting", "final", "straight", "lump", "card", "cardflat", "own")
STUDY = """\
study: all-contracts
frequency: month
as_of: 2020-12
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: month, origination: opened, maturity: matures, balance: owed, amount: lent, rate: interest}
  outcome: {column: state, default: [D]}
macro:
  file: macro.csv
  variables:
    house_north: {unit: index}
    house_south: {unit: index}
    policy_rate: {unit: percent}
    card_use: {unit: fraction}
hazards:
  default:
    link: cloglog
    terms:
      - {loan: current_ltv}
      - {loan: use}
      - {loan: interest_now}
      - {loan: real_rate}
      - {loan: burden}
      - {loan: since}
moving:
  current_ltv: {balance_over_value: {value: price, index: {by: place, of: {north: house_north, south: house_south}}}}
  use: {balance_over_limit: {limit: line}}
  interest_now: {rate: {}}
  real_rate: {rate_less: {variable: policy_rate}}
  burden: {payment_over: {income: income}}
  since: {periods_since: {date: last_arrears, never: 120, cap: 60}}
rates:
  by: pays
  values:
    fixed: fixed
    monthly: {index: policy_rate, margin: margin, floor: 0.01, cap: cap, reset_months: 1}
    yearly: {index: policy_rate, margin: 0.015, reset_months: 12}
loss:
  exposure:
    by: kind
    values:
      level: {schedule: annuity, accrued: 2}
      waiting: {schedule: annuity, interest_only: wait}
      final: {schedule: annuity, balloon: final_payment, interest_only: 6}
      straight: {schedule: linear, balloon: 0.25, interest_only: wait}
      lump: {schedule: bullet}
      card: {schedule: revolving, limit: line, ccf: 0.6, utilisation: card_use, accrued: 1}
      cardflat: {schedule: revolving, limit: line, ccf: ccf}
      own: {schedule: supplied, file: own.csv}
  lgd: {collateral: {value: price, index: {by: place, of: {north: house_north, south: house_south}}, haircut: 0.25, cost: 0.04, floor: 0.1}}
  discount: rate_path
scenarios: [one.yaml]
"""


def study_of(folder: Path, text: str = STUDY) -> Study:
    place = folder / "study.yaml"
    place.write_text(text)
    return load_study(place).model


def macro(rng: np.random.Generator) -> tuple[MacroHistory, ScenarioPath]:
    """Monthly history of BACK months to as_of, and a path of AHEAD months."""
    n = BACK + AHEAD
    steps = rng.normal(0, 0.01, (3, n)).cumsum(axis=1)
    values = {
        "house_north": 100 * np.exp(steps[0]),
        "house_south": 80 * np.exp(steps[1]),
        "policy_rate": 2.0 + 2.5 * np.sin(np.arange(n) / 9.0),
        "card_use": 0.5 + 0.4 * np.sin(np.arange(n) / 5.0),
    }
    units = {"house_north": "index", "house_south": "index", "policy_rate": "percent", "card_use": "fraction"}
    history = MacroHistory(
        Frequency.MONTH,
        AS_OF - BACK + 1,
        {k: v[:BACK] for k, v in values.items()},
        units,
        dict.fromkeys(units, "step"),
    )
    path = ScenarioPath(
        "one", 1.0, Frequency.MONTH, AS_OF + 1, {k: v[BACK:] for k, v in values.items()},
        {k: np.zeros(AHEAD, dtype=np.int64) for k in values},
    )  # fmt: skip
    return history, path


def later(history: MacroHistory, path: ScenarioPath, k: int) -> tuple[MacroHistory, ScenarioPath]:
    """The same numbers, with k periods of the path become history."""
    joined = {v: np.concatenate([x, path.values[v][:k]]) for v, x in history.values.items()}
    return (
        MacroHistory(history.frequency, history.start, joined, history.units, history.place),
        ScenarioPath(
            path.name, path.weight, path.frequency, path.start + k, {v: x[k:] for v, x in path.values.items()},
            {v: x[k:] for v, x in path.flags.items()},
        ),
    )  # fmt: skip


def book(rng: np.random.Generator, n: int) -> Portfolio:
    kind = np.array(KINDS, dtype=object)[np.arange(n) % len(KINDS)]
    age, remaining = rng.integers(0, 90, n), rng.integers(1, 140, n)
    balance = rng.uniform(1e3, 3e5, n).round(2)
    date = (AS_OF - rng.integers(0, 90, n)).astype(np.float64)
    date[rng.random(n) < 0.4] = np.nan
    return Portfolio(
        frequency=Frequency.MONTH,
        as_of=AS_OF,
        loan_ids=np.array([f"L{i:05d}" for i in range(n)], dtype=object),
        age=age,
        remaining=remaining,
        balance=balance,
        rate=rng.choice([-0.002, 0.0, 0.01, 0.043, 0.12], n),
        static={
            "kind": kind,
            "pays": rng.choice(np.array(["fixed", "monthly", "yearly"], dtype=object), n),
            "place": rng.choice(np.array(["north", "south"], dtype=object), n),
            "price": rng.uniform(0.4, 2.5, n) * balance,
            "line": rng.uniform(0.8, 3.0, n) * balance,
            "income": rng.uniform(2e4, 9e4, n),
            "last_arrears": date,
            "margin": rng.uniform(0.0, 0.03, n),
            "cap": rng.uniform(0.03, 0.08, n),
            "wait": rng.integers(0, 130, n).astype(np.float64),
            "final_payment": rng.uniform(0.0, 1.2, n) * balance,
            "lent": rng.uniform(1.0, 2.0, n) * balance,
            "ccf": rng.uniform(0.0, 1.0, n),
        },
    )


def own_schedule(rng: np.random.Generator, portfolio: Portfolio) -> pd.DataFrame:
    """Supplied balances of the loans of kind "own", in no order, with rows that nobody needs."""
    rows = []
    for i in np.flatnonzero(portfolio.static["kind"] == "own"):
        left = portfolio.balance[i]
        for h in range(-2, int(portfolio.remaining[i]) + 3):
            left = left * rng.uniform(0.9, 1.02)
            month = pd.Period(ordinal=portfolio.as_of - 1970 * 12 + h, freq="M")
            rows.append((portfolio.loan_ids[i], str(month), left))
    rows.append(("someone else", "2021-03", 5.0))
    return pd.DataFrame(rows, columns=["loan", "period", "balance"]).sample(frac=1.0, random_state=3)


def plain_loan(portfolio: Portfolio, i: int, own: pd.DataFrame) -> Plain:
    """Loan i as the oracle takes it."""
    s = {name: column[i] for name, column in portfolio.static.items()}
    kind, pays = s["kind"], s["pays"]
    loan = Plain(
        balance=float(portfolio.balance[i]), rate=float(portfolio.rate[i]), age=int(portfolio.age[i]),
        remaining=int(portfolio.remaining[i]),
    )  # fmt: skip
    if pays != "fixed":
        loan.floats = True
        loan.every = 1 if pays == "monthly" else 12
        loan.margin = float(s["margin"]) if pays == "monthly" else 0.015
        if pays == "monthly":
            loan.floor, loan.cap = 0.01, float(s["cap"])
    if kind == "level":
        loan.accrued = 2.0
    elif kind == "waiting":
        loan.interest_only = int(s["wait"])
    elif kind == "final":
        loan.balloon, loan.interest_only = float(s["final_payment"]), 6
    elif kind == "straight":
        loan.schedule, loan.balloon, loan.interest_only = "linear", 0.25 * float(s["lent"]), int(s["wait"])
    elif kind == "lump":
        loan.schedule = "bullet"
    elif kind == "card":
        loan.schedule, loan.limit, loan.ccf, loan.accrued = "revolving", float(s["line"]), 0.6, 1.0
    elif kind == "cardflat":
        loan.schedule, loan.limit, loan.ccf = "revolving", float(s["line"]), float(s["ccf"])
    else:
        loan.schedule = "supplied"
        mine = own[own["loan"] == portfolio.loan_ids[i]].sort_values("period")
        after = mine[mine["period"] > str(pd.Period(ordinal=portfolio.as_of - 1970 * 12, freq="M"))]
        loan.supplied = after["balance"].tolist()
    return loan
