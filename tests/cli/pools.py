"""One study twice: lines with a column of counts, and the same lines written out loan by loan; and the two compared."""

from __future__ import annotations

import json
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from tests.cli.small_study import reworded
from tests.program import stresskit

#: Relative; the two differ in nothing but the order in which sums are added.
EXACT = 1e-9
#: Columns of the loan table that are amounts of the whole line.
AMOUNTS = ("owed", "lent", "price", "line_limit", "income", "due_at_end", "balance")
#: Folders of the two forms.
KINDS = ("lines", "loans")
#: What counts lines or identifiers, and is meant to.
OF_LINES = ("findings.csv", "not_projected.csv", "reconciliation.csv")

_MONTHS = pd.period_range("2017-01", "2020-12", freq="M")


def lines(n: int = 120, *, seed: int = 7) -> pd.DataFrame:
    """A panel of lines: 48 months, counts 1, 2, 3 and 5, amounts of the whole line."""
    rng = np.random.default_rng(seed)
    quarter = np.arange(48) // 3
    change = np.where((quarter >= 6) & (quarter < 11), 2.0, -0.3)
    rows: list[dict[str, Any]] = []
    for i in range(n):
        start, term, count = int(rng.integers(0, 36)), int(rng.choice([36, 48, 60])), (1, 2, 3, 5)[i % 4]
        lent, rate = float(rng.uniform(5e3, 5e4)), float(rng.uniform(0.03, 0.08))
        line = {
            "id": f"L{i:04d}", "opened": str(_MONTHS[start]), "matures": str(_MONTHS[start] + term - 1),
            "product": ("fixed", "floating")[i % 2], "place": ("east", "west", "west")[i % 3],
            "kind": ("term", "linear", "card", "given", "whole")[i % 5], "lent": lent * count,
            "price": lent * rng.uniform(1.0, 1.8) * count, "line_limit": lent * rng.uniform(1.0, 1.5) * count,
            "income": rng.uniform(2.5e4, 7e4) * count, "due_at_end": lent * 0.1 * count, "waits": (0, 6, 18)[i % 3],
            "ccf": (0.3, 0.7)[i % 2], "margin": rng.uniform(0.01, 0.03), "pd_then": rng.uniform(0.02, 0.3),
            "days": (0, 0, 10, 40)[i % 4] if i % 7 else np.nan, "sales": rng.uniform(2.0, 80.0),
            "failed_before": str(_MONTHS[0] - 12 + i % 40) if i % 2 else "", "score": rng.normal(), "n": count,
        }  # fmt: skip
        wait = int(rng.integers(0, 6)) if i % 6 == 0 else 0
        for t in range(start, 48):
            age = t - start + 1
            if age > term:
                break
            hazard = np.exp(-4.8 + 0.2 * np.log(age) + 0.5 * change[t] + 0.4 * (i % 2))
            odds = np.expm1(hazard), np.expm1(np.exp(-4.4))
            draw = rng.random() * (1 + sum(odds))
            state = "D" if draw < odds[0] else "P" if draw < sum(odds) else "C"
            owed = count * lent * (1 - age / (term + 1))
            if age > wait:  # a sixth of the lines are first seen some months after they were opened
                rows.append(
                    line | {"month": str(_MONTHS[t]), "owed": owed, "interest": rate + 0.004 * change[t] * (i % 2),
                            "state": state, "asked": round(float(rng.normal()), 6)}
                )  # fmt: skip
            if state != "C":
                break
    return pd.DataFrame(rows)


def written_out(frame: pd.DataFrame, loan: str = "id", amounts: Iterable[str] = AMOUNTS) -> pd.DataFrame:
    """Each row ``n`` times under identifiers of their own, amounts split evenly, without the column n."""
    frame = frame.reset_index(drop=True)
    out = frame.loc[frame.index.repeat(frame["n"])].copy()
    out[loan] = out[loan] + "-" + out.groupby(level=0).cumcount().astype(str)
    for name in amounts:
        if name in out:
            out[name] = out[name] / out["n"]
    return out.drop(columns="n")


def economy() -> pd.DataFrame:
    """Macro history by quarter."""
    quarters = pd.period_range("2014Q1", "2020Q4", freq="Q")
    t = np.arange(len(quarters))
    slump = (quarters >= pd.Period("2018Q3")) & (quarters < pd.Period("2019Q4"))
    return pd.DataFrame(
        {
            "period": quarters.astype(str),
            "unemployment_rate": (5.0 + 2.0 * slump + 0.1 * np.sin(t)).round(3),
            "policy_rate": (2.0 - 1.0 * slump + 0.2 * np.cos(t / 3)).round(3),
            "house_east": (100 * 1.01**t * (1 - 0.08 * slump)).round(3),
            "house_west": (100 * 1.005**t * (1 - 0.15 * slump)).round(3),
            "wages": (100 * 1.006**t).round(3),
            "drawn": (50 + 5 * slump + np.sin(t)).round(3),
        }
    )


