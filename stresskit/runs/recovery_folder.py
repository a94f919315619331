"""Recovery tables as files, and the folder of a command that works on workouts alone."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile, study_record
from stresskit.runs.folder import plain_csv, write_models
from stresskit.runs.recorded import recorded_folder
from stresskit.runs.recovery import RecoveryResult


def write_recovery_tables(found: RecoveryResult, folder: Path) -> None:
    """A CSV per table."""
    for name, table in found.tables.items():
        plain_csv(table, folder / f"{name}.csv")


def write_recovery(
    found: RecoveryResult,
    fits: Mapping[str, HazardFit],
    file: StudyFile,
    data: Prepared,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool = False,
) -> None:
    """Tables, saved regressions and record, as a whole folder or not at all."""
    record = study_record(file, data)
    with recorded_folder(
        out, record, kind="recovery", command=command, base=file.base, replace=replace
    ) as part:
        write_recovery_tables(found, part)
        if fits:
            write_models(fits, part / "models")
