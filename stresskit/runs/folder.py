"""A run folder: written under a temporary name beside its place, renamed when whole.

A killed run leaves at most a folder named ``.NAME.partial-...``, which no command reads and the next
run into the same place removes when the process that wrote it is gone.
"""

from __future__ import annotations

import contextlib
import json
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

import pandas as pd

from stresskit.core.errors import OutputError
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile
from stresskit.runs.record import build_record, digest_file
from stresskit.runs.records import StudyResult
from stresskit.runs.tables import coefficient_table

Writer = Callable[[StudyResult, Path], None]


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
    for old in out.parent.glob(f".{out.name}.partial-*"):
        pid = old.name.rsplit("partial-", 1)[1].split("-")[0]
        if not _alive(pid):
            shutil.rmtree(old, ignore_errors=True)


@contextlib.contextmanager
def whole_folder(out: Path, *, replace: bool = False, probe: bool = False) -> Iterator[Path]:
    """A folder to write into that becomes ``out`` only if the block ends without an error.

    With ``probe`` it never does: the block only learns early whether the place could be written.

    Raises OutputError when ``out`` exists and ``replace`` is false, or cannot be written.
    """
    out = Path(os.path.abspath(out))
    empty = out.is_dir() and not any(out.iterdir())
    if out.exists() and not empty and not replace:
        raise OutputError(f"{out} exists already; choose another --out, or add --replace to overwrite it")
    if out.exists() and not empty and not (out / "manifest.json").is_file():
        raise OutputError(
            f"{out} exists and is not a run folder (no manifest.json): it is left alone, choose another --out"
        )
    try:
        out.parent.mkdir(parents=True, exist_ok=True)
        _clear_leftovers(out)
        part = Path(tempfile.mkdtemp(prefix=f".{out.name}.partial-{os.getpid()}-", dir=out.parent))
    except OSError as e:
        raise OutputError(f"cannot write to {out.parent}: {e.strerror or e}") from e
    try:
        yield part
        if not probe:
            _put_in_place(part, out, replace=replace)
    except OSError as e:
        raise OutputError(f"writing {out} failed: {e.strerror or e}; nothing was left there") from e
    finally:
        shutil.rmtree(part, ignore_errors=True)


def _put_in_place(part: Path, out: Path, *, replace: bool) -> None:
    part.chmod(0o755)
    for file in sorted(part.rglob("*")):
        if file.is_file():
            with file.open("rb") as f:
                os.fsync(f.fileno())
    if out.exists() and not any(out.iterdir()):
        out.rmdir()
    if not out.exists():
        part.rename(out)
        return
    if not replace:
        raise OutputError(f"{out} appeared while this run was working; nothing was overwritten")
    old = Path(tempfile.mkdtemp(prefix=f".{out.name}.partial-{os.getpid()}-old-", dir=out.parent))
    out.rename(old / out.name)
    try:
        part.rename(out)
    except OSError:
        (old / out.name).rename(out)
        raise
    finally:
        shutil.rmtree(old, ignore_errors=True)


def write_models(fits: Mapping[str, HazardFit], folder: Path) -> None:
    """models/<cause>.json and coefficients are all that a later projection needs."""
    folder.mkdir(parents=True, exist_ok=True)
    for cause, fit in fits.items():
        (folder / f"{cause}.json").write_text(fit.to_json() + "\n", encoding="utf-8")


def write_model_folder(
    fits: Mapping[str, HazardFit],
    file: StudyFile,
    data: Prepared,
    out: Path,
    *,
    command: Sequence[str],
    replace: bool,
) -> None:
    """The folder that `stresskit fit` leaves: models, coefficients, reconciliation, record."""
    with whole_folder(out, replace=replace) as part:
        write_models(fits, part)
        plain_csv(coefficient_table(fits), part / "coefficients.csv")
        plain_csv(data.loans.reconciliation, part / "reconciliation.csv")
        record = build_record(file.loaded, file.scenarios, data.digests) | {"command": list(command)}
        _write_record(record, part)


def read_models(folder: Path) -> dict[str, HazardFit]:
    """Models written by :func:`write_models`. Raises OutputError when there are none."""
    files = sorted(f for f in folder.glob("*.json") if f.name not in ("manifest.json", "times.json"))
    if not files:
        raise OutputError(f"{folder} holds no models (*.json); run `stresskit fit` first")
    return {f.stem: HazardFit.from_json(f.read_text(encoding="utf-8")) for f in files}


def plain_csv(frame: pd.DataFrame, path: Path) -> None:
    """CSV with full precision in which no cell starts a formula in a spreadsheet."""
    safe = frame.copy()
    for column in safe.columns[[safe[c].dtype == object for c in safe.columns]]:
        safe[column] = safe[column].map(neutral)
    safe.to_csv(path, index=False, lineterminator="\n")


def neutral(value: object) -> object:
    """Text that a spreadsheet would run as a formula gets an apostrophe in front; all else as it is."""
    if isinstance(value, str) and value[:1] in ("=", "+", "-", "@", "\t", "\r"):
        return "'" + value
    return value


def _write_record(record: dict[str, Any], folder: Path) -> None:
    """manifest.json, with the digest of every file written before it."""
    record["outputs"] = {
        f.relative_to(folder).as_posix(): digest_file(f) for f in sorted(folder.rglob("*")) if f.is_file()
    }
    text = json.dumps(record, indent=2, ensure_ascii=False, sort_keys=True)
    (folder / "manifest.json").write_text(text + "\n", encoding="utf-8")


def write_folder(
    result: StudyResult,
    fits: Mapping[str, HazardFit],
    out: Path,
    *,
    command: Sequence[str],
    writers: Sequence[Writer] = (),
    replace: bool = False,
    times: Callable[[], Mapping[str, str]] | None = None,
) -> None:
    """Write a finished result as a run folder; ``writers`` add report and workbook to it.

    manifest.json carries the digest of every other file and no clock time; ``times``, asked last,
    goes into times.json, the one file that differs between two runs of the same study.
    """
    with whole_folder(out, replace=replace) as part:
        write_models(fits, part / "models")
        for name in (
            "summary",
            "coefficients",
            "paths",
            "features",
            "reconciliation",
            "findings",
            "not_projected",
        ):
            plain_csv(getattr(result, name), part / f"{name}.csv")
        plain_csv(result.hazard_by_age, part / "hazard_by_age.csv")
        plain_csv(result.actual_expected, part / "actual_expected.csv")
        plain_csv(result.alignment, part / "alignment.csv")
        result.segments.to_parquet(part / "segments.parquet", index=False)
        result.loans.to_parquet(part / "loans.parquet", index=False)
        for write in writers:
            write(result, part)
        record = dict(result.record)
        record["command"] = list(command)
        record["cautions"] = list(result.cautions)
        _write_record(record, part)
        if times is not None:
            (part / "times.json").write_text(json.dumps(dict(times()), indent=2) + "\n", encoding="utf-8")
