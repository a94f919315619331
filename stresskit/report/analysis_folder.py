"""One analysis asked by itself: its folder with tables, page, workbook and record."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from stresskit.report.analysis import analysis_sheets, section, write_analysis_files
from stresskit.report.environment import render
from stresskit.report.workbook import render_workbook
from stresskit.runs.api import study_record
from stresskit.runs.cautions import STANDING
from stresskit.runs.inputs import Prepared, StudyFile
from stresskit.runs.recorded import recorded_folder
from stresskit.runs.records import Analysis


def write_analysis(
    found: Analysis,
    file: StudyFile,
    data: Prepared,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool = False,
) -> None:
    """The folder of one analysis asked by itself: tables, page, workbook, record; whole or not there.

    Raises OutputError when the place exists (and ``replace`` is false) or cannot be written.
    """
    record: dict[str, Any] = study_record(file, data)
    record |= {"analyses": {found.key: dict(found.facts)}, "cautions": [*found.cautions, *STANDING]}
    if "seed" in found.facts:
        record |= {"seeds": {found.key: found.facts["seed"]}, "seeds_note": "the draws of the analysis"}
    with recorded_folder(
        out, record, kind="analysis", command=command, base=file.base, replace=replace
    ) as part:
        write_analysis_files(found, part)
        (part / "report.html").write_bytes(analysis_page(found, file).encode("utf-8"))
        (part / "results.xlsx").write_bytes(render_workbook(analysis_sheets([found], folder=".")))


def analysis_page(found: Analysis, file: StudyFile) -> str:
    """One analysis as a page of its own."""
    return render(
        "analysis.html.j2",
        study=file.study, a=section(found), cautions=found.cautions, safety=STANDING,
    )  # fmt: skip
