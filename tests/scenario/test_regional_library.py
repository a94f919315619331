"""The library's regional downturn in the demo bank: variables by region through estimation and projection."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.demo.bank import shipped_scenarios, write_demo
from stresskit.macro.read import read_history
from tests.shared_inputs import REPOSITORY

REGIONS = ("north", "coast", "valley")
VARIABLES = {
    f"{name}_{region}": unit
    for name, unit in (("unemployment_rate", "percent"), ("house_price_index", "index"))
    for region in REGIONS
}


def _keyed(name: str, transform: str) -> str:
    of = ", ".join(f"{region}: {name}_{region}" for region in REGIONS)
    return f"{{by: region, of: {{{of}}}, transform: {transform}, over: 4, lag: 1}}"


def _regional_bank(folder: Path) -> Path:
    """The demo bank with history by region: the nation's changes, and a little of its own for each region."""
    study = write_demo(folder, loans=1200)
    # one row was spoiled with a region that does not exist: no variable for it
    loans = pd.read_parquet(folder / "loans.parquet")
    loans[loans["region"].isin(REGIONS)].to_parquet(folder / "loans.parquet")
    macro = pd.read_csv(folder / "macro.csv")
    rng = np.random.default_rng(11)
    for region in REGIONS:
        own = rng.normal(0.0, 0.15, len(macro)).cumsum()
        macro[f"unemployment_rate_{region}"] = (macro["unemployment_rate"] + own - own[-1]).round(3)
        level = macro["house_price_index"] * np.exp(0.05 * (own - own[-1]))
        macro[f"house_price_index_{region}"] = level.round(3)
    macro.to_csv(folder / "macro.csv", index=False)
    text = study.read_text(encoding="utf-8")
    declared = "".join(f"    {v}: {{unit: {unit}, place: linear}}\n" for v, unit in VARIABLES.items())
    for before, after in (
        ("    policy_rate: {unit: percent, place: linear}\n", "    policy_rate: {unit: percent, place: linear}\n" + declared),
        ("{of: unemployment_rate, transform: difference, over: 4, lag: 1}", _keyed("unemployment_rate", "difference")),
        ("{of: house_price_index, transform: log_growth, over: 4, lag: 1}", _keyed("house_price_index", "log_growth")),
    ):  # fmt: skip
        assert before in text
        text = text.replace(before, after)
    # the demo's overlay names a scenario that this study does not run
    text = re.sub(r"(?ms)^adjustments:.*?(?=^scenarios:)", "", text)
    text = text.split("scenarios:\n  - ")[0]
    text += "scenarios: [scenarios/baseline.yaml, scenarios/regional_downturn.yaml]\n"
    study.write_text(text, encoding="utf-8")
    # a feature by region needs every region in every scenario: in the baseline each goes the nation's way
    base = folder / "scenarios" / "baseline.yaml"
    lines = base.read_text(encoding="utf-8").replace("weight: 0.6\n", "")
    steady = "".join(
        f"  {v}: {{values: [{5.0 if unit == 'percent' else 150.8}]}}\n" for v, unit in VARIABLES.items()
    )
    head, _, rest = lines.partition("\npaths:")
    comment, _, rest = rest.partition("\n")
    base.write_text(f"{head}\npaths:{comment}\n{steady}{rest}", encoding="utf-8")
    shutil.copy(shipped_scenarios() / "regional_downturn.yaml", folder / "scenarios")
    return study


@pytest.mark.slow
def test_the_downturn_falls_on_the_loans_of_its_region(tmp_path: Path) -> None:
    file = sk.load_study(_regional_bank(tmp_path / "bank"))
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    assert fits["default"].params["unemployment_change"] > 0  # one coefficient for all regions
    result = sk.project(file, data, fits)
    by_region = result.summary.query("by == 'region'").pivot(
        index="segment", columns="scenario", values="pd_lifetime"
    )
    rise = by_region["regional_downturn"] / by_region["baseline"] - 1.0
    assert set(rise.index) == set(REGIONS)
    # +3.9 points and -24 % in the north, at most +0.5 points elsewhere
    assert rise["north"] > 0.1
    assert rise["north"] > 3.0 * max(abs(rise["coast"]), abs(rise["valley"]))
    features = result.features.query("scenario == 'regional_downturn'")
    north = features[features["feature"] == "unemployment_change[north]"].set_index("period")["value"]
    assert file.study.macro is not None
    past = read_history(file.study.macro, base=file.base, model=file.frequency)
    # in 2026-12 the quarter before last counts: 2026Q3, a year on from 2025Q3; 6.8 by the library's file
    before = past.values["unemployment_rate_north"][-2]
    assert north["2026-12"] == pytest.approx(6.8 - before)


def test_the_file_is_the_one_that_is_shipped() -> None:
    assert (REPOSITORY / "scenarios" / "regional_downturn.yaml").read_bytes() == (
        shipped_scenarios() / "regional_downturn.yaml"
    ).read_bytes()
