"""A small study whose scenarios a VAR judges: two variables that hazards read, one that only a collateral-free LGD passes over."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.runs.api import checked_setting
from stresskit.runs.setting import Setting
from tests.cli.small_study import STUDY, write_small_study

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
    text = STUDY.replace(
        "    unemployment_rate: {unit: percent, place: linear}\n    policy_rate: {unit: percent, place: step}\n",
        VARIABLES,
    )
    text = text.replace(
        "    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}\n", FEATURES
    )
    text = text.replace(
        "      - {macro: unemployment_change, expect: positive}\n",
        "      - {macro: unemployment_change, expect: positive}\n      - {macro: house_price_growth}\n",
    )
    if payoff_reads_rate:
        text = text.replace(
            "      - {age: linear}\n", "      - {age: linear}\n      - {macro: policy_rate_change}\n"
        )
    return text


def write_var_study(
    folder: Path, *, more: str = "", payoff_reads_rate: bool = True, loans: int = 600
) -> Path:
    """study.yaml and its inputs; ``more``: text at the end of the study."""
    study = write_small_study(folder, loans=loans)
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
    table["policy_rate"] = (
        (2.0 + 0.15 * (np.cumsum(shocks[:, 2]) - shocks[:, 2].sum())).clip(0.2).round(3)
    )
    table.to_csv(folder / "macro.csv", index=False)
    study.write_text(study_text(payoff_reads_rate=payoff_reads_rate) + more)
    (folder / "baseline.yaml").write_text(BASELINE)
    (folder / "slump.yaml").write_text(SLUMP)
    return study


def var_setting(folder: Path, **options: object) -> Setting:
    """The study, fitted and set up."""
    file = sk.load_study(write_var_study(folder, **options))  # type: ignore[arg-type]
    data = sk.prepare(file)
    return checked_setting(file, data, sk.fit(file, data))[0]
