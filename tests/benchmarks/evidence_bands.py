"""Cost of bands: 1,000 joint draws on 100,000 loans x 60 quarters, against one projection of the whole book."""

from __future__ import annotations

import tempfile
import time
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

import stresskit as sk
from stresskit.analyses.bands.draws import spreads_of
from stresskit.analyses.bands.engine import run_draws
from stresskit.analyses.bands.maker import chosen_paths
from stresskit.runs.api import checked_setting
from stresskit.runs.setting import Setting
from stresskit.spec.bands import Bands

STUDY = """\
study: draws
frequency: quarter
as_of: 2025Q4
horizon: 60
loans:
  file: loans.parquet
  layout: panel
  columns: {loan: id, period: quarter, origination: opened, maturity: matures, balance: owed, rate: interest}
  outcome: {column: state, default: [D], payoff: [P]}
  static: [ltv, income]
  segments: [product, region]
macro:
  file: macro.csv
  variables: {unemployment_rate: {unit: percent}, price_index: {unit: index}}
  features:
    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}
    price_growth: {of: price_index, transform: log_growth, over: 4, lag: 1}
  var: {variables: {unemployment_rate: difference, price_index: log_difference}, lags: 1, floors: {unemployment_rate: 0}}
hazards:
  default:
    link: cloglog
    terms: [{age: spline, knots: 3}, {loan: ltv}, {loan: income}, {loan: product, as: category, reference: fixed},
            {macro: unemployment_change}, {macro: price_growth}]
  payoff:
    link: cloglog
    terms: [{age: linear}, {loan: ltv}, {macro: price_growth}]
loss:
  exposure: {schedule: annuity}
  lgd: {by: product, values: {fixed: 0.3, floating: 0.45}}
  discount: rate
scenarios: [baseline.yaml, slump.yaml, severe.yaml]
"""
SCENARIO = """\
scenario: {name}
starts: 2026Q1
paths:
  unemployment_rate: {{values: [{u}]}}
  price_index: {{values: [{p}]}}
afterwards: hold
"""


def _macro(rng: np.random.Generator, n: int) -> pd.DataFrame:
    rate = 6.0 + np.cumsum(rng.normal(0.0, 0.25, n))
    rate = np.clip(rate - np.linspace(0.0, rate[-1] - 6.0, n), 2.0, None)
    index = 100.0 * np.exp(np.cumsum(rng.normal(0.005, 0.015, n)))
    quarters = pd.period_range(end="2025Q4", periods=n, freq="Q").astype(str)
    return pd.DataFrame({"period": quarters, "unemployment_rate": rate, "price_index": index})


def _panel(rng: np.random.Generator, loans: int, macro: pd.DataFrame) -> pd.DataFrame:
    """A history of 60 quarters with shocks of its own in every quarter."""
    quarters = pd.period_range(end="2025Q4", periods=60, freq="Q").astype(str).to_numpy()
    change = macro["unemployment_rate"].diff(4).shift(1).to_numpy()[-60:]
    shock = np.exp(rng.normal(0.0, 0.2, 60))
    start, term = rng.integers(0, 50, loans), rng.integers(40, 100, loans)
    ltv, income = rng.normal(0.7, 0.15, loans), rng.normal(0.0, 1.0, loans)
    product, region = rng.integers(0, 2, loans), rng.integers(0, 5, loans)
    alive, rows = np.ones(loans, bool), []
    ids = np.array([f"H{i:06d}" for i in range(loans)], dtype=object)
    calendar = pd.period_range(quarters[0], periods=160, freq="Q").astype(str).to_numpy()
    for t in range(60):
        at = np.flatnonzero(alive & (start <= t) & (t < start + term))
        hazard = (
            np.exp(-5.4 + 1.5 * (ltv[at] - 0.7) - 0.3 * income[at] + 0.3 * product[at] + 0.35 * change[t])
            * shock[t]
        )
        draw = rng.random(at.size) * (1.0 + np.expm1(hazard) + 0.025)
        state = np.where(draw < np.expm1(hazard), "D", np.where(draw < np.expm1(hazard) + 0.025, "P", "C"))
        rows.append(
            pd.DataFrame(
                {
                    "id": ids[at], "quarter": quarters[t], "opened": calendar[start[at]], "matures": calendar[start[at] + term[at] - 1],
                    "owed": 1e5 * (1.0 - (t - start[at] + 1) / (term[at] + 1)), "interest": 0.05, "state": state, "ltv": ltv[at],
                    "income": income[at], "product": np.where(product[at], "floating", "fixed"), "region": region[at].astype(str),
                }
            )
        )  # fmt: skip
        alive[at[state != "C"]] = False
    return pd.concat(rows, ignore_index=True)


