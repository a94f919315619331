"""A finished study as one self-contained HTML file: no request, readable offline, in print and without its one small script."""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from markupsafe import Markup

from stresskit.report.environment import render, source
from stresskit.report.headline import headline, main_cautions
from stresskit.report.picture import scenario_marks
from stresskit.report.reading import clock, has_payoff, reference, worst
from stresskit.report.result_pictures import switch_segments
from stresskit.report.sections import engine_cautions, sections_of
from stresskit.report.validation_page import questions_line
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult


def write_report(result: StudyResult, path: Path) -> None:
    """Write the report. The same result gives the same bytes. Raises OSError when the file cannot be written."""
    path.write_bytes(render_report(result).encode("utf-8"))


def render_report(result: StudyResult) -> str:
    """The report as text."""
    script = source("report.js")
    return render(
        "report.html.j2",
        script=Markup(script),
        # the one script that the page lets run is this one, by its digest
        script_digest=base64.b64encode(hashlib.sha256(script.encode("utf-8")).digest()).decode("ascii"),
        safety=STANDING,
        **_context(result),
    )


def _context(result: StudyResult) -> Mapping[str, Any]:
    """Everything that the template shows."""
    return {
        "study": result.study,
        "period": clock(result).value,
        "reference": reference(result),
        "worst": worst(result),
        "payoff": has_payoff(result),
        "head": headline(result),
        "questions": None if result.evidence is None else questions_line(result.evidence),
        "main_cautions": main_cautions(result, STANDING),
        "n_cautions": len(engine_cautions(result)) + len(STANDING),
        "sections": sections_of(result),
        "switch_scenarios": scenario_marks(result),
        "switch_segments": switch_segments(result),
    }
