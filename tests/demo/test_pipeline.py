"""The demo through the whole house: files, quality rules, fits, the command line."""

from __future__ import annotations

import json
import resource
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.demo.dirt import DIRT
from stresskit.demo.economy import place_linear
from stresskit.demo.truth import monthly_features
from stresskit.runs.api import Prepared, StudyFile, fit, load_study, prepare
from tests.demo.conftest import Written
from tests.demo.drawn import TRUE, true_values
from tests.demo.test_truth import economy_of


@pytest.fixture(scope="module")
def prepared(full: Written) -> tuple[StudyFile, Prepared]:
    file = load_study(full.study)
    return file, prepare(file)


@pytest.mark.slow
def test_the_shipped_demo_contains_its_truth(prepared: tuple[StudyFile, Prepared]) -> None:
    """From files through quality rules to the fit: every stated coefficient inside its 95 % interval."""
    fits = fit(*prepared)
    for cause in TRUE:
        interval = fits[cause].conf_int(0.05, kind="period")
        for name, value in true_values(fits[cause]).items():
            lower, upper = interval.loc[name]
            assert lower <= value <= upper, (cause, name, lower, value, upper)
            # a control without an effect has an interval around nothing; that of the LTV's whole range of 1 is small
            widest = 4 * abs(value) if value else 0.5
            assert upper - lower < widest, (cause, name, "interval too wide to mean anything")
        assert all(ok is not False for ok in fits[cause].coefficient_table()["sign_ok"])


@pytest.mark.slow
def test_engine_features_are_the_true_ones(full: Written, prepared: tuple[StudyFile, Prepared]) -> None:
    """Transform, lag and placement against the truth's own code: coefficients alone do not show a quarter's slip."""
    got = prepared[1].features
    true = monthly_features(economy_of(full.macro), start=got.start, end=got.start + got.n_periods - 1)
    assert set(got.names) == {*true.values, "unemployment_level"}
    assert got.n_periods == 120
    economy = economy_of(full.macro)
    level = place_linear(economy.values["unemployment_rate"], economy.start, got.start, got.start + 119)
    np.testing.assert_allclose(got.column("unemployment_level"), level, rtol=0, atol=1e-12)
    for name in true.values:
        np.testing.assert_allclose(got.column(name), true.values[name], rtol=0, atol=1e-12, err_msg=name)


@pytest.mark.slow
def test_check_finds_the_dirt_as_counted(prepared: tuple[StudyFile, Prepared]) -> None:
    found = {f.code: f.count for f in prepared[1].loans.findings}
    per_loan = {"category_once", "static_changes", "origination_changes"}
    for code, (loans, rows, _) in DIRT.items():
        expected = loans if code in per_loan else loans * rows
        if code == "duplicate_conflicting":
            expected = 2 * loans  # both rows of a pair contradict each other
        if code == "after_gap":  # one row after each hole, and after each month that another rule left out
            expected = loans + DIRT["duplicate_conflicting"][0] + DIRT["unknown_status"][0]
        assert found[code] == expected, code


@pytest.mark.slow
def test_events_used_are_the_true_ones_less_those_reported_lost(
    full: Written, prepared: tuple[StudyFile, Prepared]
) -> None:
    table = prepared[1].loans.reconciliation
    total = table[table["what"] == "in"].iloc[0]
    parts = table[table["what"] != "in"]
    for column in ("rows", "loans", "events_default", "events_payoff"):
        assert parts[column].sum() == total[column], column
    assert parts["balance"].sum() == pytest.approx(total["balance"], rel=1e-12)
    assert total["rows"] == len(full.loans)
    risk_set = prepared[1].loans.risk_set
    true = full.truth["outcomes_before_spoiling"]
    # struck loans that paid off: five lose their event to a false first-row default
    assert risk_set.events("default") == true["default"]
    assert true["payoff"] - risk_set.events("payoff") == DIRT["event_in_first_row"][0]


@pytest.mark.slow
def test_demo_command_under_a_minute(tmp_path: Path) -> None:
    started = _cpu_of_children()
    done = subprocess.run(
        [sys.executable, "-m", "stresskit.cli", "demo", "--out", "bank", "--json"],
        cwd=tmp_path, capture_output=True, text=True, check=False, timeout=300,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    summary = pd.DataFrame(json.loads(done.stdout)["summary"])
    whole = summary[summary["segment"] == "portfolio"].set_index("scenario")
    assert set(whole.index) == {"baseline", "deep_recession", "rates_up", "weighted"}
    assert whole.loc["deep_recession", "el_lifetime"] > whole.loc["baseline", "el_lifetime"] * 1.2
    assert (whole["pd_no_payoff"] > whole["pd_lifetime"]).all()
    assert np.isfinite(whole.select_dtypes("number").to_numpy()).all()
    assert 0.003 < whole.loc["baseline", "pd_12m"] < 0.03
    for name in ("study.yaml", "run/manifest.json", "run/report.html", "run/results.xlsx"):
        assert (tmp_path / "bank" / name).is_file(), name
    # processor seconds: wall time on a busy machine says nothing about the demo
    assert _cpu_of_children() - started < 60


def _cpu_of_children() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime
