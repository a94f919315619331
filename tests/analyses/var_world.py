"""A small study whose scenarios a VAR judges: two variables that hazards read, one that only a collateral-free LGD passes over."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from stresskit.runs.setting import Setting
from tests.analyses.world import setting_of
from tests.cli.small_study import STUDY, reworded, write_small_study, write_texts

VARIABLES = """\
    unemployment_rate: {unit: percent, place: linear}
    house_price_index: {unit: index, place: linear}
    policy_rate: {unit: percent, place: step}
"""
FEATURES = """\
    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}
    house_price_growth: {of: house_price_index, transform: log_growth, over: 4, lag: 1}
    policy_rate_change: {of: policy_rate, transform: difference, over: 2, lag: 0}
  var:
    variables: {unemployment_rate: difference, house_price_index: log_difference, policy_rate: difference}
    lags: 1
    floors: {unemployment_rate: 0, policy_rate: 0}
"""
BASELINE = """\
scenario: baseline
starts: 2021Q1
paths:
  unemployment_rate: {values: [5.0, 5.0, 4.9, 4.9, 4.9, 4.9, 4.9, 4.9]}
  house_price_index: {values: [151, 152, 153, 154, 155, 156, 157, 158]}
  policy_rate: {values: [2.0, 2.0, 2.0, 2.0, 2.0, 2.0, 2.0, 2.0]}
afterwards: {unemployment_rate: {revert_to: 5.2, over: 4}, house_price_index: {grow_by: 1%}, policy_rate: hold}
"""
SLUMP = """\
scenario: slump
based_on: baseline
starts: 2021Q1
paths:
  unemployment_rate: {add_to: baseline, values: [1.0, 2.0, 3.0, 3.5, 3.0, 2.0, 1.0], then: zero}
  house_price_index: {change_from: baseline, peak: -15%, at: 2022Q1, back_by: 2023Q4}
  policy_rate: {add_to: baseline, values: [-0.5, -1.0, -1.0], then: zero}
"""


def study_text(*, payoff_reads_rate: bool = True) -> str:
    changes = [
        (
            "    unemployment_rate: {unit: percent, place: linear}\n    policy_rate: {unit: percent, place: step}\n",
            VARIABLES,
        ),
        (
            "    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}\n",
            FEATURES,
        ),
        (
            "      - {macro: unemployment_change, expect: positive}\n",
            "      - {macro: unemployment_change, expect: positive}\n      - {macro: house_price_growth}\n",
        ),
    ]
    if payoff_reads_rate:
        changes.append(
            ("      - {age: linear}\n", "      - {age: linear}\n      - {macro: policy_rate_change}\n")
        )
    return reworded(STUDY, *changes)


def write_var_study(
    folder: Path, *, more: str = "", payoff_reads_rate: bool = True, loans: int = 600
) -> Path:
    """study.yaml and its inputs; ``more``: text at the end of the study."""
    write_small_study(folder, loans=loans)
    rng = np.random.default_rng(77)
    table = pd.read_csv(folder / "macro.csv")
    n = len(table)
    shocks = (
        rng.normal(size=(n, 3))
        @ np.linalg.cholesky([[1.0, -0.4, -0.3], [-0.4, 1.0, 0.2], [-0.3, 0.2, 1.0]]).T
    )
    table["unemployment_rate"] = (
        (table["unemployment_rate"] + 0.1 * np.cumsum(shocks[:, 0])).clip(lower=2).round(3)
    )
    table["house_price_index"] = 150 * np.exp(np.cumsum(0.004 + 0.012 * shocks[:, 1]))
    table["house_price_index"] = (
        table["house_price_index"] * 150 / table["house_price_index"].iloc[-1]
    ).round(3)
    table["policy_rate"] = (2.0 + 0.15 * (np.cumsum(shocks[:, 2]) - shocks[:, 2].sum())).clip(0.2).round(3)
    table.to_csv(folder / "macro.csv", index=False)
    return write_texts(folder, study_text(payoff_reads_rate=payoff_reads_rate) + more, BASELINE, SLUMP)


def with_contracts(folder: Path) -> Path:
    """The study with every channel moving: floating rates, discounting at them, LGD from collateral."""
    study = write_var_study(folder)
    loans = pd.read_csv(folder / "loans.csv")
    first = loans.groupby("id")["owed"].transform("first")
    loans["price"] = (first * (0.8 + 0.4 * (pd.factorize(loans["id"])[0] % 7) / 6)).round(2)
    loans.to_csv(folder / "loans.csv", index=False)
    text = study.read_text()
    text = text.replace("  segments: [product, place]\n", "  segments: [product, place]\n  static: [price]\n")
    text = text.replace(
        "  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}\n  discount: rate\n",
        "  lgd: {collateral: {value: price, index: house_price_index, valued: as_of, haircut: 0.2, cost: 0.05, floor: 0.05}}\n"
        "  discount: rate_path\n",
    )
    text = text.replace(
        "loss:\n",
        "rates:\n  by: product\n  values:\n    fixed: fixed\n    floating: {index: policy_rate, margin: 0.02, reset_months: 3}\nloss:\n",
    )
    study.write_text(text)
    return study


def var_setting(folder: Path, **options: object) -> Setting:
    """The study, fitted and set up."""
    return setting_of(write_var_study(folder, **options))  # type: ignore[arg-type]
