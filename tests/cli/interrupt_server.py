"""Runs of a study that are sent a signal, each in a child process of this one.

    python -m tests.cli.interrupt_server STUDY OUT SIGNAL WAITS

One whole run in this process imports what a run needs and loads the compiled kernels; then every run is a fork that
begins at once. The temporary folder (TMPDIR) must be empty: a run has installed its handlers when it opens a folder there.
WAITS is JSON, seconds from then to the signal, one for each run. Prints a line of JSON per run: its exit code (minus the
signal when that killed it), what it wrote to stderr, and what lies in the temporary folder and beside OUT.
"""

from __future__ import annotations

import contextlib
import json
import os
import signal
import sys
import tempfile
import time
import traceback
from pathlib import Path

from stresskit import cli


def _run(study: str, out: str) -> int:
    with Path(os.devnull).open("w") as nowhere, contextlib.redirect_stdout(nowhere):
        try:
            cli.main(["run", study, "--out", out])
        except SystemExit as ended:
            return int(ended.code or 0)
    return 0


def _child(study: str, out: str, err: int) -> None:
    """The run, and the end of the process, whatever comes."""
    os.dup2(err, 2)
    code = 1
    try:
        code = _run(study, out)
    except BaseException:
        traceback.print_exc()
        raise
    finally:
        sys.stderr.flush()
        os._exit(code)


def main(study: str, out: str, name: str, waits: str) -> None:
    """One run after the other."""
    staging = Path(tempfile.gettempdir())
    with tempfile.TemporaryDirectory() as place:
        assert _run(study, str(Path(place) / "run")) == 0
    for wait in json.loads(waits):
        with tempfile.TemporaryFile(dir=Path(out).parent) as err:
            pid = os.fork()
            if pid == 0:
                _child(study, out, err.fileno())
            while not any(staging.glob("stresskit-*")) and os.waitid(os.P_PID, pid, _LOOK) is None:
                time.sleep(0.002)
            time.sleep(wait)
            os.kill(pid, getattr(signal, name))
            _, status = os.waitpid(pid, 0)
            err.seek(0)
            told = err.read().decode()
        beside = [p.name for p in Path(out).parent.iterdir()]
        left = [p.name for p in staging.iterdir()]
        code = os.waitstatus_to_exitcode(status)
        print(json.dumps({"code": code, "stderr": told, "staging": left, "beside": beside}), flush=True)


#: Only looks whether the child is over; it can be sent a signal and waited for afterwards all the same.
_LOOK = os.WEXITED | os.WNOHANG | os.WNOWAIT

if __name__ == "__main__":
    main(*sys.argv[1:])
