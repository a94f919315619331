"""LibreOffice without a window: an independent program that opens the workbook and computes it again."""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import pytest

from tests.shared_inputs import under_ci

#: Formulas are computed on loading, whatever values the file carries.
_ALWAYS = """<?xml version="1.0" encoding="UTF-8"?>
<oor:items xmlns:oor="http://openoffice.org/2001/registry" xmlns:xs="http://www.w3.org/2001/XMLSchema">
<item oor:path="/org.openoffice.Office.Calc/Formula/Load"><prop oor:name="OOXMLRecalcMode" oor:op="fuse">
<value>0</value></prop></item></oor:items>
"""

needs_office = pytest.mark.skipif(
    shutil.which("soffice") is None and not under_ci(),
    reason="LibreOffice (soffice) is not installed on this machine; under CI the tests fail without it",
)


def converted(workbook: Path, kind: str) -> Path:
    """The workbook saved by LibreOffice as ``kind`` (xlsx, ods, pdf), every formula computed anew."""
    out, profile = workbook.parent / "converted", workbook.parent / "profile"
    (profile / "user").mkdir(parents=True, exist_ok=True)
    (profile / "user" / "registrymodifications.xcu").write_text(_ALWAYS)
    command = [
        "soffice",
        "--headless",
        f"-env:UserInstallation={profile.resolve().as_uri()}",
        "--convert-to",
        kind,
    ]
    done = subprocess.run(
        [*command, "--outdir", str(out), str(workbook)],
        capture_output=True,
        text=True,
        timeout=180,
        check=False,
    )
    file = out / f"{workbook.stem}.{kind}"
    assert file.is_file(), done.stderr
    return file
