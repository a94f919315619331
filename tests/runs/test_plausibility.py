"""Plausibility as tables, words, cautions, files and report: one small study that declares macro.var, end to end."""

from __future__ import annotations

import json
import math
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import openpyxl
import pandas as pd
import pytest

from stresskit.report.checkup import check_report, print_check
from stresskit.report.folder import write_run
from stresskit.report.html import render_report
from stresskit.report.terminal import as_json
from stresskit.report.workbook import sheets
from stresskit.runs import api
from stresskit.runs.plausibility import facts, in_words, plausibility_cautions, plausibility_tables
from stresskit.runs.records import StudyResult
from tests.cli.small_study import write_small_study
from tests.macro.var_world import draw
from tests.report.report_samples import sample

JOBS = """\
scenario: jobs
weight: 0.2
starts: 2021Q1
missing: conditional
paths:
  unemployment_rate: {values: [6.0, 8.0, 9.0, 9.0, 8.5, 8.0]}
afterwards: hold
"""
VAR = """\
  var:
    variables: {unemployment_rate: difference, policy_rate: difference}
    lags: 1
    floors: {policy_rate: 0}
hazards:
"""


def write(folder: Path, *, var: bool, loans: int = 600) -> Path:
    study = write_small_study(folder, loans=loans)
    z = draw(np.random.default_rng(3), 67)
    macro = pd.DataFrame(
        {
            "period": pd.period_range("2004Q2", "2020Q4", freq="Q").astype(str),
            "unemployment_rate": (5 + np.cumsum(0.2 * (z[:, 0] - z[:, 0].mean()))).round(2),
            "policy_rate": (1.5 + np.cumsum(0.2 * (z[:, 1] - z[:, 1].mean()))).round(2),
        }
    )
    macro.loc[macro.index[-1], "policy_rate"] = 1.1
    macro.to_csv(folder / "macro.csv", index=False)
    text = study.read_text()
    if var:
        text = text.replace("hazards:\n", VAR, 1).replace("slump.yaml]", "slump.yaml, jobs.yaml]")
        (folder / "jobs.yaml").write_text(JOBS)
        baseline = (folder / "baseline.yaml").read_text()
        (folder / "baseline.yaml").write_text(baseline.replace("weight: 0.7", "weight: 0.5"))
    study.write_text(text)
    return study


@dataclass(frozen=True)
class Finished:
    file: api.StudyFile
    data: api.Prepared
    result: StudyResult
    run: Path


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Finished:
    file = api.load_study(write(tmp_path_factory.mktemp("study"), var=True))
    data = api.prepare(file)
    fits = api.fit(file, data)
    result = api.project(file, data, fits)
    run = write_run(result, fits, tmp_path_factory.mktemp("runs") / "run")
    return Finished(file, data, result, run)


def test_every_scenario_has_a_row_per_span(finished: Finished) -> None:
    found = finished.result.plausibility
    assert found is not None
    rows = found.scenarios.set_index(["scenario", "span"])
    assert list(rows.index) == [
        (s, w) for s in ("baseline", "slump", "jobs") for w in ("whole path", "first year")
    ]
    assert rows.loc[("baseline", "whole path"), "stated"] == 4
    assert rows.loc[("jobs", "whole path"), ["first", "last", "periods", "stated"]].tolist() == [
        "2021Q1",
        "2022Q2",
        6,
        6,
    ]
    assert rows.loc[("jobs", "whole path"), "d2"] > rows.loc[("baseline", "whole path"), "d2"]
    assert rows["tail"].between(0, 1).all()
    assert (rows["rank"] <= rows["windows"] + 1).all()
    assert (found.variables.query("scenario == 'jobs'")["how"] == ["given", "filled"]).all()
    assert set(found.forecast["variable"]) == {"unemployment_rate", "policy_rate"}
    assert (found.forecast["low"] <= found.forecast["middle"]).all()
    assert (found.forecast["middle"] <= found.forecast["high"]).all()
    assert (found.forecast.query("variable == 'policy_rate'")["low"] >= 0).all()
    assert len(found.pairs) == 0  # policy_rate is stated by none
    assert found.model == facts(finished.data.var) if finished.data.var else False
    assert finished.result.record["var"]["lags"] == 1


def test_paths_say_what_was_filled_between_which_bounds(finished: Finished) -> None:
    paths = finished.result.paths
    mine = paths[(paths["scenario"] == "jobs") & (paths["variable"] == "policy_rate")]
    filled = mine[mine["flag"] == "filled"]
    assert len(filled) == 6
    assert (filled["low"] <= filled["value"]).all()
    assert (filled["value"] <= filled["high"]).all()
    assert set(mine["flag"].iloc[6:]) == {"afterwards"}
    rest = paths.drop(filled.index)
    assert rest[["low", "high"]].isna().all().all()
    assert not rest["at_floor"].any()


def test_values_at_a_floor_are_flagged_counted_and_said(finished: Finished) -> None:
    result = finished.result
    at = result.paths[result.paths["at_floor"]]
    assert 0 < len(at) < 6
    assert (at["value"] == 0).all()
    said = [c for c in result.cautions if "lay below its floor" in c]
    assert len(said) == 1
    assert said[0].startswith(f"Scenario jobs: {len(at)} filled value")
    assert f"from {at['period'].iloc[0]} on" in said[0]
    assert (
        said[0] in plausibility_cautions(result.plausibility, result.paths) if result.plausibility else False
    )


