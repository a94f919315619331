"""Runs of a study that are killed (SIGKILL), each in a child process of this one.

    python -m tests.faults.kill_server STUDY

One whole run in this process imports what a run needs and loads the compiled kernels; then every run is a fork that
begins at once. Reads a line of JSON per run, [out, replace, how, value]; how "seconds": killed after so many seconds of work
(not of waiting for a processor); how "call": kills itself at the so-manieth call to the file system after the projection;
how "whole" and "count": not killed. For "call" and "count" the report is a plain file of its size: drawing it touches no
file. Prints a line of JSON per run: seconds of work, exit code (-9 when it was killed), and for runs that were not killed
the number of calls to the file system.
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import sys
import tempfile
import time
from pathlib import Path

from stresskit import cli
from stresskit.analyses import whole
from stresskit.report import folder as report_folder
from stresskit.runs import evidence, folder, what_if

#: Calls to the file system that a kill is put before, as Python names them to an audit hook.
_CALLS = ("open", "os.rename", "os.mkdir", "os.rmdir", "os.remove", "os.chmod", "os.scandir", "os.link")
_LOADED = (report_folder, evidence, folder, what_if)


def _child(study: str, out: str, replace: bool, how: str, value: float, report: int) -> None:
    os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
    os.dup2(os.open(os.devnull, os.O_WRONLY), 2)
    seen = [0]
    project = whole.project_setting

    def counting(event: str, _: object) -> None:
        if event in _CALLS:
            seen[0] += 1
            if how == "call" and seen[0] == value:
                os.kill(os.getpid(), signal.SIGKILL)

    def projected(*given: object, **named: object) -> object:
        done = project(*given, **named)  # type: ignore[arg-type]
        sys.addaudithook(counting)
        return done

    if how in ("call", "count"):
        report_folder._report = _plain_report
    whole.project_setting = projected  # type: ignore[assignment]
    words = ["run", study, "--out", out, "--no-evidence", *(["--replace"] if replace else [])]
    try:
        cli.main(words)
    except SystemExit as e:
        os.write(report, json.dumps(seen[0]).encode())
        os._exit(int(e.code or 0))


def _plain_report(_: object, folder: Path) -> None:
    (folder / "report.html").write_text("x" * 400_000)


def _worked(pid: int) -> float:
    """Seconds of work of a process so far; inf when it is over."""
    try:
        words = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    except OSError:
        return float("inf")
    if words[0] == "Z":
        return float("inf")
    return (int(words[11]) + int(words[12])) / os.sysconf("SC_CLK_TCK")


def _warmed(study: str) -> None:
    with (
        tempfile.TemporaryDirectory() as place,
        Path(os.devnull).open("w") as nowhere,
        contextlib.redirect_stdout(nowhere),
        contextlib.suppress(SystemExit),
    ):
        cli.main(["run", study, "--out", str(Path(place) / "run"), "--no-evidence"])


def main(study: str) -> None:
    """One run after the other, until nothing more is asked."""
    _warmed(study)
    for line in sys.stdin:
        out, replace, how, value = json.loads(line)
        read, write = os.pipe()
        pid = os.fork()
        if pid == 0:
            _child(study, out, replace, how, value, write)
        os.close(write)
        if how == "seconds":
            while _worked(pid) < value:
                time.sleep(0.003)
            os.kill(pid, signal.SIGKILL)
        _, status, used = os.wait4(pid, 0)
        code, took = os.waitstatus_to_exitcode(status), used.ru_utime + used.ru_stime
        calls = os.read(read, 100).decode()
        os.close(read)
        before = Path(out).is_dir()
        print(json.dumps({"took": took, "code": code, "calls": int(calls or 0), "there": before}), flush=True)


if __name__ == "__main__":
    main(*sys.argv[1:])
