"""A feature that goes by a loan column, from text to run folder, through the command line."""

from __future__ import annotations

import dataclasses
import json
import subprocess
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.hazard.result import HazardFit
from stresskit.runs import api
from stresskit.search.api import read_search, search_specifications
from tests import program
from tests.cli.small_study import BASELINE, SLUMP, STUDY, write_small_study

KEYED = "{by: place, of: {west: house_price_west, east: house_price_east}, transform: log_growth, over: 4, lag: 1}"
REGIONAL = STUDY
for before, after in (
    ("    policy_rate: {unit: percent, place: step}\n", "    house_price_east: {unit: index, place: linear}\n    house_price_west: {unit: index, place: linear}\n"),
    ("    unemployment_change: {", f"    house_price_growth: {KEYED}\n    unemployment_change: {{"),
    ("      - {loan: product, as", "      - {macro: house_price_growth, expect: negative}\n      - {loan: product, as"),
):  # fmt: skip
    assert before in REGIONAL
    REGIONAL = REGIONAL.replace(before, after)
EAST = [101.0, 101.5, 102.0, 102.5]
BASE = BASELINE.replace(
    "paths:\n",
    f"paths:\n  house_price_east: {{values: {EAST}}}\n  house_price_west: {{values: [99.0, 99.0, 99.5, 99.5, 100.0, 100.0]}}\n",
)
#: Prices fall in the west alone.
DOWN = (
    SLUMP.replace("slump", "west_slump").split("paths:\n")[0]
    + "paths:\n  house_price_west: {change_from: baseline, peak: -30%, at: 2021Q4, back_by: 2024Q4}\n"
)


def stresskit(*words: str | Path, cwd: Path, code: int = 0) -> subprocess.CompletedProcess[str]:
    done = program.stresskit(*words, cwd=cwd)
    assert done.returncode == code, done.stderr
    return done


pytestmark = pytest.mark.slow


