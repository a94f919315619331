"""A study with every section of staging, capital, years and adjustments on the command line."""

from __future__ import annotations

import json
from pathlib import Path

import openpyxl
import pandas as pd
import pytest

from stresskit.core.errors import TextError
from stresskit.runs.api import load_study
from tests.cli.small_study import STUDY, write_small_study
from tests.program import stresskit

SECTIONS = """\
breakdowns: [[product], [product, place], [rating]]
years: {first: 3}
staging:
  at_origination: {conditions: baseline}
  ratio: 1.3
  increase: 0.01
  combine: either
  backstop_pd: 0.6
  stays_years: 1
capital:
  class: product
  values: {fixed: residential_mortgage, floating: corporate}
  secured: {floating: receivables}
  stressed_weight: 0.5
  maturity: remaining
adjustments:
  floors: {pd_12m: 0.01}
  overlays:
    - {name: east_flood, reason: claims after the flood, where: {place: [east]}, multiply: 1.2, on: el_12m}
"""


@pytest.fixture(scope="module", params=["2020-12", "2020-08"])
def study(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """as_of at the end of a year and within one; a rating column that nothing else reads."""
    path = write_small_study(tmp_path_factory.mktemp("all"), loans=400)
    panel = pd.read_csv(path.parent / "loans.csv")
    panel = panel[panel["month"] <= request.param]
    panel["rating"] = "R" + (panel["id"].str[-1].astype(int) % 3).astype(str)
    panel.to_csv(path.parent / "loans.csv", index=False)
    path.write_text(path.read_text().replace("as_of: 2020-12", f"as_of: {request.param}") + SECTIONS)
    if request.param != "2020-12":
        for name in ("baseline.yaml", "slump.yaml"):
            scenario = path.parent / name
            scenario.write_text(scenario.read_text().replace("starts: 2021Q1", "starts: 2020Q3"))
    return path


def test_everything_is_in_the_run_folder(study: Path) -> None:
    done = stresskit("run", study, "--out", "run", "--no-evidence", "--json", cwd=study.parent)
    assert done.returncode == 0, done.stderr
    out = study.parent / "run"
    manifest = json.loads((out / "manifest.json").read_text())
    assert {"years.csv", "adjustments.csv"} <= set(manifest["outputs"])
    years = pd.read_csv(out / "years.csv", keep_default_na=False, na_values=[""])
    assert set(years["by"].dropna()) == {"product", "product+place", "rating"}
    whole = years[years["segment"] == "portfolio"]
    assert set(whole["scenario"]) == {"baseline", "slump", "weighted"}
    first = whole[whole["scenario"] == "slump"]
    inside = first["until"].iloc[0] != "2020-12"
    assert first["periods"].tolist() == ([0, 4, 12, 12] if inside else [0, 12, 12, 12])
    assert first["year"].tolist() == ([2020, 2020, 2021, 2022] if inside else [2020, 2021, 2022, 2023])
    assert (first["rwa"].iloc[:3] > 0).all()
    assert (first["impairment"].iloc[:3] > 0).all()
    loans = pd.read_parquet(out / "loans.parquet")
    assert set(loans.loc[loans["scenario"] == "slump", "stage"]) == {1, 2}
    assert {"year view", "adjustments"} <= set(
        openpyxl.load_workbook(out / "results.xlsx", read_only=True).sheetnames
    )
    text = (out / "report.html").read_text()
    for heading in ("Year view", "Stages and impairment", "Capital", "Floors and overlays"):
        assert f">{heading}</h2>" in text
    cautions = " ".join(manifest["cautions"])
    assert "not a regulatory figure" in cautions
    assert "not an accounting figure" in cautions
    assert "Floors and overlays of the study change" in cautions
    summary = pd.read_csv(out / "summary.csv")
    assert (summary["el_12m_adjusted"] >= summary["el_12m"]).all()


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("ratio: 1.3\n  increase: 0.01\n  combine: either\n  backstop_pd: 0.6", "low_risk: 0.1", "staging: staging needs ratio, increase or backstop_pd"),
        ("  increase: 0.01\n", "", "staging.combine: combine joins ratio and increase"),
        ("floating: corporate", "floating: sovereign", "capital.values.floating: expected"),
        ("{conditions: baseline}", "{conditions: baseline, column: pd0}", "staging.at_origination.conditions: give column or conditions"),
        ("multiply: 1.2", "multiply: 1.2, add: 5.0", "multiply or add"),
        ("{floating: receivables}", "{floatin: receivables}", "capital.secured.floatin: 'floatin' is not among values"),
        ("stressed_weight: 0.5", "stressed_weight: 50", "capital.stressed_weight"),
        ("maturity: remaining", "maturity: remaining\n  stays_years: 3", "capital.stays_years: staging.stays_years says otherwise"),
        ("floors: {pd_12m: 0.01}", "floors: {pd: 0.01}", "adjustments.floors.pd: unknown key"),
        ("where: {place: [east]}", "where: {place: east}", "adjustments.overlays#1.where.place"),
        ("[rating]]", "[]]", "breakdowns#3"),
        ("{conditions: baseline}", "{conditions: basline}",
         "staging.at_origination.conditions: no scenario 'basline'; did you mean 'baseline'? (mean, baseline, slump)"),
        ("multiply: 1.2", "scenarios: [slump, baselin], multiply: 1.2",
         "adjustments.overlays#1.scenarios#2: no scenario 'baselin'; did you mean 'baseline'? (scenarios: baseline, slump)"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_said_with_its_place(tmp_path: Path, old: str, new: str, words: str) -> None:
    path = write_small_study(tmp_path, loans=2)
    text = path.read_text() + SECTIONS
    assert old in text
    path.write_text(text.replace(old, new))
    with pytest.raises(TextError) as caught:
        load_study(path)
    assert words in str(caught.value)
    assert caught.value.line is not None
    assert caught.value.line > STUDY.count("\n")


def test_an_overlay_of_an_unknown_scenario_is_refused_before_anything_is_read(tmp_path: Path) -> None:
    """By every command that reads the study, with its line, and without a look at the loans."""
    path = write_small_study(tmp_path, loans=2)
    path.write_text(path.read_text() + SECTIONS.replace("multiply: 1.2", "scenarios: [slamp], multiply: 1.2"))
    (tmp_path / "loans.csv").unlink()
    line = (
        path.read_text().splitlines().index(next(x for x in path.read_text().splitlines() if "slamp" in x))
        + 1
    )
    for words in (["check"], ["run", "--out", "out"]):
        done = stresskit(words[0], path.name, *words[1:], cwd=tmp_path)
        assert done.returncode == 3, done.stderr
        told = " ".join(done.stderr.split())
        assert f"{path.name}:{line}:" in told
        assert "did you mean 'slump'?" in told
