"""A folder of results with its record: whole or not there, every file in it named by digest in manifest.json."""

from __future__ import annotations

import contextlib
import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from stresskit.runs.build import build
from stresskit.runs.manifest import FORMAT, MANIFEST, TIMES, Kind
from stresskit.runs.place import whole_folder
from stresskit.runs.record import digest_file, relative


@contextlib.contextmanager
def recorded_folder(
    out: Path,
    record: Mapping[str, Any],
    *,
    kind: Kind,
    command: Sequence[str],
    base: Path | None = None,
    replace: bool = False,
    times: Callable[[], Mapping[str, str]] | None = None,
) -> Iterator[Path]:
    """A folder to write results into, which becomes ``out`` with its manifest when the block ends without an error.

    base   folder that the inputs' names are relative to; None when there is none
    times  asked last, goes into times.json; nothing else in the folder depends on a clock

    Raises OutputError when ``out`` exists (and ``replace`` is false) or cannot be written.
    """
    with whole_folder(out, replace=replace) as part:
        yield part
        place = None if base is None else relative(base.resolve(), out.resolve())
        text = manifest_text(record, part, kind=kind, command=command, inputs_at=place)
        (part / MANIFEST).write_text(text, encoding="utf-8")
        if times is not None:
            (part / TIMES).write_text(json.dumps(dict(times()), indent=2) + "\n", encoding="utf-8")


def manifest_text(
    record: Mapping[str, Any], folder: Path, *, kind: Kind, command: Sequence[str], inputs_at: str | None
) -> str:
    """The record, how it was asked for, on what build, and the digest of every file that is in the folder by now."""
    whole = dict(record) | {
        "format": FORMAT,
        "kind": kind,
        "command": list(command),
        "place": {"inputs": inputs_at},
        "build": build(),
        "outputs": {
            f.relative_to(folder).as_posix(): digest_file(f) for f in sorted(folder.rglob("*")) if f.is_file()
        },
    }
    return json.dumps(whole, indent=2, ensure_ascii=False, sort_keys=True) + "\n"
