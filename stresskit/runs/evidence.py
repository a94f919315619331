"""Evidence on a study's fits, and the folder it is written to."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path

from stresskit.core.errors import UsageError
from stresskit.core.period import parse_period
from stresskit.evidence.collect import Evidence, Questions, evidence
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile
from stresskit.runs.folder import plain_csv
from stresskit.runs.place import whole_folder
from stresskit.runs.record import build_record, digest_file


def split_period(file: StudyFile, text: str | None) -> int | None:
    """Ordinal of the period that ``--split`` names; None without one. Raises UsageError for what is no period."""
    if text is None:
        return None
    try:
        return parse_period(text, file.frequency)
    except ValueError as e:
        raise UsageError(f"--split: {e}") from None


def study_evidence(
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    split: int | None = None,
    say: Callable[[str], None] | None = None,
) -> Evidence:
    """Every table and verdict on the fits of a study; ``split`` is the last period (ordinal) before the break.

    Segments are compared by as well as the columns of the fits.
    """
    return evidence(
        fits,
        data.loans.risk_set,
        data.features,
        macro=file.study.macro,
        history=data.history,
        questions=Questions(columns=file.study.loans.segments, split=split),
        say=say,
    )


def write_evidence(
    found: Evidence,
    file: StudyFile,
    data: Prepared,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool = False,
) -> None:
    """verdicts.csv, a CSV per table and manifest.json with their digests, as a whole folder or not at all."""
    with whole_folder(out, replace=replace) as part:
        plain_csv(found.verdict_table(), part / "verdicts.csv")
        for name, table in found.tables.items():
            plain_csv(table, part / f"{name}.csv")
        record = build_record(file.loaded, file.scenarios, data.digests) | {"command": list(command)}
        record["outputs"] = {f.name: digest_file(f) for f in sorted(part.iterdir())}
        text = json.dumps(record, indent=2, ensure_ascii=False, sort_keys=True)
        (part / "manifest.json").write_text(text + "\n", encoding="utf-8")
