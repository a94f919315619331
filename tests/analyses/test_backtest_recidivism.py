"""Weekly arrests of 432 released prisoners (Rossi, Berk and Lenihan 1980; lifelines.datasets.load_rossi) as a panel.

All are released in the same week and followed for 52: what was expected after week 26 is checked against sums over
the raw table and against statsmodels.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from lifelines.datasets import load_rossi

from stresskit.analyses.ask import analyse
from stresskit.runs.records import Analysis
from stresskit.spec.backtest import Backtest
from tests.analyses.world import setting_of

STUDY = """\
study: recidivism
frequency: month                # a week of the data stands in a month of the calendar
as_of: 2004-04
loans:
  file: nothing.csv
  layout: panel
  columns: {loan: person, period: week, origination: released, maturity: ends, balance: owed}
  outcome: {column: state, default: [A]}
  counter_starts: 2000-01
  assume: {rate: 0.0}
  segments: [fin]
  static: [prio]
hazards:
  default:
    link: logit
    terms:
      - {age: linear}
      - {loan: prio}
      - {loan: fin, as: category, reference: "0"}
loss:
  lgd: {constant: 0.5}
  discount: none
scenarios: [plain.yaml]
"""
HALF = "2002-02"  # week 26


def weeks() -> pd.DataFrame:
    """A row per person and week under observation."""
    raw = load_rossi().reset_index(names="person")
    rows = raw.loc[raw.index.repeat(raw["week"])].copy()
    rows["now"] = rows.groupby("person").cumcount() + 1
    arrested = (rows["now"] == rows["week"]) & (rows["arrest"] == 1)
    return pd.DataFrame(
        {
            "person": "P" + rows["person"].astype(str).str.zfill(3), "week": rows["now"], "released": 1, "ends": 60, "owed": 1.0,
            "state": np.where(arrested, "A", "C"), "fin": rows["fin"].astype(str), "prio": rows["prio"],
        }
    )  # fmt: skip


def design(rows: pd.DataFrame) -> pd.DataFrame:
    columns = {"one": 1.0, "week": rows["week"], "prio": rows["prio"], "fin": (rows["fin"] == "1") * 1.0}
    return pd.DataFrame(columns).astype(float)


@pytest.fixture(scope="module")
def found(tmp_path_factory: pytest.TempPathFactory) -> Analysis:
    folder = tmp_path_factory.mktemp("rossi")
    (folder / "study.yaml").write_text(STUDY)
    (folder / "plain.yaml").write_text("scenario: plain\nstarts: 2004-05\n")
    return analyse(setting_of(folder / "study.yaml", loans=weeks()), "backtest", Backtest(cutoffs=(HALF,)))


def test_actual_and_expected_after_half_a_year(found: Analysis) -> None:
    rows = weeks()
    early, late = rows[rows["week"] <= 26], rows[rows["week"] > 26]
    fit = sm.Logit((early["state"] == "A") * 1.0, design(early)).fit(disp=0)
    # ages past the last one that was seen keep its value: half a year is all that was known
    p = np.asarray(fit.predict(design(late.assign(week=26))))
    totals = found.table("totals").iloc[0]
    assert totals["defaults"] == (late["state"] == "A").sum() == 60
    assert totals["expected"] == pytest.approx(p.sum(), rel=1e-6)
    arrested = (late["state"] == "A").to_numpy()
    score = found.table("scores").set_index("said_by").loc["model", "log_score"]
    assert score == pytest.approx(np.where(arrested, np.log(p), np.log1p(-p)).mean(), rel=1e-6)
    rate = ((early["state"] == "A").groupby(early["fin"]).sum() + 0.5) / (early.groupby("fin").size() + 1.0)
    flat = found.table("scores").set_index("said_by").loc["flat rate", "expected"]
    assert flat == pytest.approx(float((late.groupby("fin").size() * rate).sum()), rel=1e-9)


def test_without_losses_from_sight_the_incidence_is_the_plain_share(found: Analysis) -> None:
    raw = load_rossi()
    left = raw["week"] > 26
    row = found.table("summary").iloc[0]
    assert row["loans"] == left.sum()
    assert row["pd_actual"] == pytest.approx(raw.loc[left, "arrest"].mean(), rel=1e-12)
