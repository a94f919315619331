"""What a run was made from: text, inputs and versions, by digest. Clock times live elsewhere."""

from __future__ import annotations

import hashlib
import json
import platform
import sys
from collections.abc import Mapping, Sequence
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from stresskit.spec.load import Loaded
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.study import Study

#: Format of manifest.json; raised when a field changes its meaning.
RECORD_FORMAT = 1

_PACKAGES = (
    "stresskit-credit",
    "numpy",
    "scipy",
    "pandas",
    "duckdb",
    "pyarrow",
    "pydantic",
    "ruamel.yaml",
    "matplotlib",
    "numba",
)


def digest_file(path: Path) -> str:
    """sha256 of a file's bytes, read in pieces."""
    h = hashlib.sha256()
    with path.open("rb") as f:
        while piece := f.read(1 << 20):
            h.update(piece)
    return h.hexdigest()


def versions() -> dict[str, str]:
    """Version of every package whose arithmetic or file format a result depends on."""
    out = {"python": platform.python_version(), "machine": platform.machine(), "system": sys.platform}
    for name in _PACKAGES:
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            out[name] = "not installed as a package"
    return out


def described(scenario: ScenarioSpec | TableMapping) -> dict[str, Any]:
    """Words that a scenario carries for its readers; only those that it has."""
    words: dict[str, Any] = {
        "title": scenario.title,
        "severity": scenario.severity,
        "author_role": scenario.author_role,
        "approved_on": scenario.approved_on,
        "notes": dict(scenario.notes) or None,
        "weight": scenario.weight,
        "weighted": False if isinstance(scenario, ScenarioSpec) and not scenario.weighted else None,
    }
    return {key: value for key, value in words.items() if value is not None}


def build_record(
    study: Loaded[Study], scenarios: Sequence[Loaded[ScenarioSpec | TableMapping]], inputs: Mapping[str, str]
) -> dict[str, Any]:
    """The record of a run, without clock times and without output digests."""
    return {
        "format": RECORD_FORMAT,
        "study": study.model.study,
        "as_of": study.model.as_of,
        "study_digest": study.digest,
        "study_text": study.text,
        "scenarios": [
            {"name": s.model.scenario, "file": s.file.name, "digest": s.digest, "text": s.text}
            | described(s.model)
            for s in scenarios
        ],
        "inputs": dict(sorted(inputs.items())),
        "versions": versions(),
        "seeds": {},
        "seeds_note": "nothing in this run draws random numbers",
    }


def write_manifest(record: Mapping[str, Any], folder: Path, *, command: Sequence[str]) -> None:
    """manifest.json: the record, the command, and the digest of every file that is in the folder by now."""
    whole = dict(record) | {
        "command": list(command),
        "outputs": {
            f.relative_to(folder).as_posix(): digest_file(f) for f in sorted(folder.rglob("*")) if f.is_file()
        },
    }
    text = json.dumps(whole, indent=2, ensure_ascii=False, sort_keys=True)
    (folder / "manifest.json").write_text(text + "\n", encoding="utf-8")