def _book(rng: np.random.Generator, loans: int) -> pd.DataFrame:
    """One row each at as_of: loans up to nine years old, which run for another two to thirty years."""
    age, left = rng.integers(1, 36, loans), rng.integers(8, 121, loans)
    calendar = pd.period_range(end="2025Q4", periods=40, freq="Q").append(
        pd.period_range("2026Q1", periods=130, freq="Q")
    )
    label = calendar.astype(str).to_numpy()
    return pd.DataFrame(
        {
            "id": np.char.add("B", np.arange(loans).astype("U8")).astype(object), "quarter": "2025Q4", "opened": label[40 - age],
            "matures": label[39 + left], "owed": rng.lognormal(11.0, 0.8, loans), "interest": rng.uniform(0.02, 0.07, loans),
            "state": "C", "ltv": rng.normal(0.7, 0.15, loans), "income": rng.normal(0.0, 1.0, loans),
            "product": np.where(rng.integers(0, 2, loans), "floating", "fixed"), "region": rng.integers(0, 5, loans).astype(str),
        }
    )  # fmt: skip


def write_study(folder: Path, loans: int) -> Path:
    """study.yaml with a history of 3,000 loans, a book of ``loans``, three scenarios and a VAR."""
    rng = np.random.default_rng(7)
    macro = _macro(rng, 88)
    macro.to_csv(folder / "macro.csv", index=False)
    frame = pd.concat([_panel(rng, 3000, macro), _book(rng, loans)], ignore_index=True)
    frame.to_parquet(folder / "loans.parquet", index=False)
    last = float(macro["price_index"].iloc[-1])
    for name, peak, fall in (("baseline", 0.0, 0.0), ("slump", 2.0, 0.1), ("severe", 4.0, 0.2)):
        shape = np.minimum(np.arange(1, 13), np.arange(13, 1, -1)) / 6.0
        u, p = 6.0 + peak * np.clip(shape, 0, 1), last * (1.0 - fall * np.clip(shape, 0, 1))
        text = SCENARIO.format(
            name=name, u=", ".join(f"{v:.3f}" for v in u), p=", ".join(f"{v:.3f}" for v in p)
        )
        (folder / f"{name}.yaml").write_text(text)
    (folder / "study.yaml").write_text(STUDY)
    return folder / "study.yaml"


def setting_of(folder: Path, loans: int) -> Setting:
    file = sk.load_study(write_study(folder, loans))
    data = sk.prepare(file)
    return checked_setting(file, data, sk.fit(file, data))[0]


def rows(quick: bool) -> list[dict[str, Any]]:
    """One projection of the book along all scenarios; joint draws; joint draws with each source alone and left out."""
    loans, draws = (5_000, 100) if quick else (100_000, 1_000)
    with tempfile.TemporaryDirectory() as folder:
        setting = setting_of(Path(folder), loans)
    told: list[dict[str, Any]] = []
    setting.along(setting.data.paths, threads=1)
    begun, cpu = time.perf_counter(), time.process_time()
    setting.along(setting.data.paths, threads=1)
    one = time.process_time() - cpu
    base = {
        "analysis": "bands",
        "loans": setting.portfolio.n_loans,
        "quarters": setting.book.horizon,
        "scenarios": 3,
    }
    told.append(
        base
        | {
            "what": "one projection, 3 scenarios",
            "seconds": time.perf_counter() - begun,
            "cpu": one,
            "ratio": 1.0,
        }
    )
    for what, alone in ((f"{draws:,} joint draws", 0), (f"{draws:,} joint draws, sources apart", 250)):
        spec = Bands(draws=draws, lgd_se=0.05)
        if not alone:
            spec = spec.model_copy(update={"source_draws": 0})
        paths = chosen_paths(setting, spec)
        begun, cpu = time.perf_counter(), time.process_time()
        drawn = run_draws(setting, paths, spreads_of(setting, paths, spec), spec)
        took, used = time.perf_counter() - begun, time.process_time() - cpu
        c = drawn.compression
        told.append(
            base
            | {"what": what, "seconds": took, "cpu": used, "ratio": used / one, "standing": c.standing}
            | {"compression_error": c.error, "segment_error": c.segment_error}
        )
    return told
