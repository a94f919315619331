"""A study's whole result: projected, its fits questioned, its analyses made, out of one setting."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator, Mapping
from contextlib import AbstractContextManager

from stresskit.analyses.ask import Progress, Say, add_analyses, asked
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import checked_setting, project_setting
from stresskit.runs.evidence import add_evidence
from stresskit.runs.inputs import Prepared, StudyFile
from stresskit.runs.records import StudyResult
from stresskit.runs.setting import Setting

#: Of a stage's name: a block in which its progress can be told.
Bar = Callable[[str], AbstractContextManager[Progress]]


def _silent(_: str) -> None:
    return None


@contextlib.contextmanager
def _no_bar(_: str) -> Iterator[Progress]:
    yield lambda done, total: None


def whole_result(
    file: StudyFile,
    data: Prepared,
    fits: Mapping[str, HazardFit],
    *,
    evidence: bool,
    say: Say = _silent,
    bar: Bar = _no_bar,
) -> StudyResult:
    """What `stresskit run` writes. Book and recovery are made ready once, for the projection and for every analysis.

    Raises what :func:`stresskit.runs.api.project` raises; evidence and analyses that cannot be made become cautions.
    """
    setting, _ = checked_setting(file, data, fits, say=say)
    with bar("blocks of loans") as progress:
        result = project_setting(setting, say=say, progress=progress)
    kept: Setting | None = setting if asked(file) else None
    # a book that nobody asks again leaves its room to the evidence
    del setting
    if evidence:
        result = add_evidence(result, file, data, fits, say=say)
    if kept is None:
        return result
    with bar("analyses") as progress:
        return add_analyses(result, kept, say=say, progress=progress)