@pytest.fixture(scope="module")
def bank(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the study and a run with evidence (``run``)."""
    folder = tmp_path_factory.mktemp("regional")
    study = write_small_study(folder, loans=400)
    macro = pd.read_csv(folder / "macro.csv").drop(columns="policy_rate")
    steps = np.random.default_rng(8).normal(0.0, 1.2, (len(macro), 2)).cumsum(axis=0)
    macro["house_price_east"] = (100.0 + steps[:, 0]).round(2)
    macro["house_price_west"] = (98.0 + steps[:, 1]).round(2)
    macro.to_csv(folder / "macro.csv", index=False)
    study.write_text(REGIONAL, encoding="utf-8")
    (folder / "baseline.yaml").write_text(BASE, encoding="utf-8")
    (folder / "slump.yaml").write_text(DOWN, encoding="utf-8")
    stresskit("run", study, "--out", "run", cwd=folder)
    return folder


@pytest.fixture(scope="module")
def prepared(bank: Path) -> api.Prepared:
    return api.prepare(api.load_study(bank / "study.yaml"))


@pytest.fixture(scope="module")
def models(bank: Path) -> dict[str, HazardFit]:
    found = (bank / "run" / "models").glob("*.json")
    return {f.stem: HazardFit.from_json(f.read_text(encoding="utf-8")) for f in found}


def _study(bank: Path, text: str) -> api.StudyFile:
    (bank / "other.yaml").write_text(text, encoding="utf-8")
    return api.load_study(bank / "other.yaml")


def test_check_shows_which_variable_each_region_reads(bank: Path) -> None:
    found = json.loads(stresskit("check", "study.yaml", "--json", cwd=bank).stdout)
    sample = pd.DataFrame(found["alignment"])
    assert set(sample["feature"]) == {
        "unemployment_change", "house_price_growth[east]", "house_price_growth[west]",
    }  # fmt: skip


def test_the_run_tells_the_regions_apart(bank: Path) -> None:
    coefficients = pd.read_csv(bank / "run" / "coefficients.csv")
    default = coefficients[coefficients["cause"] == "default"]
    assert (default["term"] == "house_price_growth").sum() == 1
    summary = pd.read_csv(bank / "run" / "summary.csv").set_index(["by", "segment", "scenario"])[
        "pd_lifetime"
    ]
    assert summary[("place", "east", "west_slump")] == summary[("place", "east", "baseline")]
    assert summary[("place", "west", "west_slump")] != summary[("place", "west", "baseline")]
    loans = pd.read_parquet(bank / "run" / "loans.parquet").pivot(index="loan", columns="scenario", values="pd_lifetime")  # fmt: skip
    west = pd.read_csv(bank / "loans.csv").groupby("id")["place"].first().loc[loans.index] == "west"
    changed = loans["baseline"] != loans["west_slump"]
    assert not changed[~west].any()
    assert changed[west].mean() > 0.8  # the others end before the fall reaches them
    features = pd.read_csv(bank / "run" / "features.csv")
    assert set(features["feature"]) == {"unemployment_change", "house_price_growth[east]", "house_price_growth[west]"}  # fmt: skip
    outside = features[features["scenario"] != "history"].pivot_table(
        index=["feature", "period"], columns="scenario", values="outside"
    )
    further = outside["west_slump"] - outside["baseline"]
    assert further["house_price_growth[west]"].max() > 0.05
    assert (further["house_price_growth[east]"] == 0.0).all()
    page = (bank / "run" / "report.html").read_text(encoding="utf-8")
    assert "Scenario west_slump: house_price_growth[west] leaves the range" in page


def test_the_evidence_has_a_profile_of_the_one_term(bank: Path) -> None:
    profile = pd.read_csv(bank / "run" / "evidence" / "lag_profile.csv")
    assert set(profile["term"]) == {"unemployment_change", "house_price_growth"}
    assert profile["llf"].notna().all()
    assert profile.groupby("term")["rows"].nunique().eq(1).all()
    verdicts = pd.read_csv(bank / "run" / "evidence" / "verdicts.csv")
    assert verdicts["asked"].str.contains("house_price_growth").sum() == 1
    stability = pd.read_csv(bank / "run" / "evidence" / "stability.csv")
    assert stability.loc[stability["term"] == "house_price_growth", "macro"].all()


def test_saved_models_project_to_the_same_bits(bank: Path, models: dict[str, HazardFit]) -> None:
    stresskit("project", "study.yaml", "--models", "run/models", "--out", "again", "--no-evidence", cwd=bank)
    for name in ("summary.csv", "loans.parquet", "segments.parquet", "features.csv"):
        assert (bank / "again" / name).read_bytes() == (bank / "run" / name).read_bytes(), name
    assert models["default"].definitions["house_price_growth[west]"].of == "house_price_west"


def test_the_column_is_read_though_nothing_else_names_it(bank: Path, models: dict[str, HazardFit]) -> None:
    file = _study(bank, REGIONAL.replace("segments: [product, place]", "segments: [product]"))
    fit = api.fit(file, api.prepare(file))["default"]
    np.testing.assert_array_equal(fit.coefficients, models["default"].coefficients)


def test_a_level_without_a_variable_stops_the_check(bank: Path) -> None:
    text = REGIONAL.replace("{west: house_price_west, east: house_price_east}", "{east: house_price_east}")
    _study(bank, text)
    said = stresskit("check", "other.yaml", cwd=bank, code=4).stderr
    assert "macro feature 'house_price_growth' goes by 'place' and has no variable for" in said
    assert "of level 'west' (" in said
    assert "(first: L0" in said
    assert "Levels with a variable: 'east'. Name a variable for each level under macro.features.house_price_growth.of" in said  # fmt: skip


def test_an_empty_region_is_a_level_without_a_variable(bank: Path) -> None:
    frame = pd.read_csv(bank / "loans.csv", dtype=str, keep_default_na=False)
    frame.loc[frame["id"] == "L0007", "place"] = ""
    file = api.load_study(bank / "study.yaml")
    with pytest.raises(DataError, match=r"for 1 loans of level '\(missing\)' \(1\) \(first: L0007\)"):
        api.prepare(file, loans=frame)


def test_a_feature_that_no_hazard_reads_asks_nothing_of_the_loans(
    bank: Path, prepared: api.Prepared, models: dict[str, HazardFit]
) -> None:
    unused = "    unused: {by: nowhere, of: {x: house_price_east}}\n"
    file = _study(bank, REGIONAL.replace("  features:\n", f"  features:\n{unused}"))
    data = api.prepare(file)
    assert "nowhere" not in data.loans.risk_set.static
    a, b = (api.project(f, d, models) for f, d in ((file, data), (api.load_study(bank / "study.yaml"), prepared)))  # fmt: skip
    pd.testing.assert_frame_equal(a.summary, b.summary, check_exact=True)
    pd.testing.assert_frame_equal(a.loans, b.loans, check_exact=True)


@pytest.mark.parametrize(
    ("before", "after", "words"),
    [
        ("west: house_price_west", "west: house_price_east", r"another macro feature 'house_price_growth\[west\]' \(of: house_price_west, "),
        ("over: 4, lag: 1}\n    unemp", "over: 4, lag: 2}\n    unemp", r"another macro feature 'house_price_growth\[east\]' \(lag: 1, "),
    ],
)  # fmt: skip
def test_another_definition_is_refused(
    bank: Path, models: dict[str, HazardFit], before: str, after: str, words: str
) -> None:
    assert REGIONAL.count(before) == 1
    file = _study(bank, REGIONAL.replace(before, after))
    with pytest.raises(TextError, match=words):
        api.project(file, api.prepare(file), models)


def test_another_column_is_refused_even_where_it_has_the_same_levels(
    bank: Path, prepared: api.Prepared, models: dict[str, HazardFit]
) -> None:
    file = _study(bank, REGIONAL.replace("by: place", "by: district"))
    frame = pd.read_csv(bank / "loans.csv").assign(district=lambda f: f["place"])
    with pytest.raises(
        TextError, match="'house_price_growth' by loan column 'place', the study has it by 'district'"
    ):
        api.project(file, api.prepare(file, loans=frame), models)
    assert dataclasses.replace(prepared.features, keyed={}).features != prepared.features.features


def test_a_search_says_that_it_cannot_judge_such_features_yet(bank: Path, prepared: api.Prepared) -> None:
    (bank / "search.yaml").write_text(
        "search: s\ncause: default\ncandidates:\n  - {of: unemployment_rate, transforms: [difference], over: [4], lags: [1]}\n",
        encoding="utf-8",
    )
    file = api.load_study(bank / "study.yaml")
    with pytest.raises(TextError) as caught:
        search_specifications(file, prepared, read_search(bank / "search.yaml"))
    assert "search.yaml:2:1: cause: the study's default hazard reads macro features that go by a loan column" in str(caught.value)  # fmt: skip
    assert "(house_price_growth by place)" in str(caught.value)
