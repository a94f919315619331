"""The real-input study from check to report, through the command line.

The inputs lie beside the repository. Without them these tests fail under CI (CI=true) and are skipped elsewhere.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from tests import program
from tests.realdata import prepare
from tests.shared_inputs import under_ci

pytestmark = pytest.mark.realdata


def demand_inputs() -> Path:
    """The inputs' folder; a failure under CI, a skip elsewhere, when it lacks a file."""
    try:
        return prepare.inputs_folder()
    except prepare.InputsMissing as missing:
        if under_ci():
            pytest.fail(f"real inputs are part of CI: {missing}")
        pytest.skip(f"real inputs missing: {missing}")


def stresskit(*words: str | Path, cwd: Path) -> str:
    """Output of one command; any exit code but 0, or anything on stderr, is a failure."""
    done = program.stresskit(*words, cwd=cwd)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    return done.stdout


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    demand_inputs()
    return prepare.prepare(tmp_path_factory.mktemp("small_business") / "study")


@pytest.fixture(scope="module")
def checked(study: Path) -> dict[str, Any]:
    outcome: dict[str, Any] = json.loads(stresskit("check", study, "--json", cwd=study.parent))
    return outcome


@pytest.fixture(scope="module")
def run(study: Path) -> Path:
    stresskit("run", study, "--out", "run1", cwd=study.parent)
    return study.parent / "run1"


def counts(outcome: dict[str, Any]) -> dict[str, int]:
    return {f["code"]: f["count"] for f in outcome["findings"]}


def test_check_reports_every_known_quirk(checked: dict[str, Any]) -> None:
    found = counts(checked)
    frame = pd.read_csv(prepare.inputs_folder() / "small_business_loans.csv", dtype=str)
    charged_off = frame["final_status"] == "CHGOFF"
    assert len(frame) == 2101
    assert found["missing_origination"] == 2
    assert found["term_not_positive"] == 3
    assert found["date_without_event"] == 11
    # every other paid loan lacks its date; the two without disbursement leave first, the 11 with a default date too
    assert (~charged_off).sum() == 1415
    assert found["undated_payoff"] == 1415 - 2 - 11
    # 221 by the day. A charge-off in the quarter of the contract end is on time here, and so is a term of 0.
    assert found["default_after_maturity"] == late_by_quarter(frame[charged_off])
    assert 200 <= found["default_after_maturity"] <= 221


def late_by_quarter(frame: pd.DataFrame) -> int:
    opened = pd.PeriodIndex(frame["disbursed"], freq="M")
    ends = [(m + int(n)).asfreq("Q") for m, n in zip(opened, frame["term_months"], strict=True)]
    left = pd.PeriodIndex(frame["charged_off"], freq="Q")
    term = frame["term_months"].astype(int)
    return sum(a > b for a, b, n in zip(left, ends, term, strict=True) if n > 0)


def test_nothing_is_dropped_silently(checked: dict[str, Any]) -> None:
    table = pd.DataFrame(checked["reconciliation"])
    total = table[table["what"] == "in"].iloc[0]
    parts = table[table["what"] != "in"]
    assert total["loans"] == 2101
    assert total["events_default"] == 686
    for column in ("rows", "loans", "events_default", "events_payoff", "balance"):
        assert parts[column].sum() == pytest.approx(total[column], rel=1e-12), column
    assert checked["facts"]["events_default"] == 683  # 686 less three with a term of 0


def test_assumptions_are_told(checked: dict[str, Any]) -> None:
    told = " ".join(map(str, checked["assumptions"]))
    for word in ("0.07", "paid off without a date", "after the contract end", "ASSUMED", "early-repayment"):
        assert word in told, word


def test_the_run_is_sane(run: Path) -> None:
    summary = pd.read_csv(run / "summary.csv")
    whole = summary[summary["segment"] == "portfolio"].set_index("scenario")
    assert set(whole.index) == {"supervisory_baseline", "severely_adverse"}
    base, severe = whole.loc["supervisory_baseline"], whole.loc["severely_adverse"]
    assert 300 < base["loans"] < 400  # 362 contracts by the month run beyond 2024
    for measure in ("pd_lifetime", "el_lifetime"):
        assert severe[measure] > 1.5 * base[measure] > 0, measure
    # features lag by four quarters: the first year is decided by history, but for the rate less last quarter's inflation
    for measure in ("pd_12m", "el_12m"):
        assert severe[measure] == pytest.approx(base[measure], rel=0.02), measure
        assert base[measure] > 0, measure
    # real-estate loans older than 28 quarters: 5 charge-offs in some 10,000 quarters, recession included
    assert 0.0002 < base["pd_12m"] < 0.003
    assert severe["pd_lifetime"] < 0.05
    assert base["el_lifetime"] < 0.005 * base["exposure"]
    segments = pd.read_parquet(run / "segments.parquet")
    for measure in ("survival", "default_cumulative", "matured"):
        assert segments[measure].between(0, 1).all(), measure
    assert (segments[["el", "balance", "default", "default_amount"]] >= 0).all().all()
    one = segments[["survival", "matured", "default_cumulative"]].sum(axis=1)
    assert (one - 1).abs().max() < 1e-12  # no payoff hazard here


def test_year_view_stages_capital_and_both_balance_sheets(run: Path) -> None:
    years = pd.read_csv(run / "years.csv")
    keys = ["balance_sheet", "scenario", "until"]
    whole = years[years["by"].isna()].set_index(keys).sort_index()
    assert set(years["balance_sheet"]) == {"run_off", "constant"}
    for scenario in ("supervisory_baseline", "severely_adverse"):
        runs, held = whole.loc["run_off", scenario], whole.loc["constant", scenario]
        assert (
            runs.index.tolist() == held.index.tolist() == ["2024Q4", *(f"{y}Q4" for y in range(2025, 2030))]
        )
        assert (np.diff(runs["balance_end"]) < 0).all()
        assert held["balance_end"].nunique() == 1
        # contracts that end are renewed young, at ages with more charge-offs
        assert (held["default_amount"].iloc[1:] > runs["default_amount"].iloc[1:]).all()
        assert (runs["rwa"] > 0).all()
        assert runs["rwa"].iloc[0] < 0.35 * runs["balance_end"].iloc[0]
        assert (runs["impairment"] > 0).all()
    at_start = whole.xs("2024Q4", level="until").loc["run_off", "balance_stage_2"]
    assert at_start["supervisory_baseline"] == 0
    assert (
        at_start["severely_adverse"]
        > 0.9 * whole.loc[("run_off", "severely_adverse", "2024Q4"), "balance_end"]
    )
    summary = pd.read_csv(run / "summary.csv")
    twelve = summary[summary["segment"] == "portfolio"].set_index("scenario")["pd_12m"]
    for scenario, pd_12m in twelve.items():
        assert whole.loc[("run_off", scenario, "2025Q4"), "pd"] == pytest.approx(pd_12m, rel=1e-12)


def test_macro_signs_and_period_errors(run: Path) -> None:
    table = pd.read_csv(run / "coefficients.csv").set_index("term")
    assert table.loc["unemployment_change", "coef"] > 0
    assert table.loc["house_price_growth", "coef"] < 0
    assert table.loc["real_estate_backed[1]", "coef"] < -1.5
    assert (table["se_kind"] == "period").all()
    # the moving column: every loan is assumed to pay 7 %, so only inflation tells quarters apart; nothing is found
    assert abs(table.loc["real_rate", "statistic"]) < 2
    macro = table.loc[["unemployment_change", "house_price_growth"]]
    assert (macro["se_period"] > macro["se_model"]).all()  # one shock hits all loans of a quarter


def test_the_report_stands_alone(run: Path) -> None:
    text = (run / "report.html").read_text(encoding="utf-8")
    for word in ("severely_adverse", "supervisory_baseline", "real_estate_backed", "undated_payoff"):
        assert word in text, word
    assert "<svg" in text
    assert 'src="http' not in text


def test_missing_inputs_fail_under_ci_and_skip_elsewhere(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("STRESSKIT_SHARED", str(tmp_path))
    monkeypatch.setenv("CI", "true")
    with pytest.raises(pytest.fail.Exception, match="small_business_loans"):
        demand_inputs()
    monkeypatch.delenv("CI")
    with pytest.raises(pytest.skip.Exception, match="small_business_loans"):
        demand_inputs()
    assert prepare.main([str(tmp_path / "study")]) == 4
    assert "STRESSKIT_SHARED" in capsys.readouterr().err
