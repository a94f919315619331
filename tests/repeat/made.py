"""Runs of the small study, made in this process."""

from __future__ import annotations

from pathlib import Path

import stresskit as sk
from stresskit.runs.evidence import add_evidence
from stresskit.runs.folder import read_models, write_model_folder


def make_run(
    study: Path,
    out: Path,
    *,
    evidence: bool = False,
    models: Path | None = None,
    what_if: str | None = None,
) -> Path:
    """What `stresskit run` (with models: `project`) writes."""
    file = sk.load_study(study)
    if what_if is not None:
        file = sk.what_if(file, what_if)
    data = sk.prepare(file)
    fits = sk.fit(file, data) if models is None else read_models(models)
    result = sk.project(file, data, fits)
    if evidence:
        result = add_evidence(result, file, data, fits)
    return sk.write_run(result, fits, out, command=["run", study.name])


def make_models(study: Path, out: Path) -> Path:
    """What `stresskit fit` writes."""
    file = sk.load_study(study)
    data = sk.prepare(file)
    write_model_folder(sk.fit(file, data), file, data, out, command=["fit", study.name], replace=False)
    return out
