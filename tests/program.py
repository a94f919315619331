"""The command line called within the test's own process.

A new process spends three to four seconds of processor time on imports before it does anything, far more than most
commands work. Tests of what a command says and writes call it here; those of the process itself (signals, terminals,
what is imported, full disks, two at a time) start one, and each file of tests that does neither is named by one that does.
"""

from __future__ import annotations

import contextlib
import io
import os
import signal
import subprocess
import sys
import warnings
from collections.abc import Iterator
from pathlib import Path
from unittest import mock

from stresskit.cli import main


@contextlib.contextmanager
def in_folder(folder: Path, words: list[str]) -> Iterator[None]:
    """As a process started there with these words would find it. Warnings are errors; signal handlers are put back."""
    kept = {number: signal.getsignal(number) for number in (signal.SIGINT, signal.SIGTERM)}
    with contextlib.chdir(folder), mock.patch.object(sys, "argv", words), warnings.catch_warnings():
        warnings.simplefilter("error")
        try:
            yield
        finally:
            for number, handler in kept.items():
                signal.signal(number, handler)


def stresskit(*words: str | Path, cwd: Path, **env: str) -> subprocess.CompletedProcess[str]:
    """What ``stresskit WORDS`` in the folder ends with: exit code, stdout, stderr, neither of them a terminal."""
    plain = [str(word) for word in words]
    out, err = (io.TextIOWrapper(io.BytesIO(), encoding="utf-8", write_through=True) for _ in range(2))
    with (
        in_folder(cwd, ["stresskit", *plain]),
        mock.patch.dict(os.environ, env),
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        try:
            main()
            code: object = None
        except SystemExit as ended:
            code = ended.code
    told = [stream.buffer.getvalue().decode("utf-8") for stream in (out, err)]  # type: ignore[attr-defined]
    assert isinstance(code, int), f"ended with {code!r}, which is no exit code"
    return subprocess.CompletedProcess(plain, code, *told)
