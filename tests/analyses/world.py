"""A small study set up for projections, shared by the tests of one file."""

from __future__ import annotations

from pathlib import Path

import stresskit as sk
from stresskit.runs.api import checked_setting
from stresskit.runs.setting import Setting
from tests.cli.small_study import write_small_study


def small_setting(folder: Path) -> Setting:
    """The small study of the command line's tests, fitted and set up."""
    file = sk.load_study(write_small_study(folder))
    data = sk.prepare(file)
    return checked_setting(file, data, sk.fit(file, data))[0]
