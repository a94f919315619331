"""A folder that is whole or not there: written under a temporary name beside its place, then renamed.

A killed process leaves at most folders named ``.NAME.partial-PID-...``, which no command reads and the next run into
the same place removes when the process that wrote them is gone. One killed while it replaced a run leaves the
earlier run in ``.NAME.partial-PID-old-.../NAME``: the next run puts it back first when nothing is in its place.
"""

from __future__ import annotations

import contextlib
import errno
import json
import os
import re
import shutil
import tempfile
from collections.abc import Iterator
from pathlib import Path

from stresskit.core.errors import OutputError


def _alive(pid: str) -> bool:
    if not pid.isdigit():
        return True
    try:
        os.kill(int(pid), 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _clear_leftovers(out: Path) -> None:
    if not out.parent.is_dir():
        return
    start = f".{out.name}.partial-"
    for left in sorted(out.parent.iterdir()):
        if not left.name.startswith(start):
            continue
        pid, _, rest = left.name.removeprefix(start).partition("-")
        if _alive(pid):
            continue
        before = left / out.name
        if rest.startswith("old-") and before.is_dir() and not out.exists():
            # killed between the two renames of a replacement
            with contextlib.suppress(OSError):
                before.rename(out)
        shutil.rmtree(left, ignore_errors=True)


def _check_replaceable(out: Path) -> None:
    """Only a folder that stresskit wrote, and nobody added to, may be overwritten."""
    try:
        record = json.loads((out / "manifest.json").read_text(encoding="utf-8"))
        known = {*record["outputs"], "manifest.json", "times.json"} if record["study_digest"] else set()
    except (OSError, ValueError, KeyError, TypeError):
        raise OutputError(
            f"{out} exists and is not a run folder (no manifest.json of ours): it is left alone, choose another --out"
        ) from None
    others = sorted(
        f.relative_to(out).as_posix()
        for f in out.rglob("*")
        if f.is_file() and f.relative_to(out).as_posix() not in known
    )
    if others:
        raise OutputError(
            f"{out} holds files that the run did not write ({len(others)}, first {', '.join(others[:3])}): it is left alone; "
            "move them away or choose another --out"
        )


@contextlib.contextmanager
def whole_folder(out: Path, *, replace: bool = False, probe: bool = False) -> Iterator[Path]:
    """A folder to write into that becomes ``out`` only if the block ends without an error.

    With ``probe`` it never does: the block only learns early whether the place could be written.

    Raises OutputError when ``out`` exists and ``replace`` is false, or cannot be written.
    """
    out = Path(os.path.realpath(out))
    with contextlib.suppress(OSError):
        _clear_leftovers(out)
    empty = out.is_dir() and not any(out.iterdir())
    if out.exists() and not empty and not replace:
        raise OutputError(f"{out} exists already; choose another --out, or add --replace to overwrite it")
    if out.exists() and not empty:
        _check_replaceable(out)
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        part = Path(tempfile.mkdtemp(prefix=f".{out.name}.partial-{os.getpid()}-", dir=out.parent))
    except OSError as e:
        raise OutputError(f"cannot write to {out.parent}: {_reason(e)}") from e
    try:
        yield part
        if not probe:
            _put_in_place(part, out, replace=replace)
    except OSError as e:
        raise OutputError(f"writing {out} failed: {_reason(e)}; nothing was left there") from e
    finally:
        shutil.rmtree(part, ignore_errors=True)


def _reason(error: OSError) -> str:
    """Why, in the system's words; libraries that write files by themselves wrap them."""
    number = re.search(r"\[errno (\d+)\]", str(error), re.IGNORECASE)
    if number is not None:
        return os.strerror(int(number[1]))
    return error.strerror or str(error)


def _put_in_place(part: Path, out: Path, *, replace: bool) -> None:
    part.chmod(0o755)
    for file in sorted(part.rglob("*")):
        if file.is_file():
            with file.open("rb") as f:
                os.fsync(f.fileno())
    # a rename puts a folder where there is none or an empty one, and fails where another run was quicker
    if _renamed(part, out):
        return
    if not replace:
        raise OutputError(f"{out} appeared while this run was working; nothing was overwritten")
    old = Path(tempfile.mkdtemp(prefix=f".{out.name}.partial-{os.getpid()}-old-", dir=out.parent))
    try:
        with contextlib.suppress(FileNotFoundError):  # another run is replacing it as well
            out.rename(old / out.name)
        if not _renamed(part, out):
            raise OutputError(
                f"{out} was replaced by another run while this one was working; that one was kept"
            )
    except OSError:
        if (old / out.name).is_dir():
            _renamed(old / out.name, out)
        raise
    finally:
        shutil.rmtree(old, ignore_errors=True)


def _renamed(part: Path, out: Path) -> bool:
    """Whether the folder could be given the name; not when a folder with files has it."""
    if os.name == "nt" and out.is_dir() and not any(out.iterdir()):
        out.rmdir()  # a rename onto an empty folder fails there
    try:
        part.rename(out)
    except OSError as e:
        if e.errno in (errno.ENOTEMPTY, errno.EEXIST) or (os.name == "nt" and out.exists()):
            return False
        raise
    return True