def test_the_run_folder_holds_the_tables(finished: Finished) -> None:
    result, run = finished.result, finished.run
    found = result.plausibility
    assert found is not None
    for name in ("scenarios", "variables", "pairs", "episodes", "forecast"):
        table = pd.read_csv(run / "plausibility" / f"{name}.csv")
        assert list(table.columns) == list(getattr(found, name).columns)
        assert len(table) == len(getattr(found, name))
    manifest = json.loads((run / "manifest.json").read_text())
    assert manifest["var"]["variables"] == {"unemployment_rate": "difference", "policy_rate": "difference"}
    assert "plausibility/scenarios.csv" in manifest["outputs"]
    book = openpyxl.load_workbook(run / "results.xlsx")
    for sheet in ("plausibility", "variables of paths", "pairs of variables", "episodes", "forecast"):
        assert sheet in book.sheetnames
    head, first = list(book["plausibility"].iter_rows(values_only=True))[:2]
    told = dict(zip(head, first, strict=True))
    assert told["d2"] == pytest.approx(found.scenarios["d2"].iloc[0])


def test_the_report_says_it_in_words(finished: Finished) -> None:
    result, run = finished.result, finished.run
    text = (run / "report.html").read_text()
    assert "How plausible the paths are" in text
    assert "forecast, 90% of paths" in text
    found = result.plausibility
    assert found is not None
    for words in found.scenarios["in_words"]:
        assert words[1:] in text
    assert "Dash and dot: values that a scenario leaves out" in text
    assert "Plausibility was not assessed" not in text
    assert "2 variables" not in text


def test_a_study_without_a_var_says_that_nothing_was_assessed() -> None:
    result = sample(steps=24)
    assert result.plausibility is None
    text = render_report(result)
    assert "Plausibility was not assessed: the study declares no <code>macro.var</code>" in text
    assert "plausibility" not in [s.name for s in sheets(result)]


def test_a_study_without_a_var_has_the_columns_and_cautions_it_had(tmp_path: Path) -> None:
    file = api.load_study(write(tmp_path, var=False))
    data = api.prepare(file)
    result = api.project(file, data, api.fit(file, data))
    assert data.var is None
    assert list(result.paths.columns) == ["scenario", "variable", "unit", "period", "value", "flag"]
    assert "var" not in result.record
    assert not [c for c in result.cautions if "VAR" in c]


def test_check_shows_paths_reach_and_plausibility(
    finished: Finished, capsys: pytest.CaptureFixture[str]
) -> None:
    told = check_report(finished.file, finished.data)
    print_check(told)
    text = capsys.readouterr().out
    for words in (
        "Scenario paths at the end of each year", "Plausibility: distance", "Each variable by itself",
        "VAR of unemployment_rate (difference), policy_rate (difference): 1 lag (fixed)", "Scenario jobs, whole path (6 quarters",
        "filled", "observed", "Macro features outside the range",
    ):  # fmt: skip
        assert words in text, words
    plain = json.loads(as_json(told))
    assert [r["scenario"] for r in plain["plausibility"][::2]] == ["baseline", "slump", "jobs"]
    assert plain["var"]["lags"] == 1
    outside = pd.DataFrame(plain["features_outside"])
    assert {"slump", "jobs"} <= set(outside["scenario"])
    assert (outside["outside_by"] > 0).all()
    assert (outside["periods"] > 0).all()
    # what the check tells before a fit is what the run finds after it
    table = finished.result.features
    table = table[(table["scenario"] != "history") & (table["outside"].astype(float) > 0)]
    for (scenario, feature), rows in table.groupby(["scenario", "feature"]):
        said = outside[(outside["scenario"] == scenario) & (outside["feature"] == feature)].iloc[0]
        for name in ("lowest", "highest"):
            assert said[name] == pytest.approx(rows[name].iloc[0])
        assert (said["periods"], said["first"]) == (len(rows), rows["period"].iloc[0])
        assert said["outside_by"] == pytest.approx(rows["outside"].astype(float).max())
    assert len(outside) == len(table.groupby(["scenario", "feature"]))


def test_a_study_without_a_var_does_not_load_statsmodels(tmp_path: Path) -> None:
    study = write(tmp_path, var=False, loans=40)
    code = (
        "import sys; from stresskit.cli import main\n"
        f"try: main(['check', {str(study)!r}])\nexcept SystemExit as e: assert e.code == 0\n"
        "print('statsmodels' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.splitlines()[-1] == "False"
    assert "not assessed: the study declares no macro.var" in done.stdout


@pytest.mark.parametrize(
    ("tail", "words"),
    [
        (0.9999, "nearer to the forecast than nearly all of such paths"),
        (0.8, "nearer to the forecast than 80% of such paths"),
        (0.5, "about one in 2 such paths is this far from the forecast"),
        (0.29, "about one in 3 such paths is this far from the forecast"),
        (0.005, "about one in 200 such paths is this far from the forecast"),
        (1 / 2345, "about one in 2,300 such paths is this far from the forecast"),
        (1.01e-6, "about one in 990,000 such paths is this far from the forecast"),
        (9e-7, "fewer than one in a million such paths are this far from the forecast"),
        (0.0, "fewer than one in a million such paths are this far from the forecast"),
    ],
)
def test_shares_in_words(tail: float, words: str) -> None:
    assert in_words(tail, 4) == words
    assert in_words(tail, 0) == "nothing is stated in this span"


def test_tables_of_scenarios_that_state_nothing_of_the_var(finished: Finished) -> None:
    model = finished.data.var
    assert model is not None
    tables = plausibility_tables(model, [], {})
    assert len(tables.scenarios) == len(tables.pairs) == len(tables.episodes) == 0
    assert len(tables.forecast) == 2 * 4
    assert tables.sentences == ()
    assert plausibility_cautions(tables, finished.result.paths.head(0)) == []
    assert not math.isnan(float(tables.forecast["middle"].iloc[0]))
