"""Backtest and model choice as commands, and as sections of a page."""

from __future__ import annotations

import json
import subprocess
from pathlib import Path

import pandas as pd
import pytest

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.report.analysis import section
from stresskit.spec.backtest import Backtest
from stresskit.spec.model_choice import ModelChoice
from tests import program
from tests.analyses import past_world as world
from tests.analyses.world import setting_of


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("shown")
    world.write_world(folder)
    world.panel(800, seed=9).to_csv(folder / "loans.csv", index=False)
    return folder / "study.yaml"


def stresskit(*words: str | Path) -> subprocess.CompletedProcess[str]:
    return program.stresskit(*words, cwd=Path.cwd())


def test_backtest_as_a_command(study: Path, tmp_path: Path) -> None:
    done = stresskit(
        "backtest", study, "--cutoff", "2007Q4", "--steps", "8", "--out", tmp_path / "bt", "--json"
    )
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)
    assert told["facts"]["steps"] == {"2007Q4": 8}
    row = pd.read_csv(tmp_path / "bt" / "summary.csv").iloc[0]
    assert row["pd_model"] == pytest.approx(told["tables"]["summary"][0]["pd_model"], rel=1e-9)
    page = (tmp_path / "bt" / "report.html").read_text()
    assert "A row per cut-off" in page
    assert "What" not in done.stderr


def test_model_choice_as_a_command(study: Path) -> None:
    done = stresskit("model-choice", study)
    assert done.returncode == 0, done.stderr
    assert "Under slump the lifetime loss runs from" in done.stdout


def test_wrong_dates_end_with_their_exit_codes_and_one_line(study: Path) -> None:
    wrong = stresskit("backtest", study, "--cutoff", "2007-13")
    assert wrong.returncode == 2
    assert "backtest: cutoffs.0: " in wrong.stderr
    assert "Traceback" not in wrong.stderr
    early = stresskit("backtest", study, "--cutoff", "1990Q1")
    assert early.returncode == 2
    assert "cut-off 1990Q1 leaves nothing to fit" in early.stderr


def test_pictures_are_the_same_bytes_every_time(study: Path) -> None:

    file = sk.load_study(study)
    setting = setting_of(file, loans=pd.read_csv(study.parent / "loans.csv"))
    quick = ModelChoice(lags=(1,), halves=False, tails=False, out_of_time=0)
    for key, spec, count in (("backtest", Backtest(cutoffs=("2007Q4",)), 3), ("model_choice", quick, 1)):
        found = analyse(setting, key, spec)
        once, again = section(found), section(found)
        assert len(once.pictures) == count
        for one, two in zip(once.pictures, again.pictures, strict=True):
            assert one == two
            assert one.caption
            assert "nan" not in "".join(str(r.value) for p in one.panels for r in p.rows)