STUDY = """\
study: pools
frequency: month
as_of: 2020-12
loans:
  file: loans.csv
  layout: panel
  columns: {loan: id, period: month, origination: opened, maturity: matures, balance: owed, rate: interest, amount: lent, count: n}
  outcome: {column: state, default: [D], payoff: [P]}
  segments: [product, place]
macro:
  file: macro.csv
  variables:
    unemployment_rate: {unit: percent, place: linear}
    policy_rate: {unit: percent, place: step}
    house_east: {unit: index, place: linear}
    house_west: {unit: index, place: linear}
    wages: {unit: index, place: linear}
    drawn: {unit: level, place: linear}
  var: {variables: {unemployment_rate: difference, policy_rate: difference}, lags: 1}
  features:
    unemployment_change: {of: unemployment_rate, transform: difference, over: 4, lag: 1}
    house_growth: {of: {east: house_east, west: house_west}, by: place, transform: year_on_year}
scenarios: [baseline.yaml, slump.yaml]
"""
BASELINE = """\
scenario: baseline
weight: 0.7
starts: 2021Q1
paths:
  unemployment_rate: {values: [5.0, 5.0, 4.9, 4.9]}
  policy_rate: {values: [2.0, 2.2, 2.4]}
  house_east: {growth: [3%, 3%, 3%, 3%], rate: annualised}
  house_west: {growth: [2%, 2%, 2%, 2%], rate: annualised}
  wages: {growth: [2%, 2%, 2%, 2%], rate: annualised}
  drawn: {values: [50, 51, 52]}
afterwards: hold
"""
SLUMP = """\
scenario: slump
based_on: baseline
weight: 0.3
starts: 2021Q1
paths:
  unemployment_rate: {add_to: baseline, values: [1.0, 2.0, 3.0, 3.5, 3.0, 2.0, 1.0], then: zero}
  policy_rate: {add_to: baseline, values: [-0.5, -1, -1.5, -1.5], then: hold}
  house_east: {multiply: baseline, values: [0.98, 0.94, 0.9, 0.88], then: hold}
  house_west: {multiply: baseline, values: [0.97, 0.92, 0.85, 0.8], then: hold}
  drawn: {multiply: baseline, values: [1.05, 1.15, 1.2], then: hold}
afterwards: hold
"""


def write_inputs(at: Path, study: str) -> None:
    """Everything but the loans."""
    at.mkdir(parents=True)
    economy().to_csv(at / "macro.csv", index=False)
    for name, text in (("study", study), ("baseline", BASELINE), ("slump", SLUMP)):
        (at / f"{name}.yaml").write_text(text)


def write_forms(folder: Path, study: str, tables: Mapping[str, pd.DataFrame]) -> Path:
    """Folders lines and loans: study, scenarios, macro history and the tables; those with a column n are written out.

    ``study`` names the column under loans.columns as ``, count: n``; the other form is without these words.
    """
    for kind in KINDS:
        write_inputs(folder / kind, study if kind == "lines" else reworded(study, (", count: n", "")))
        for name, table in tables.items():
            mine = written_out(table, "id" if "id" in table else "loan") if "n" in table else table
            (mine if kind == "loans" else table).to_csv(folder / kind / name, index=False)
    return folder


def both(folder: Path, *words: str) -> list[Any]:
    """What the command prints with --json in each folder."""
    told = []
    for kind in KINDS:
        done = stresskit(*words, "--json", cwd=folder / kind)
        assert done.returncode == 0, (kind, done.stderr[-3000:])
        told.append(json.loads(done.stdout))
    return told


def same(lines: pd.DataFrame, loans: pd.DataFrame, what: str, *, atol: float = 1e-9) -> None:
    """All columns alike, in the order of the rows."""
    assert list(lines) == list(loans), what
    assert len(lines) == len(loans), what
    for name in lines:
        if not pd.api.types.is_numeric_dtype(loans[name]):
            assert lines[name].fillna("").tolist() == loans[name].fillna("").tolist(), (what, name)
            continue
        a, b = (x[name].to_numpy(dtype=float, na_value=np.nan) for x in (lines, loans))
        assert np.allclose(a, b, rtol=EXACT, atol=atol, equal_nan=True), (what, name)


def same_tables(folder: Path, run: str) -> set[str]:
    """Every CSV and Parquet file of two run folders alike, but for those of lines; returns their names."""
    files = {
        str(p.relative_to(folder / "loans" / run))
        for p in (folder / "loans" / run).rglob("*")
        if p.suffix in (".csv", ".parquet") and p.name not in OF_LINES
    }
    for name in sorted(files):
        read = pd.read_csv if name.endswith(".csv") else pd.read_parquet
        lines, loans = (read(folder / kind / run / name) for kind in KINDS)
        if name.endswith("coefficients.csv"):
            # a line is one cluster
            lines, loans = (x.drop(columns=["se_loan"], errors="ignore") for x in (lines, loans))
        if name == "inputs.csv":
            lines, loans = (x[["file", "differs"]] for x in (lines, loans))
        if name == "loans.parquet":
            lines, loans = _of_one(lines), _of_one(loans)
        same(lines, loans, f"{run}/{name}")
    return files


def _of_one(table: pd.DataFrame) -> pd.DataFrame:
    """The loan table as it is for one loan of each line: loans of a line have one row, which says how many they are."""
    table = table.assign(loan=table["loan"].str.split("-").str[0], count=table.get("count", 1.0))
    amounts = ["balance", "el_12m", "el_lifetime"]
    table[amounts] = table[amounts].div(table["count"], axis=0)
    keys = ["scenario", "loan"]
    counts = table.groupby(keys, sort=False)["count"].sum().to_numpy()
    rows = table.groupby(keys, sort=False).first().reset_index()
    spread = table.groupby(keys, sort=False)[[*amounts, "pd_lifetime"]].agg(np.ptp).to_numpy()
    assert np.abs(spread).max() < 1e-6  # loans of a line are alike
    return rows.assign(count=counts).sort_index(axis=1)


def same_words(lines: list[str], loans: list[str]) -> None:
    """Cautions alike, but for the share of the rows of the file that are not used."""
    kept = [[c for c in told if "not used in estimation" not in c] for told in (lines, loans)]
    assert kept[0] == kept[1]
