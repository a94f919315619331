"""A finished result as a run folder: models, tables, record."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from stresskit.core.errors import OutputError, TextError
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile, study_record
from stresskit.runs.loan_rows import LoanRows
from stresskit.runs.manifest import MANIFEST
from stresskit.runs.record import digest_file
from stresskit.runs.recorded import recorded_folder
from stresskit.runs.records import StudyResult
from stresskit.runs.saved_models import SavedModels, model_text
from stresskit.runs.tables import coefficient_table

Writer = Callable[[StudyResult, Path], None]


def write_models(fits: Mapping[str, HazardFit], folder: Path) -> None:
    """models/<cause>.json and coefficients are all that a later projection needs."""
    folder.mkdir(parents=True, exist_ok=True)
    for cause, fit in fits.items():
        (folder / f"{cause}.json").write_text(model_text(fit), encoding="utf-8")


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
    record = study_record(file, data)
    with recorded_folder(
        out, record, kind="models", command=command, base=file.base, replace=replace
    ) as part:
        write_models(fits, part)
        plain_csv(coefficient_table(fits), part / "coefficients.csv")
        plain_csv(data.loans.reconciliation, part / "reconciliation.csv")


def read_models(folder: Path, *, untouched: bool = True) -> SavedModels:
    """Models written by :func:`write_models`. Raises OutputError when there are none.

    untouched  whether a record that lies with them must know them: TextError for a model that was changed after it was
               written, since nothing that was fitted, and no gate that was passed, stands behind it any more
    """
    record, inside = folder / MANIFEST, ""
    if (folder / "models").is_dir():  # a run folder
        folder, inside = folder / "models", "models/"
    elif folder.resolve().name == "models" and not record.is_file():
        record, inside = folder.resolve().parent / MANIFEST, "models/"
    files = sorted(f for f in folder.glob("*.json") if f.name not in (MANIFEST, "times.json"))
    if not files:
        raise OutputError(f"{folder} holds no models (*.json); run `stresskit fit` first")
    written = _recorded_digests(record) if untouched else {}
    changed = [f for f in files if written.get(inside + f.name, digest_file(f)) != digest_file(f)]
    if changed:
        raise TextError(
            f"{changed[0]} is not the file that was written: {record} has another digest of it, so it was changed after the fit"
            f"{f' (and {len(changed) - 1} more)' if len(changed) > 1 else ''}. Fit again. A model that is meant to differ goes "
            "into a folder of its own; its digest is then in the record of the run"
        )
    return SavedModels((f.stem, HazardFit.from_json(f.read_text(encoding="utf-8"))) for f in files)


def _recorded_digests(record: Path) -> dict[str, str]:
    """File name -> digest of a folder's record; none where there is no record that can be read."""
    try:
        plain = json.loads(record.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return {}
    outputs = plain.get("outputs") if isinstance(plain, dict) else None
    return dict(outputs) if isinstance(outputs, dict) else {}


def plain_csv(frame: pd.DataFrame, path: Path) -> None:
    """CSV with full precision in which no cell starts a formula in a spreadsheet."""
    safe = frame.copy()
    for column in safe.columns[[safe[c].dtype == object for c in safe.columns]]:
        safe[column] = safe[column].map(neutral)
    # Text is always quoted: a carriage return in it would else end the line for many readers.
    safe.to_csv(path, index=False, lineterminator="\n", quoting=csv.QUOTE_NONNUMERIC)


def neutral(value: object) -> object:
    """Text that a spreadsheet would run as a formula gets an apostrophe in front; all else as it is."""
    if isinstance(value, str) and value[:1] in ("=", "+", "-", "@", "\t", "\r"):
        return "'" + value
    return value


#: Rows of a row group: a reader can take one without the others, and no more than one is held twice while writing.
ROW_GROUP = 131_072


def streamed_parquet(table: pd.DataFrame | LoanRows, path: Path) -> None:
    """Parquet written row group by row group, so that a long table is never held as a whole: rows that are not there
    yet are made for one group at a time."""
    few = table.typed() if isinstance(table, LoanRows) else _typed(table)
    schema = pa.Schema.from_pandas(few, preserve_index=False)
    with pq.ParquetWriter(path, schema) as writer:
        for start in range(0, max(len(table), 1), ROW_GROUP):
            stop = min(start + ROW_GROUP, len(table))
            part = table.part(start, stop) if isinstance(table, LoanRows) else table.iloc[start:stop]
            writer.write_table(pa.Table.from_pandas(part, schema=schema, preserve_index=False, nthreads=1))


def _typed(frame: pd.DataFrame) -> pd.DataFrame:
    """A few rows from which the type of every column shows: of each the first that holds a value."""
    if not len(frame):
        return frame
    return frame.iloc[sorted({0, *(int(frame[c].notna().to_numpy().argmax()) for c in frame.columns)})]


def _write_what_ifs(record: Mapping[str, Any], folder: Path) -> None:
    """Text of the scenarios that no file of the study holds, ready to be used as one."""
    for scenario in record.get("scenarios", ()):
        if "what_if" in scenario.get("notes", {}):
            (folder / "scenarios").mkdir(exist_ok=True)
            (folder / "scenarios" / f"{scenario['name']}.yaml").write_bytes(scenario["text"].encode("utf-8"))


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

    manifest.json carries the digest of every other file and no clock time; ``times``, asked last, goes into times.json.
    Two runs of the same study differ in that file, and in the command and the place that manifest.json records.
    """
    record = {**result.record, "cautions": list(result.cautions)}
    with recorded_folder(
        out, record, kind="run", command=command, base=result.base, replace=replace, times=times
    ) as part:
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
        for name in ("years", "adjustments"):
            if getattr(result, name) is not None:
                plain_csv(getattr(result, name), part / f"{name}.csv")
        plain_csv(result.hazard_by_age, part / "hazard_by_age.csv")
        if result.hazard_by_macro is not None:
            plain_csv(result.hazard_by_macro, part / "hazard_by_macro.csv")
        plain_csv(result.actual_expected, part / "actual_expected.csv")
        plain_csv(result.alignment, part / "alignment.csv")
        result.segments.to_parquet(part / "segments.parquet", index=False)
        streamed_parquet(result.loan_rows, part / "loans.parquet")
        _write_what_ifs(result.record, part)
        for write in writers:
            write(result, part)
