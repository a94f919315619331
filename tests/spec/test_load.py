"""Files: which exist, what is kept of them, and errors raised later about what they said."""

from __future__ import annotations

import hashlib
from dataclasses import FrozenInstanceError
from pathlib import Path

import pytest
from pydantic import ValidationError

from stresskit.core.errors import TextError
from stresskit.spec.load import load_scenario, load_study
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from tests.spec.texts import GOOD, STUDIES, changed, load, said

MINIMAL = "scenario: a\nstarts: 2026Q1\n"


def _missing(path: Path) -> str:
    with pytest.raises(TextError) as caught:
        load_study(path)
    assert caught.value.line is None
    return str(caught.value)


def test_missing_file_names_its_neighbours(tmp_path: Path) -> None:
    path = tmp_path / "studdy.yaml"
    assert _missing(path) == f"{path}: no such file: that folder holds no YAML file"
    (tmp_path / "loans.csv").write_text("x")
    (tmp_path / "other_things.yaml").write_text("x")
    assert _missing(path) == f"{path}: no such file (YAML files in that folder: other_things.yaml)"
    (tmp_path / "study.yaml").write_text("x")
    assert _missing(path) == f"{path}: no such file; did you mean 'study.yaml'?"


def test_missing_folder_and_folder_as_file(tmp_path: Path) -> None:
    path = tmp_path / "nowhere" / "study.yaml"
    assert _missing(path) == f"{path}: no such file: the folder {str(tmp_path / 'nowhere')!r} does not exist"
    assert _missing(tmp_path) == f"{tmp_path}: this is a folder: name a YAML file"


def test_loaded_keeps_file_text_digest(tmp_path: Path) -> None:
    path = tmp_path / "s.yaml"
    content = b"\xef\xbb\xbfscenario: a # \xc3\xa9\r\nstarts: 2026Q1\r\n"
    path.write_bytes(content)
    loaded = load_scenario(path)
    assert loaded.file == path
    assert loaded.text == "scenario: a # é\r\nstarts: 2026Q1\r\n"
    assert loaded.digest == hashlib.sha256(content).hexdigest()
    with pytest.raises(FrozenInstanceError):
        loaded.text = ""  # type: ignore[misc]
    with pytest.raises(ValidationError, match="frozen"):
        loaded.model.weight = 1.0  # type: ignore[misc]


def test_scenarios_are_told_apart_by_table() -> None:
    assert isinstance(load_scenario(GOOD / "published_table.yaml").model, TableMapping)
    assert isinstance(load_scenario(GOOD / "deep_recession.yaml").model, ScenarioSpec)


@pytest.mark.parametrize(
    ("keys", "expected"),
    [
        (("as_of",), "3:1: as_of: too late"),
        (("loans", "columns", "rate"), "7:101: loans.columns.rate: too late"),
        (("macro", "variables", "house_price_index"), "14:5: macro.variables.house_price_index: too late"),
        (("hazards", "default", "terms", 2), "24:9: hazards.default.terms#3: too late"),
        (
            ("hazards", "default", "terms", 4, "interaction", 1),
            "26:33: hazards.default.terms#5.interaction#2: too late",
        ),
        (("scenarios", 1), "32:38: scenarios#2: too late"),
        (("loans", "rate_unit"), "4:1: loans.rate_unit: too late"),
        (("horizon",), "1:1: horizon: too late"),
        ((), "1:1: too late"),
    ],
)
def test_errors_about_what_was_said(keys: tuple[str | int, ...], expected: str) -> None:
    path = GOOD / "harbour_study.yaml"
    error = load_study(path).error(keys, "too late")
    assert isinstance(error, TextError)
    assert str(error) == f"{path}:{expected}"


@pytest.mark.parametrize("name", STUDIES)
def test_every_mark_points_at_what_it_marks(name: str) -> None:
    """By the text alone: a key's place holds the key, a scalar's place holds what was written."""
    loaded = load(GOOD / name)
    lines = loaded.text.splitlines()
    scalars = 0
    for keys, mark in loaded.marks.by_keys.items():
        at_key = lines[mark.key_line - 1][mark.key_column - 1 :]
        at_value = lines[mark.line - 1][mark.column - 1 :]
        if keys and isinstance(keys[-1], str):
            assert at_key.lstrip("\"'").startswith(keys[-1])
        if mark.written is not None:
            scalars += 1
            assert at_value.lstrip("\"'" if mark.quoted else "").startswith(mark.written)
    assert scalars >= 20


def test_model_in_python_checks_periods_too() -> None:
    with pytest.raises(ValidationError, match="no month 13"):
        ScenarioSpec.model_validate({"scenario": "a", "starts": "2026-13"})
    assert ScenarioSpec.model_validate({"scenario": "a", "starts": 202601}).starts == "202601"


def test_explicit_null_is_not_stated_and_defaults_hold(tmp_path: Path) -> None:
    path = tmp_path / "s.yaml"
    path.write_text(MINIMAL + "weight: null\nbased_on: ~\n")
    model = load_scenario(path).model
    assert isinstance(model, ScenarioSpec)
    assert (model.weight, model.based_on, model.missing, dict(model.paths)) == (None, None, "error", {})


def test_missing_and_misspelt_in_one_place_are_one_error(tmp_path: Path) -> None:
    text = changed("harbour_study.yaml", ("lgd: {by", "lgdd: {by"))
    assert said(tmp_path / "x.yaml", text, load_study) == (
        "file:30:3: loss.lgdd: unknown key; did you mean 'lgd'? (keys here: exposure, lgd, discount, timing)"
    )
