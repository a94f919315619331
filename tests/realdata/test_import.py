"""The supervisor's published tables, imported: every number as published, one command, accepted by the real-input study."""

from __future__ import annotations

import csv
import hashlib
import json
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import DataError
from stresskit.imports.api import import_table
from stresskit.runs.api import load_study, prepare
from stresskit.spec.load import load_import, load_scenario
from stresskit.spec.scenario import ScenarioSpec
from tests.realdata import prepare as inputs
from tests.realdata.test_small_business import demand_inputs, stresskit

pytestmark = pytest.mark.realdata

FOLDER = "us_supervisory_2025"
TABLES = {
    "supervisory_baseline": "2025-Table_2A_Supervisory_Baseline_Domestic.csv",
    "severely_adverse": "2025-Table_3A_Supervisory_Severely_Adverse_Domestic.csv",
}
HISTORY = "2025-Table_1A_Historic_Domestic.csv"


def published(name: str) -> list[dict[str, str]]:
    """A table by the standard library's reader, so that no code of the import is trusted."""
    with (inputs.inputs_folder() / FOLDER / name).open(encoding="utf-8-sig", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    demand_inputs()
    return inputs.prepare(tmp_path_factory.mktemp("import") / "study")


@pytest.fixture(scope="module")
def told(study: Path) -> dict[str, Any]:
    """From the tables to scenario files and a history file, in one command."""
    out: dict[str, Any] = json.loads(
        stresskit(
            "import", "supervisor.yaml", "--out", "imported", "--history", "history.csv", "--study", "study.yaml", "--json",
            cwd=study.parent,
        )
    )  # fmt: skip
    return out


def columns(study: Path) -> dict[str, str]:
    mapping = load_import(study.parent / "supervisor.yaml").model
    return {v: s.column for v, s in mapping.variables.items()}


def test_every_published_column_is_mapped(study: Path) -> None:
    assert sorted(columns(study).values()) == sorted(set(published(HISTORY)[0]) - {"Scenario Name", "Date"})


@pytest.mark.parametrize("name", TABLES)
def test_the_scenario_files_hold_the_published_numbers(name: str, study: Path, told: dict[str, Any]) -> None:
    rows = published(TABLES[name])
    model = load_scenario(study.parent / "imported" / f"{name}.yaml").model
    assert isinstance(model, ScenarioSpec)
    assert model.starts == "2025Q1"
    assert len(model.paths) == 16
    for variable, column in columns(study).items():
        values = getattr(model.paths[variable], "values", None)
        assert values == tuple(float(r[column]) for r in rows), variable
    digest = hashlib.sha256((inputs.inputs_folder() / FOLDER / TABLES[name]).read_bytes()).hexdigest()
    assert model.notes["source"] == TABLES[name]
    assert model.notes["source sha256"] == digest
    assert model.notes["mapping"] == "us-supervisory-2025"


@pytest.mark.parametrize("name", TABLES)
def test_the_text_shows_the_published_digits(name: str, study: Path, told: dict[str, Any]) -> None:
    """Re-exported: the digits that a reader compares with the table are the table's own."""
    text = (study.parent / "imported" / f"{name}.yaml").read_text(encoding="utf-8")
    for variable, column in columns(study).items():
        block = text.split(f"\n  {variable}:  #")[1].split("values: [")[1].split("]")[0]
        digits = [
            c.strip() for line in block.splitlines() for c in line.split("#")[0].split(",") if c.strip()
        ]
        assert digits == [r[column] for r in published(TABLES[name])], variable


def test_the_history_file_holds_the_published_history(study: Path, told: dict[str, Any]) -> None:
    with (study.parent / "history.csv").open(encoding="utf-8", newline="") as file:
        got = list(csv.DictReader(file))
    rows = published(HISTORY)
    assert [r["period"] for r in got] == [r["Date"].replace(" ", "") for r in rows]
    assert len(got) == 196
    for variable, column in columns(study).items():
        assert [r[variable] for r in got] == [r[column] for r in rows], variable
    assert told["history_left_out"] == []


def test_what_the_command_says(told: dict[str, Any]) -> None:
    assert [Path(f).name for f in told["files"]] == [
        "supervisory_baseline.yaml",
        "severely_adverse.yaml",
        "history.csv",
    ]
    # 322.1 to 275.1 is a fall of 14.6 % in one quarter; the largest in history is 5.2 %
    assert [c for c in told["cautions"] if "house_price_index" in c] == [
        "Scenario severely_adverse: house_price_index goes from 322.1 in 2024Q4 (2025-Table_1A_Historic_Domestic.csv) to 275.1 in "
        "2025Q1 (-14.6%), more than history's largest one-period move (-5.2%)."
    ]
    assert not any(c.startswith("Scenario supervisory_baseline") for c in told["cautions"])


@pytest.mark.slow
def test_the_study_accepts_the_imported_files_and_reads_the_same_paths(
    study: Path, told: dict[str, Any]
) -> None:
    """The study reads the tables directly; with the imported files in their place every path has the same bits."""
    other = study.parent.parent / "other"
    shutil.copytree(study.parent, other, symlinks=True)
    for name in TABLES:
        shutil.copyfile(study.parent / "imported" / f"{name}.yaml", other / "scenarios" / f"{name}.yaml")
    first = json.loads(stresskit("check", study, "--json", cwd=study.parent))
    second = json.loads(stresskit("check", other / "study.yaml", "--json", cwd=other))
    assert second["facts"] == first["facts"]
    assert second["scenarios"] == first["scenarios"]
    for a, b in zip(
        prepare(load_study(study)).paths, prepare(load_study(other / "study.yaml")).paths, strict=True
    ):
        assert a.name == b.name
        for variable in a.values:
            assert a.values[variable].tobytes() == b.values[variable].tobytes()
            assert np.array_equal(a.flags[variable], b.flags[variable])
        assert "real_gdp_growth" in b.notes["left out"]


def test_a_later_as_of_is_a_stale_vintage(study: Path) -> None:
    text = (
        (study.parent / "supervisor.yaml")
        .read_text(encoding="utf-8")
        .replace("as_of: 2024Q4", "as_of: 2025Q1")
    )
    file = study.parent / "stale.yaml"
    file.write_text(text, encoding="utf-8")
    with pytest.raises(DataError) as caught:
        import_table(file)
    assert (
        "stale vintage: the table's first projected period is 2025Q1, but the one after as_of 2025Q1 is 2025Q2; supply the vintage "
        "whose projection starts in 2025Q2" in str(caught.value)
    )
