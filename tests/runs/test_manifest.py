"""The record of every kind of folder follows the published schema; the schema is the one that the code makes."""

from __future__ import annotations

import importlib.util
import json
from pathlib import Path
from typing import Any

import pytest

import stresskit as sk
from stresskit.core.version import __version__
from stresskit.runs.build import build, code_digest
from stresskit.runs.evidence import add_evidence, study_evidence, write_evidence
from stresskit.runs.folder import read_models, write_model_folder
from stresskit.runs.manifest import KINDS, read_manifest
from stresskit.runs.manifest_schema import manifest_schema
from stresskit.runs.record import digest_file, versions
from tests.cli.small_study import write_small_study
from tests.hazard.schema_checker import broken

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def book(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A study with a run with evidence, a run with given models and a what-if, models, and evidence by itself."""
    folder = tmp_path_factory.mktemp("book")
    study = write_small_study(folder, loans=300)
    file = sk.load_study(study)
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    write_model_folder(fits, file, data, folder / "models", command=["fit"], replace=False)
    found = study_evidence(file, data, fits)
    write_evidence(found, file, data, folder / "evidence", command=["evidence"])
    result = add_evidence(sk.project(file, data, fits), file, data, fits)
    sk.write_run(result, fits, folder / "run", command=["run"])
    more = sk.what_if(file, "unemployment_rate + 1")
    data = sk.prepare(more)
    given = read_models(folder / "models")
    sk.write_run(sk.project(more, data, given), given, folder / "given")
    return folder


def plain(folder: Path) -> dict[str, Any]:
    loaded = json.loads((folder / "manifest.json").read_text(encoding="utf-8"))
    assert isinstance(loaded, dict)
    return loaded


@pytest.mark.parametrize("name", ["run", "given", "models", "evidence"])
def test_records_follow_the_schema(book: Path, name: str) -> None:
    assert broken(plain(book / name), manifest_schema()) == []


def test_the_schema_refuses_what_is_none(book: Path) -> None:
    record = plain(book / "run")
    for change in ({"format": 1}, {"kind": "x"}, {"inputs": {"a": "b"}}, {"more": 1}, {"scenarios": [{}]}):
        assert broken(record | change, manifest_schema()), change
    for key in ("study_text", "build", "place", "outputs"):
        assert broken({k: v for k, v in record.items() if k != key}, manifest_schema()), key


def test_the_published_schema_is_the_one_of_the_code() -> None:
    spec = importlib.util.spec_from_file_location("make", ROOT / "docs" / "make_manifest_schema.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    assert module.FILE.read_text(encoding="utf-8") == module.text(), "run docs/make_manifest_schema.py"


def test_what_a_record_says(book: Path) -> None:
    run, given = read_manifest(book / "run"), read_manifest(book / "given")
    assert run.inputs == {n: digest_file(book / n) for n in ("loans.csv", "macro.csv")}
    assert run.inputs_folder == book.resolve()
    assert run.study_text == (book / "study.yaml").read_text()
    assert [(s.name, s.file, s.what_if) for s in run.scenarios] == [
        ("baseline", "baseline.yaml", ()),
        ("slump", "slump.yaml", ()),
    ]
    assert given.scenarios[2].what_if == ("unemployment_rate + 1",)
    assert run.plain["place"] == {"inputs": ".."}
    assert run.plain["build"] == build()
    assert run.versions == versions()
    assert run.versions["stresskit-credit"] == __version__
    assert {"numpy", "scipy", "pandas", "statsmodels", "numba", "pyarrow", "duckdb"} <= set(run.versions)
    assert run.plain["build"]["code"] == code_digest()
    assert run.plain["build"]["blas"], "a linear algebra library was loaded"
    assert (run.asked_evidence, given.asked_evidence) == (True, False)
    assert (run.models_given, given.models_given) == (False, True)
    assert read_manifest(book / "models").kind == "models"
    assert read_manifest(book / "evidence").kind == "evidence"
    assert set(KINDS) >= {"run", "models", "evidence", "recovery", "search"}
    assert "manifest.json" not in run.outputs
    assert not {"times.json"} & set(run.outputs)


def test_the_figures_do_not_know_where_they_lie(book: Path, tmp_path: Path) -> None:
    """The same study written elsewhere has the same outputs; place and command are all that differs."""
    file = sk.load_study(book / "study.yaml")
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    result = add_evidence(sk.project(file, data, fits), file, data, fits)
    sk.write_run(result, fits, tmp_path / "a" / "b" / "run", command=["other"])
    here, there = plain(book / "run"), plain(tmp_path / "a" / "b" / "run")
    assert {k for k in here if here[k] != there[k]} == {"place", "command"}
