"""Studies set up for projections, for the tests of analyses."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import stresskit as sk
from stresskit.runs.api import checked_setting
from stresskit.runs.inputs import StudyFile
from stresskit.runs.setting import Setting
from tests.cli.small_study import write_small_study


def setting_of(study: StudyFile | Path, **frames: Any) -> Setting:
    """A study fitted and set up; ``frames`` (loans, macro, ...) in place of its files."""
    file = sk.load_study(study) if isinstance(study, Path) else study
    data = sk.prepare(file, **frames)
    return checked_setting(file, data, sk.fit(file, data))[0]


def small_setting(folder: Path) -> Setting:
    """The small study of the command line's tests, fitted and set up."""
    return setting_of(write_small_study(folder))
