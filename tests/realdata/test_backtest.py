"""The real loans across 2007 to 2010: counts against the raw file, and what the command answers."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.runs.api import checked_setting
from stresskit.runs.records import Analysis
from stresskit.spec.backtest import Backtest
from tests.analyses.test_backtest_counts import demand_same
from tests.cli.small_study import reworded
from tests.realdata import prepare
from tests.realdata.test_small_business import demand_inputs, stresskit

pytestmark = pytest.mark.realdata
DATES = ("2007Q4", "2008Q4", "2009Q4")


@pytest.fixture(scope="module")
def found(tmp_path_factory: pytest.TempPathFactory) -> Analysis:
    demand_inputs()
    file = sk.load_study(prepare.prepare(tmp_path_factory.mktemp("past") / "study"))
    data = sk.prepare(file)
    setting, _ = checked_setting(file, data, sk.fit(file, data))
    return analyse(setting, "backtest", Backtest(cutoffs=DATES))


def raw_events() -> pd.DataFrame:
    """First and last quarter of each loan that can be placed, and its charge-off as the study dates it, by pandas alone."""
    frame = pd.read_csv(prepare.inputs_folder() / "small_business_loans.csv", dtype=str)
    lost = frame["final_status"] == "CHGOFF"
    frame = frame[
        frame["disbursed"].notna()
        & (frame["term_months"].astype(int) > 0)
        & (lost | frame["charged_off"].isna())
    ]
    lost = frame["final_status"] == "CHGOFF"
    opened = pd.PeriodIndex(frame["disbursed"], freq="M")
    ends = pd.PeriodIndex(
        [(m + int(n)).asfreq("Q") for m, n in zip(opened, frame["term_months"], strict=True)]
    )
    off = pd.PeriodIndex(frame["charged_off"], freq="Q")
    event = pd.Series([min(a, b) if hit else pd.NaT for a, b, hit in zip(off, ends, lost, strict=True)])
    return pd.DataFrame({"opened": opened.asfreq("Q"), "ends": ends, "event": event.to_numpy()})


@pytest.mark.parametrize("date", DATES)
def test_the_book_and_its_charge_offs_are_those_of_the_file(found: Analysis, date: str) -> None:
    raw, cut, last = raw_events(), pd.Period(date, "Q"), pd.Period("2014Q3", "Q")
    event = pd.PeriodIndex(raw["event"], freq="Q")
    book = (raw["opened"] <= cut) & (raw["ends"] > cut) & ~(event <= cut)
    came = book & (event > cut) & (event <= last)
    row = found.table("totals").set_index("cutoff").loc[date]
    assert row["defaults"] == came.sum()
    assert found.table("summary").set_index("cutoff").loc[date, "loans"] == book.sum()


def test_the_answer_is_no_and_says_why(found: Analysis) -> None:
    """Before 2008 these loans had hardly failed: the fit of then has the wrong signs and misses what came."""
    row = found.table("summary").set_index("cutoff").loc["2007Q4"]
    assert 0.2 < row["pd_actual"] < 0.4
    assert row["pd_model"] < row["pd_no_macro"] < row["pd_flat_rate"] < row["pd_actual"]
    assert found.answer.startswith("No: it expected fewer defaults than last year's rates, and more came.")
    assert "the unexpected sign for unemployment_change, house_price_growth" in found.answer
    assert any("real_estate_backed left out, no event in any level but 0" in note for note in found.notes)
    scores = found.table("scores").query("cutoff == '2007Q4'").set_index("said_by")
    assert scores["log_score"].idxmin() == "model"
    assert np.isfinite(found.table("ranking")["auc"]).all()


def test_the_command_answers_for_the_folder_too(tmp_path: Path, found: Analysis) -> None:
    study = prepare.prepare(tmp_path / "study")
    told = stresskit("backtest", study, "--cutoff", "2007Q4", "--out", tmp_path / "out", cwd=tmp_path)
    assert "No: it expected fewer defaults" in told
    names = {p.name for p in (tmp_path / "out").iterdir()}
    assert {
        "summary.csv",
        "totals.csv",
        "scores.csv",
        "groups.csv",
        "periods.csv",
        "calibration.csv",
        "report.html",
    } <= names
    mine = pd.read_csv(tmp_path / "out" / "summary.csv")
    assert mine["pd_model"].iloc[0] == pytest.approx(found.table("summary")["pd_model"].iloc[0], rel=1e-12)


def test_loans_alike_as_one_line_have_the_same_backtest(tmp_path: Path, found: Analysis) -> None:
    """The file's loans of one month, term, outcome and kind as one line with their number and the sum of their amounts."""
    study = prepare.prepare(tmp_path / "study")
    frame = pd.read_csv(
        prepare.inputs_folder() / "small_business_loans.csv", dtype=str, keep_default_na=False
    )
    frame["month"], frame["gross_disbursed"] = (
        frame["disbursed"].str[:7],
        frame["gross_disbursed"].astype(float),
    )
    alike = ["month", "term_months", "charged_off", "final_status", "real_estate_backed", "new_business"]
    lines = frame.groupby(alike, as_index=False).agg(
        loan=("loan", "first"), disbursed=("disbursed", "first"), gross_disbursed=("gross_disbursed", "sum"), number=("loan", "size"),
    )  # fmt: skip
    assert len(lines) < 0.75 * len(frame)
    lines.to_csv(study.parent / "lines.csv", index=False)
    counted = reworded(
        study.read_text(),
        ("file: inputs/small_business_loans.csv", "file: lines.csv"),
        ("    loan: loan\n", "    loan: loan\n    count: number\n"),
    )
    study.write_text(counted)
    file = sk.load_study(study)
    data = sk.prepare(file)
    setting, _ = checked_setting(file, data, sk.fit(file, data))
    again = analyse(setting, "backtest", Backtest(cutoffs=DATES))
    assert again.answer == found.answer
    assert [t.name for t in again.tables] == [t.name for t in found.tables]
    for table in found.tables:
        demand_same(again.table(table.name), table.frame, table.name)
