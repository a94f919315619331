"""A run folder made by this interpreter comes out on another one.

STRESSKIT_SECOND_PYTHON names an interpreter of another version (or build) in which stresskit's dependencies are
installed; stresskit itself is taken from this source tree.
"""

from __future__ import annotations

import json
import os
import platform
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[2]
OTHER = os.environ.get("STRESSKIT_SECOND_PYTHON", "")


@pytest.mark.slow
@pytest.mark.skipif(not OTHER, reason="STRESSKIT_SECOND_PYTHON names no other interpreter (docs/repeat.md)")
def test_a_run_comes_out_on_another_interpreter(kept: Path) -> None:
    done = subprocess.run(
        [*OTHER.split(), "-m", "stresskit.cli", "verify", str(kept / "run"), "--json"],
        cwd=kept, capture_output=True, text=True, check=False, timeout=600, env=os.environ | {"PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert done.returncode == 0, done.stderr + done.stdout
    outcome = json.loads(done.stdout)
    assert outcome["ok"]
    changed = {c["what"]: c["words"] for c in outcome["changes"]}
    assert "code" not in changed, "the other interpreter runs another stresskit"
    assert changed["python"].startswith(f"python {platform.python_version()} at the run, ")
    assert not outcome["bitwise"]
    assert all(f["differences"] == 0 for f in outcome["files"])
    assert len(outcome["files"]) > 10
    summary = next(f for f in outcome["files"] if f["file"] == "summary.csv")
    assert summary["status"] in ("same bytes", "within tolerance")
    assert (summary["largest_relative"] or 0.0) <= 1e-9
