"""What a run was made from: text, inputs and versions, by digest. Clock times live elsewhere."""

from __future__ import annotations

import hashlib
import os
import platform
import sys
from collections.abc import Mapping, Sequence
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from stresskit.core.version import __version__
from stresskit.spec.load import Loaded
from stresskit.spec.scenario import ScenarioSpec, TableMapping
from stresskit.spec.study import Study

#: Packages whose arithmetic or file format a result depends on.
_PACKAGES = (
    "numpy",
    "scipy",
    "pandas",
    "statsmodels",
    "lifelines",
    "numba",
    "llvmlite",
    "duckdb",
    "pyarrow",
    "pydantic",
    "ruamel.yaml",
    "matplotlib",
    "jinja2",
    "xlsxwriter",
)


def digest_file(path: Path) -> str:
    """sha256 of a file's bytes, read in pieces."""
    h = hashlib.sha256()
    with path.open("rb") as f:
        while piece := f.read(1 << 20):
            h.update(piece)
    return h.hexdigest()


def digest_text(text: str) -> str:
    """sha256 of a text's UTF-8 bytes."""
    return hashlib.sha256(text.encode("utf-8")).hexdigest()


def versions() -> dict[str, str]:
    """stresskit, Python, kind of machine, and every package whose arithmetic or file format a result depends on."""
    out = {
        "stresskit-credit": __version__,
        "python": platform.python_version(),
        "machine": platform.machine(),
        "system": sys.platform,
    }
    for name in _PACKAGES:
        try:
            out[name] = version(name)
        except PackageNotFoundError:
            out[name] = "not installed as a package"
    return dict(sorted(out.items()))


def relative(path: Path, base: Path) -> str | None:
    """The path as seen from ``base``, with slashes; None where there is no way from one to the other."""
    try:
        return Path(os.path.relpath(path, base)).as_posix()
    except ValueError:  # another drive
        return None


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
    study: Loaded[Study],
    scenarios: Sequence[Loaded[ScenarioSpec | TableMapping]],
    inputs: Mapping[str, str],
    *,
    given: Sequence[str] = (),
) -> dict[str, Any]:
    """The record of a run, without clock times and without output digests.

    inputs  file name relative to the study's folder -> sha256
    given   tables that were handed over in memory in place of files: no file, and no digest, stands for them
    """
    base = study.file.parent
    return {
        "study": study.model.study,
        "as_of": study.model.as_of,
        "study_file": study.file.name,
        "study_digest": study.digest,
        "study_text": study.text,
        "scenarios": [_scenario(s, base) for s in scenarios],
        "inputs": dict(sorted(inputs.items())),
        "inputs_given": list(given),
        "versions": versions(),
        "seeds": {},
        "seeds_note": "nothing in this run draws random numbers",
    }


def _scenario(loaded: Loaded[ScenarioSpec | TableMapping], base: Path) -> dict[str, Any]:
    if loaded.said is not None:
        where = {"file": loaded.file.name, "what_if": list(loaded.said.texts)}
    else:
        where = {"file": relative(loaded.file, base) or loaded.file.name}
    head = {"name": loaded.model.scenario, "digest": loaded.digest, "text": loaded.text}
    return head | where | described(loaded.model)
