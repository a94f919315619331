"""Ctrl-C in the middle of a projection on threads: exit code 130, and no folder, whole or half."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

from tests.cli.small_study import write_small_study

#: The command line with a projection that interrupts its own process once blocks are being computed on two threads.
PROGRAM = """
import os, signal, sys, time
from stresskit import cli
from stresskit.loss import book
from stresskit.runs import api
whole, done = book._Job.block, []
def block(self, k):
    done.append(k)
    if len(done) == 2:
        print("in the middle", flush=True)
        os.kill(os.getpid(), signal.SIGINT)
        time.sleep(0.5)
    return whole(self, k)
book._Job.block = block
book.BLOCK = 64
api.processors = lambda: 2
cli.main(sys.argv[1:])
"""


@pytest.mark.slow
@pytest.mark.skipif(os.name == "nt", reason="signals are sent differently on Windows")
def test_nothing_is_left(tmp_path: Path) -> None:
    study = write_small_study(tmp_path)
    before = {p.name for p in tmp_path.iterdir()}
    words = ["run", str(study), "--out", str(tmp_path / "run1"), "--no-evidence"]
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM, *words], capture_output=True, text=True, timeout=120, check=False
    )
    assert "in the middle" in done.stdout
    assert done.returncode == 130, done.stderr
    assert "nothing half-written was left" in done.stderr
    assert {p.name for p in tmp_path.iterdir()} == before
