"""kill -9 at any moment of a run: no folder that looks finished and is not, no input changed, and the next run works."""

from __future__ import annotations

import hashlib
import json
import os
import random
import shutil
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from stresskit.core.errors import UsageError
from stresskit.runs.manifest import check_outputs, read_manifest
from tests.cli.small_study import BASELINE, write_small_study

pytestmark = [
    pytest.mark.slow,
    pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="work of a process is read from /proc"),
]
# Kills before calls always fall within the run, whatever the machine does besides; those by time may come after it.
SEED, AT_SECONDS, AT_CALLS, LAST = 20251231, 16, 32, 6


def digests(folder: Path) -> dict[str, str]:
    return {f.name: hashlib.sha256(f.read_bytes()).hexdigest() for f in folder.iterdir() if f.is_file()}


def finished(out: Path) -> bool:
    """Whether the folder looks finished; if it does, it must be, to the last byte."""
    if not out.exists():
        return False
    try:
        found = check_outputs(read_manifest(out))
    except UsageError:
        pytest.fail(f"{out} is there and is no run folder")
    assert found.sound, found
    assert not found.added
    return True


@dataclass(frozen=True)
class Runs:
    """Runs of the study, one after the other, in forks of one process."""

    server: subprocess.Popen[str]

    def one(self, out: Path | str, replace: bool, how: str, value: float = 0) -> dict[str, Any]:
        """What became of a run, when it is over."""
        assert self.server.stdin is not None
        assert self.server.stdout is not None
        self.server.stdin.write(json.dumps([str(out), replace, how, value]) + "\n")
        self.server.stdin.flush()
        told: dict[str, Any] = json.loads(self.server.stdout.readline())
        return told


@pytest.fixture
def runs(study: Path) -> Iterator[Runs]:
    with subprocess.Popen(
        [sys.executable, "-m", "tests.faults.kill_server", str(study)],
        stdin=subprocess.PIPE, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True,
        env=os.environ | {"TMPDIR": str(study.parent.parent / "temporary"), "OPENBLAS_NUM_THREADS": "1"},
    ) as server:  # fmt: skip
        try:
            yield Runs(server)
        finally:
            server.kill()


@pytest.fixture
def study(tmp_path: Path) -> Path:
    folder = tmp_path / "book"
    folder.mkdir()
    (tmp_path / "temporary").mkdir()
    file = write_small_study(folder, loans=80)
    text = file.read_text()
    for old, new in (
        ("segments: [product, place]", "segments: []"),
        ("      - {loan: product, as: category, reference: fixed}\n", ""),
        ("[baseline.yaml, slump.yaml]", "[baseline.yaml]"),
    ):
        assert old in text
        text = text.replace(old, new)
    file.write_text(text + "horizon: 12\n")
    (folder / "baseline.yaml").write_text(BASELINE.replace("weight: 0.7\n", ""))
    return file


def plan_of(study: Path, took: float, calls: dict[bool, int]) -> list[list[Any]]:
    """Kills spread over the time of a run, half of them into an empty place and half over a finished run; then kills
    before calls to the file system, spread over the writing, and at each of the last ones, where folders are renamed.

    calls  by whether a run is replaced
    """
    draw = random.Random(SEED)
    place = {True: str(study.parent.parent / "replaced"), False: str(study.parent.parent / "fresh")}
    plan: list[list[Any]] = []
    for i in range(AT_SECONDS):
        plan.append([place[i % 2 == 0], i % 2 == 0, "seconds", took * (i + draw.random()) / AT_SECONDS])
    for i in range(AT_CALLS):
        plan.append([place[i % 2 == 0], i % 2 == 0, "call", 1 + (calls[i % 2 == 0] - LAST) * i // AT_CALLS])
    plan += [[place[r], r, "call", calls[r] - k] for k in range(LAST) for r in (True, False)]
    return plan


def test_a_kill_at_any_moment(study: Path, runs: Runs) -> None:
    place = study.parent.parent
    fresh, replaced = place / "fresh", place / "replaced"
    before = digests(study.parent)
    whole = [(replaced, False, "whole"), (replaced, True, "count"), (fresh, False, "count")]
    first = [runs.one(*asked) for asked in whole]
    assert [r["code"] for r in first] == [0, 0, 0]
    assert first[2]["calls"] > 30
    assert finished(replaced)
    assert finished(fresh)
    shutil.rmtree(fresh)
    plan = plan_of(study, first[0]["took"], {True: first[1]["calls"], False: first[2]["calls"]})
    killed = lost = 0
    for out, replace, how, value in plan:
        run = runs.one(out, replace, how, value)
        killed += run["code"] == -9
        assert run["code"] in (-9, 0, 2)
        there = finished(Path(out))
        if replace:
            # between the two renames of a replacement the earlier run has another name for a moment
            lost += not there
        elif there:
            # it was whole before the kill came; the next one shall find the place empty again
            shutil.rmtree(fresh)
        assert digests(study.parent) == before
    assert killed >= 50
    left = {p.name for p in place.iterdir()} - {"book", "temporary", "fresh", "replaced"}
    assert all(n.startswith((".fresh.partial-", ".replaced.partial-")) for n in left), left
    assert all(p.name.startswith("stresskit-") for p in (place / "temporary").iterdir())
    last = [runs.one(fresh, False, "whole"), runs.one(replaced, True, "whole")]
    assert [r["code"] for r in last] == [0, 0]
    assert finished(fresh)
    assert finished(replaced)
    assert not [p for p in place.iterdir() if "partial-" in p.name], (
        "leftovers of killed runs are cleared by the next"
    )
    assert read_manifest(fresh).outputs == read_manifest(replaced).outputs
    assert lost <= 2
