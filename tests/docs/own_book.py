"""The files that the documentation's examples name, made from a small demo bank.

loans.csv       a row per loan and month, the demo's panel
loans_once.csv  a row per loan: opened, matures, first and last month seen, kind and date of exit
macro.csv, scenarios and the study: as the README shows them
macro_regional.csv, regional.yaml and its scenarios: as docs/regional.md shows them
"""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd

from stresskit.demo.bank import write_demo
from tests.docs.markdown import ROOT, blocks

LOANS, SEED = 800, 7


def write_own_book(folder: Path) -> None:
    """Everything that README and docs/own-loans.md take for granted, in one folder."""
    write_demo(folder / "demo", seed=SEED, loans=LOANS)
    panel = pd.read_parquet(folder / "demo" / "loans.parquet")
    panel = panel[~panel["loan_id"].isin(spoiled(folder / "demo"))]
    for date in ("month", "opened", "matures"):
        panel[date] = pd.to_datetime(panel[date])
    panel.to_csv(folder / "loans.csv", index=False, date_format="%Y-%m-%d")
    once(panel).to_csv(folder / "loans_once.csv", index=False, date_format="%Y-%m-%d")
    (folder / "macro.csv").write_bytes((folder / "demo" / "macro.csv").read_bytes())
    regional_macro(pd.read_csv(folder / "macro.csv")).to_csv(folder / "macro_regional.csv", index=False)
    for name, text in shown_files().items():
        (folder / name).write_text(text, encoding="utf-8")


def regional_macro(macro: pd.DataFrame) -> pd.DataFrame:
    """House prices of three regions in place of the country's: the same cycle, earlier and later, larger and smaller."""
    growth = np.log(macro["house_price_index"]).diff().fillna(0.0)
    out = macro.drop(columns="house_price_index")
    for name, (shift, size) in {"coast": (0, 1.3), "north": (3, 0.7), "valley": (6, 1.0)}.items():
        path = 100.0 * np.exp((size * growth.shift(shift, fill_value=0.0)).cumsum())
        out[f"house_price_index_{name}"] = path.round(2)
    return out


def spoiled(folder: Path) -> set[str]:
    """Loans that the demo spoils on purpose; without them a row per loan can say all that the panel says."""
    kinds = json.loads((folder / "truth.json").read_text(encoding="utf-8"))["spoiled"]
    return {loan for kind in kinds.values() for loan in kind["loans"]}


def once(panel: pd.DataFrame) -> pd.DataFrame:
    """A row per loan. A loan seen from its first month on has no first_seen; others are at risk from the month after."""
    first = panel.groupby("loan_id").first()
    exits = panel[panel["status"].isin(["D", "P"])].groupby("loan_id").first()
    last = panel[~panel["status"].isin(["D", "P"])].groupby("loan_id").last()
    out = first[["opened", "matures", "product", "region", "annual_rate"]].copy()
    month = pd.to_datetime(first["month"]).dt.to_period("M")
    late = month > pd.to_datetime(first["opened"]).dt.to_period("M")
    out["first_seen"] = (month + 1).astype(str).where(late)
    out["last_seen"] = pd.to_datetime(last["month"]).reindex(out.index)
    out["balance"] = last["balance"].reindex(out.index)
    out["ended"] = exits["status"].reindex(out.index).map({"D": "defaulted", "P": "repaid"}).fillna("open")
    when = pd.to_datetime(exits["month"]).reindex(out.index)
    out["default_date"] = when.where(out["ended"] == "defaulted")
    out["payoff_date"] = when.where(out["ended"] == "repaid")
    seen_at_risk = out["last_seen"].notna()
    return out[seen_at_risk].reset_index()


def shown_files() -> dict[str, str]:
    """Studies and scenarios of README and docs/regional.md by the file name they are to be saved under."""
    shown = [b for page in ("README.md", "docs/regional.md") for b in blocks(ROOT / page)]
    studies = [b.text for b in shown if b.complete == "study"]
    scenarios = [b.text for b in shown if b.complete == "scenario"]
    files = {f"{text.split('scenario: ')[1].split()[0]}.yaml": text for text in scenarios}
    names = ("study.yaml", "study_spells.yaml", "regional.yaml")
    return files | dict(zip(names, studies, strict=True))
