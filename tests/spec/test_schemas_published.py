"""The JSON Schemas in docs/ are those of the program, are printed by it, and fit every file that is shipped."""

from __future__ import annotations

import importlib.util
import json
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from stresskit.demo.bank import shipped_scenarios
from stresskit.spec.schema import SCHEMAS, schema_text
from stresskit.spec.yaml import read_document
from tests.docs.markdown import ROOT, blocks, pages
from tests.hazard.schema_checker import broken
from tests.spec.texts import GOOD, STUDIES

SHIPPED = sorted(shipped_scenarios().glob("*.yaml"))
MARKED = [b for page in pages() for b in blocks(page) if b.complete]
BAD = ROOT / "tests" / "data" / "scenarios_bad"
#: Malformed files whose fault is one of shape, so that an editor with the schema shows it before stresskit does.
SEEN_BY_AN_EDITOR = (
    "growth_without_rate", "growth_rate_unknown", "growth_without_percent_sign", "hold_of_baseline", "hold_without_until",
    "half_life_zero", "peak_factor_zero", "unit_unknown", "unknown_top_key", "unknown_path_key", "approved_in_words",
    "severity_a_list", "weighted_as_text", "name_not_ascii", "quoted_number", "afterwards_unknown", "revert_over_nothing",
)  # fmt: skip


def read(path: Path) -> Any:
    return read_document(path.read_bytes(), path.name).data


@pytest.mark.parametrize("kind", SCHEMAS)
def test_published_files_are_up_to_date(kind: str) -> None:
    found = importlib.util.spec_from_file_location("make_schemas", ROOT / "docs" / "make_schemas.py")
    assert found is not None
    assert found.loader is not None
    module = importlib.util.module_from_spec(found)
    found.loader.exec_module(module)
    assert module.FILES[kind].read_text(encoding="utf-8") == schema_text(kind), "run docs/make_schemas.py"


@pytest.mark.parametrize("kind", SCHEMAS)
def test_the_command_prints_them_and_nothing_heavy_is_loaded(kind: str) -> None:
    code = (
        f"import sys; from stresskit.cli import _outcome; code = _outcome(['schema', '{kind}'], True, []); "
        "print([m for m in ('pandas', 'scipy', 'matplotlib', 'duckdb') if m in sys.modules], code, file=sys.stderr)"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout == schema_text(kind)
    assert done.stderr.strip() == "[] 0"
    assert json.loads(done.stdout)["$schema"].startswith("https://json-schema.org/")


@pytest.mark.parametrize("file", SHIPPED, ids=lambda f: f.stem)
def test_shipped_scenarios_fit(file: Path) -> None:
    assert broken(read(file), SCHEMAS["scenario"]()) == []


def test_the_shipped_study_fits() -> None:
    file = ROOT / "stresskit" / "demo" / "study.yaml"
    assert broken(read(file), SCHEMAS["study"]()) == []


@pytest.mark.parametrize("block", MARKED, ids=lambda b: b.name)
def test_complete_files_in_the_pages_fit(block: Any) -> None:
    data = read_document(block.text.encode("utf-8"), block.name).data
    assert broken(data, SCHEMAS[block.complete]()) == []


@pytest.mark.parametrize("file", sorted(GOOD.glob("*.yaml")), ids=lambda f: f.stem)
def test_good_texts_fit(file: Path) -> None:
    assert broken(read(file), SCHEMAS["study" if file.name in STUDIES else "scenario"]()) == []


@pytest.mark.parametrize("name", SEEN_BY_AN_EDITOR)
def test_faults_of_shape_break_the_schema(name: str) -> None:
    assert broken(read(BAD / f"{name}.yaml"), SCHEMAS["scenario"]()) != []


def test_the_search_of_the_pages_fits_and_a_malformed_one_does_not() -> None:
    page = ROOT / "docs" / "search.md"
    texts = [b.text for b in blocks(page) if b.language == "yaml" and b.text.startswith("search: ")]
    assert texts
    for text in texts:
        data = read_document(text.encode("utf-8"), "search.yaml").data
        assert broken(data, SCHEMAS["search"]()) == []
        assert broken(data | {"cuase": "default"}, SCHEMAS["search"]()) == ["$: unknown 'cuase'"]
