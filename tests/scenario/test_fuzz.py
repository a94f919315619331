"""Scenario documents drawn from the published schema: a path, or an error with a place. Never anything else."""

from __future__ import annotations

import json
import tempfile
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import HealthCheck, event, given, settings
from hypothesis import strategies as st

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import parse_period
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from stresskit.spec.schema import scenario_schema
from tests.scenario.world import BASELINE, HISTORY, MACRO, MONTH, write
from tests.spec.from_schema import documents


def _check_place(error: TextError, files: tuple[str, ...], lines: list[str]) -> None:
    assert error.file in files
    assert error.line is not None
    assert error.column is not None
    assert 1 <= error.line <= len(lines)
    assert str(error).startswith(f"{error.file}:{error.line}:{error.column}: ")


def _fitted(document: Any) -> Any:
    """The document with the names and the start that the world has, so that its paths are what is tried."""
    if not isinstance(document, dict):
        return document
    return {"based_on": "baseline"} | document | {"scenario": "stress", "starts": "2026Q1"}


ONLY_PATHS = scenario_schema()["$defs"]["ScenarioSpec"] | {"$defs": scenario_schema()["$defs"]}
DRAWN = {
    "clean": documents(ONLY_PATHS, stray=0),
    "dirty": documents(ONLY_PATHS),
    "any": documents(scenario_schema()),
    "fitted": documents(ONLY_PATHS, stray=0.01).map(_fitted),
}


def _one(folder: Path, document: Any) -> str:
    """How it ended: "path", or how far it came before the error."""
    baseline = load_scenario(write(folder, "baseline", BASELINE))
    file = folder / "drawn.yaml"
    file.write_text(json.dumps(document, ensure_ascii=False), encoding="utf-8")
    lines = file.read_text(encoding="utf-8").split("\n")
    stage = "loading"
    try:
        loaded = load_scenario(file)
        stage = "resolving"
        as_of = parse_period("2025-12", MONTH)
        paths = resolve([baseline, loaded], MACRO, HISTORY, as_of=as_of, model=MONTH, horizon=24)
    except TextError as found:
        _check_place(found, (str(file), str(folder / "baseline.yaml")), lines)
        return stage
    except DataError:
        assert "table" in document
        return stage
    for path in paths:
        assert path.horizon == 8
        for variable, values in path.values.items():
            assert np.isfinite(values).all()
            assert set(path.flags[variable].tolist()) <= {0, 2}
    return "path"


@pytest.mark.slow
@pytest.mark.parametrize("kind", DRAWN)
def test_a_document_of_the_schema_is_a_path_or_an_error_with_its_place(kind: str) -> None:
    ends: dict[str, int] = {}

    @settings(max_examples=250, deadline=None, suppress_health_check=list(HealthCheck), derandomize=True)
    @given(document=DRAWN[kind])
    def draw(document: Any) -> None:
        with tempfile.TemporaryDirectory() as folder:
            end = _one(Path(folder), document)
        ends[end] = ends.get(end, 0) + 1
        event(end)

    draw()
    # each stage is reached, so that silence means something
    least = {"clean": ("resolving",), "dirty": ("loading", "resolving"), "any": ("loading",)}
    assert all(ends.get(stage, 0) >= 15 for stage in least.get(kind, ("path", "resolving"))), ends


#: Valid beside the baseline of the world; the fuzz replaces one place of it.
VALID: dict[str, Any] = {
    "scenario": "stress",
    "starts": "2026Q1",
    "paths": {
        "u": {"change_from": "baseline", "peak_points": 2, "at": "2026Q3", "half_life": 2},
        "hpi": {"growth": {"2026Q1": "-2%", "2026Q2": "1%"}, "rate": "annualised", "on": "baseline"},
        "policy": {"values": [2.5, 0.025], "unit": "percent"},
    },
    "afterwards": {"u": {"back_to": "baseline", "over": 4}, "hpi": {"grow_by": "2%"}, "policy": {"revert_to": 2, "half_life": 3}},
    "severity": "severe",
    "approved_on": "2025-11-28",
    "notes": {"origin": "invented"},
}  # fmt: skip


def _places(data: Any, keys: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    items = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    return [p for k, v in items for p in [(*keys, k), *_places(v, (*keys, k))]]


def test_the_document_that_is_changed_is_valid() -> None:
    with tempfile.TemporaryDirectory() as folder:
        assert _one(Path(folder), VALID) == "path"


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(
    place=st.sampled_from(_places(VALID)),
    value=documents({"$defs": scenario_schema()["$defs"], **scenario_schema()["$defs"]["ScenarioSpec"]["properties"]["paths"]})
    | st.recursive(st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=6), lambda x: st.lists(x, max_size=2) | st.dictionaries(st.text(max_size=4), x, max_size=2)),
)  # fmt: skip
def test_one_place_of_a_valid_document_replaced(place: tuple[Any, ...], value: Any) -> None:
    changed = json.loads(json.dumps(VALID))
    inner = changed
    for key in place[:-1]:
        inner = inner[key]
    inner[place[-1]] = value
    with tempfile.TemporaryDirectory() as folder:
        _one(Path(folder), changed)
