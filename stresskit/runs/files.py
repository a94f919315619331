"""Several files that are all put in place or none: written beside their places first, then renamed."""

from __future__ import annotations

import contextlib
import errno
import os
import tempfile
from collections.abc import Mapping
from pathlib import Path

from stresskit.core.errors import OutputError

#: How a file system says that it has no hard links.
_NO_LINKS = (errno.EPERM, errno.ENOTSUP, errno.EOPNOTSUPP, errno.ENOSYS, errno.EMLINK)


def put_files(texts: Mapping[Path, str], *, replace: bool = False, ours: Mapping[Path, str]) -> None:
    """Write every text to its path, all or none. Folders are made as needed.

    replace  whether files that exist are overwritten, and then only those that begin as ``ours`` says

    Raises OutputError for a place that exists already, is not ours, or cannot be written; nothing has
    changed then. A kill between two renames can leave some of the files: each of them is whole.
    """
    for path in texts:
        check_place(path, replace=replace, ours=ours[path])
    parts: dict[Path, Path] = {}
    before: dict[Path, bytes | None] = {}
    try:
        for path, text in texts.items():
            path.parent.mkdir(parents=True, exist_ok=True)
            parts[path] = _written(path, text)
        for path, part in parts.items():
            before[path] = path.read_bytes() if replace and path.exists() else None
            _rename(part, path, replace=replace)
    except BaseException as error:
        _undo(before, parts)
        if isinstance(error, OSError):
            where = error.filename2 or error.filename or ", ".join(map(str, texts))
            raise OutputError(
                f"writing {where} failed: {error.strerror or error}; nothing was left there"
            ) from error
        raise
    finally:
        for part in parts.values():
            part.unlink(missing_ok=True)


def check_place(path: Path, *, replace: bool, ours: str) -> None:
    """Raises OutputError when a file may not be written there."""
    if not path.exists():
        return
    if path.is_dir():
        raise OutputError(f"{path} is a folder; name a file")
    if not replace:
        raise OutputError(f"{path} exists already; choose another place, or add --replace to overwrite it")
    with path.open("rb") as stream:
        start = stream.read(len(ours.encode()))
    if start != ours.encode():
        raise OutputError(f"{path} was not written by this command: it is left alone, choose another place")


def _written(path: Path, text: str) -> Path:
    handle, name = tempfile.mkstemp(prefix=f".{path.name}.partial-{os.getpid()}-", dir=path.parent)
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        Path(name).chmod(0o644)
    except BaseException:
        Path(name).unlink(missing_ok=True)
        raise
    return Path(name)


def _rename(part: Path, path: Path, *, replace: bool) -> None:
    if replace:
        part.replace(path)
        return
    try:
        # a link fails where a rename would overwrite what appeared meanwhile
        os.link(part, path)
    except FileExistsError:
        raise OutputError(
            f"{path} appeared while this command was working; nothing was overwritten"
        ) from None
    except OSError as error:
        # a file system without links: the check and the rename are two steps there
        if error.errno not in _NO_LINKS or path.exists():
            raise
        part.rename(path)


def _undo(before: Mapping[Path, bytes | None], parts: Mapping[Path, Path]) -> None:
    for path, content in before.items():
        if content is not None:
            path.write_bytes(content)
        elif path.exists() and (not parts[path].exists() or path.samefile(parts[path])):
            with contextlib.suppress(OSError):
                path.unlink()
