"""One analysis asked by itself: its folder with tables, page, workbook and record."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

from stresskit.analyses.files import digests_read
from stresskit.analyses.options import options_record
from stresskit.report.analysis import analysis_sheets, section, write_analysis_files
from stresskit.report.environment import render
from stresskit.report.workbook import render_workbook
from stresskit.runs.api import study_record
from stresskit.runs.cautions import STANDING
from stresskit.runs.folder import write_models
from stresskit.runs.inputs import StudyFile
from stresskit.runs.recorded import recorded_folder
from stresskit.runs.records import Analysis
from stresskit.runs.saved_models import model_record
from stresskit.runs.setting import Setting


def write_analysis(
    found: Analysis,
    setting: Setting,
    spec: Any,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool = False,
) -> None:
    """The folder of one analysis asked by itself: tables, page, workbook, record; whole or not there.

    spec  the options it was made with, as :func:`stresskit.analyses.ask.options_of` gives them

    Models that were fitted before are kept in the folder, so that it can be made again.

    Raises OutputError when the place exists (and ``replace`` is false) or cannot be written.
    """
    file, models = setting.file, model_record(setting.fitted)
    record: dict[str, Any] = study_record(file, setting.data)
    record["inputs"] = dict(sorted({**record["inputs"], **digests_read(spec, file.base)}.items()))
    record |= {"asked": {"analysis": options_record(found.key, spec)}, "models": models}
    record |= {"analyses": {found.key: dict(found.facts)}, "cautions": [*found.cautions, *STANDING]}
    if "seed" in found.facts:
        record |= {"seeds": {found.key: found.facts["seed"]}, "seeds_note": "the draws of the analysis"}
    with recorded_folder(
        out, record, kind="analysis", command=command, base=file.base, replace=replace
    ) as part:
        write_analysis_files(found, part)
        if models["given"]:
            write_models(setting.fitted, part / "models")
        (part / "report.html").write_bytes(analysis_page(found, file).encode("utf-8"))
        (part / "results.xlsx").write_bytes(render_workbook(analysis_sheets([found], folder=".")))


def analysis_page(found: Analysis, file: StudyFile) -> str:
    """One analysis as a page of its own."""
    return render(
        "analysis.html.j2",
        study=file.study, a=section(found), cautions=found.cautions, safety=STANDING,
    )  # fmt: skip
