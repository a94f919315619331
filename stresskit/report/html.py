"""A finished study as one self-contained HTML file: no request, readable offline, in print and without its one small script."""

from __future__ import annotations

import base64
import functools
import hashlib
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from stresskit.report.headline import headline, main_cautions
from stresskit.report.picture import scenario_marks
from stresskit.report.reading import clock, has_payoff, name_of, reference, worst
from stresskit.report.result_pictures import switch_segments
from stresskit.report.sections import SECTIONS, engine_cautions
from stresskit.report.style import css_variables
from stresskit.report.validation_page import questions_line
from stresskit.runs.cautions import STANDING
from stresskit.runs.records import StudyResult


def write_report(result: StudyResult, path: Path) -> None:
    """Write the report. The same result gives the same bytes. Raises OSError when the file cannot be written."""
    path.write_bytes(render_report(result).encode("utf-8"))


def render_report(result: StudyResult) -> str:
    """The report as text."""
    environment = _environment()
    script = _source("report.js")
    return environment.get_template("report.html.j2").render(
        style=Markup(css_variables() + _source("report.css")),
        script=Markup(script),
        # the one script that the page lets run is this one, by its digest
        script_digest=base64.b64encode(hashlib.sha256(script.encode("utf-8")).digest()).decode("ascii"),
        safety=STANDING,
        **_context(result),
    )


@functools.cache
def _environment() -> Environment:
    environment = Environment(
        loader=PackageLoader("stresskit.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters["name_of"] = name_of
    environment.filters["breakable"] = breakable
    return environment


def _source(name: str) -> str:
    environment = _environment()
    if environment.loader is None:
        raise ValueError("the report's templates have no loader")
    return environment.loader.get_source(environment, name)[0]


def breakable(words: str) -> Markup:
    """The words escaped, with a place to break after the joints of long names."""
    parts = re.split(r"(?<=[_/:\[])", words)
    return Markup("<wbr>").join(parts)


def _context(result: StudyResult) -> Mapping[str, Any]:
    """Everything that the template shows."""
    built = [(section, section.build(result)) for section in SECTIONS]
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
        "sections": [(section, part) for section, part in built if part is not None],
        "switch_scenarios": scenario_marks(result),
        "switch_segments": switch_segments(result),
    }
