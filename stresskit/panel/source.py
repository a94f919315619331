"""Where the rows come from: files or a frame, as one relation in an own database connection.

Nothing is interpreted here. A CSV gives text in every column, a Parquet file or a frame its own types;
:mod:`stresskit.panel.cells` turns both into periods, numbers, codes and categories. A time with a zone stands
for the date and hour on its own clock; a Parquet column that names no zone (all its times are UTC) for those in UTC.
The zone of the machine plays no part.
"""

from __future__ import annotations

import glob
import hashlib
import os
import re
import signal
import tempfile
import threading
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from types import FrameType
from typing import Any

import duckdb
import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from stresskit.core.errors import DataError
from stresskit.panel.csvfile import check_names, csv_header, csv_trouble

_SUFFIXES = (".parquet", ".csv")


@dataclass(frozen=True, slots=True)
class Source:
    """One readable relation.

    relation  SQL text to stand after FROM
    types     column name -> database type, in the order of the file
    name      what to call it in messages
    digests   file -> SHA-256
    paths     path as given to the reader -> name for messages
    """

    relation: str
    types: Mapping[str, str]
    name: str
    digests: Mapping[str, str]
    paths: Mapping[str, str]


@dataclass(frozen=True, slots=True)
class Workspace:
    """A database connection and the temporary folder that lives as long as it."""

    connection: duckdb.DuckDBPyConnection
    folder: Path


@contextmanager
def workspace(memory_limit: str) -> Iterator[Workspace]:
    """An own in-memory database that may use ``memory_limit``, spills to a temporary folder, and loads nothing."""
    with _cleared_when_ended(), _temporary_folder() as folder:
        connection = duckdb.connect(
            ":memory:",
            config={
                "memory_limit": memory_limit,
                "temp_directory": str(Path(folder) / "spilled"),
                "autoinstall_known_extensions": False,
                "autoload_known_extensions": False,
                "allow_community_extensions": False,
                "preserve_insertion_order": False,
            },
        )
        try:
            connection.execute("SET enable_progress_bar = false")
            connection.execute("SET TimeZone = 'UTC'")
            yield Workspace(connection, Path(folder))
        finally:
            connection.close()


@contextmanager
def _temporary_folder() -> Iterator[str]:
    """A folder of its own, removed at the end. An interrupt that comes while it is made or removed waits until that is done."""
    with _undisturbed():
        folder = tempfile.TemporaryDirectory(prefix="stresskit-")
    try:
        yield folder.name
    finally:
        with _undisturbed():
            folder.cleanup()


@contextmanager
def _undisturbed() -> Iterator[None]:
    """Signals that end a program are handed to their handlers after the block, not in it."""
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    caught: list[tuple[int, FrameType | None]] = []
    handlers = {n: h for n in (signal.SIGINT, signal.SIGTERM) if callable(h := signal.getsignal(n))}
    for number in handlers:
        signal.signal(number, lambda n, frame: caught.append((n, frame)))
    try:
        yield
    finally:
        for number, handler in handlers.items():
            signal.signal(number, handler)
    for came, frame in caught[:1]:
        handlers[signal.Signals(came)](came, frame)


@contextmanager
def _cleared_when_ended() -> Iterator[None]:
    """A request to end (SIGTERM) unwinds the stack, so that no loan data stay in the temporary folder.

    Only where nobody else handles it; exit code 143 as the shell gives it.
    """
    main = threading.current_thread() is threading.main_thread()
    if not main or signal.getsignal(signal.SIGTERM) is not signal.SIG_DFL:
        yield
        return
    signal.signal(signal.SIGTERM, _end)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, signal.SIG_DFL)


def _end(number: int, frame: FrameType | None) -> None:
    raise SystemExit(128 + number)


#: Errors of the database that no file can cause: ours, or want of memory.
_NOT_THE_FILE = (
    duckdb.BinderException,
    duckdb.CatalogException,
    duckdb.ParserException,
    duckdb.InternalException,
    duckdb.OutOfMemoryException,
)


@contextmanager
def reading(source: Source) -> Iterator[None]:
    """Errors of the reader, met while ``source`` is read, as DataError in plain words."""
    try:
        yield
    except duckdb.Error as error:
        message = str(error)
        if isinstance(error, _NOT_THE_FILE) or _no_space(message):
            raise
        if any(path.lower().endswith(".csv") for path in source.paths):
            raise csv_trouble(message, dict(source.paths), source.name) from None
        if source.paths:
            raise DataError(
                f"{source.name} cannot be read: a Parquet file is damaged or incomplete"
            ) from None
        raise


@contextmanager
def within_means(name: str) -> Iterator[None]:
    """Want of memory or disk as DataError in plain words."""
    try:
        yield
    except duckdb.OutOfMemoryException as error:
        if _no_space(str(error)):
            raise DataError(
                f"no room for temporary files while reading {name}: free space on the disk"
            ) from None
        raise DataError(
            f"{name} needs more memory than loans.memory_limit allows: raise it, or check that the columns named as "
            "periods, status and categories really are such (each of their values is held once)"
        ) from None
    except duckdb.IOException as error:
        if _no_space(str(error)):
            raise DataError(
                f"no room for the temporary files of {name}: the disk is full or a file may not grow; free space, or point TMPDIR elsewhere"
            ) from None
        raise


def _no_space(message: str) -> bool:
    return any(
        words in message for words in ("No space left", "max_temp_directory_size", "Could not write file")
    )


def open_files(connection: duckdb.DuckDBPyConnection, pattern: str, base: Path) -> Source:
    """The file, glob or folder ``pattern``, relative to ``base``. Raises DataError for what cannot be read."""
    files = _files(pattern, base)
    paths = {str(path): _name(path, base) for path in files}
    suffixes = sorted({path.suffix.lower() for path in files})
    if len(suffixes) > 1:
        raise DataError(
            f"{pattern} holds both .csv and .parquet files: name one kind, for example {pattern}/*.parquet"
        )
    digests = {paths[str(path)]: _digest(path) for path in files}
    if suffixes[0] == ".csv":
        relation, types = _csv(files, paths)
    else:
        relation, types = _parquet(connection, files, paths)
    return Source(relation, types, pattern, digests, paths)


def staged(work: Workspace, source: Source, columns: Iterable[str], name: str) -> Source:
    """The columns of a CSV source, parsed once into a temporary Parquet file; any other source as it is."""
    if not any(path.lower().endswith(".csv") for path in source.paths):
        return source
    wanted = tuple(dict.fromkeys(columns))
    target = work.folder / f"{name}.parquet"
    listed = ", ".join(quoted(column) for column in wanted)
    with reading(source):
        work.connection.execute(
            f"COPY (SELECT {listed} FROM {source.relation}) TO {literal(str(target))} (FORMAT parquet)"
        )
    return replace(
        source,
        relation=f"read_parquet({file_literal(target)})",
        types={column: source.types[column] for column in wanted},
    )


def open_frame(connection: duckdb.DuckDBPyConnection, frame: pd.DataFrame, view: str, name: str) -> Source:
    """A pandas frame as relation ``view``. Values keep their types; Python objects become their text."""
    columns = [str(c) for c in frame.columns]
    check_names(columns, name)
    if frame.empty:
        raise DataError(f"{name} has no rows")
    ready = pd.DataFrame({c: _plain(frame.iloc[:, i]) for i, c in enumerate(columns)})
    connection.register(view, ready)
    types = {row[0]: row[1] for row in connection.execute(f"DESCRIBE {view}").fetchall()}
    return Source(view, types, name, {}, {})


def quoted(name: str) -> str:
    """A column or table name as SQL identifier."""
    return '"' + name.replace('"', '""') + '"'


def literal(text: str) -> str:
    """Text as SQL literal."""
    return "'" + text.replace("'", "''") + "'"


def file_literal(path: Path) -> str:
    """A file as SQL literal for the readers, which take *, ? and [ in a path for a pattern."""
    return literal(re.sub(r"([*?\[])", r"[\1]", str(path)))


def _name(path: Path, base: Path) -> str:
    """The path relative to the study's folder, so that messages and digests are the same on every machine."""
    return Path(os.path.relpath(path, base)).as_posix()


def _hidden(path: Path, base: Path) -> bool:
    """Whether a folder below ``base``, or the file, is one that tools leave behind (.name, _name)."""
    return any(
        part != ".." and part.startswith((".", "_")) for part in Path(os.path.relpath(path, base)).parts
    )


def _digest(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _files(pattern: str, base: Path) -> list[Path]:
    """Existing .csv and .parquet files that the pattern names, sorted; hidden ones are passed over."""
    there = base / pattern
    if there.is_file():
        if there.suffix.lower() not in _SUFFIXES:
            raise DataError(f"{pattern} is neither .parquet nor .csv, judged by its name")
        return [there]
    if there.is_dir():
        found = [p for p in there.rglob("*") if p.is_file() and not _hidden(p, there)]
        kind = f"folder {pattern} holds no .parquet or .csv file"
    elif any(c in pattern for c in "*?["):
        found = [
            p
            for p in (base / hit for hit in glob.glob(pattern, root_dir=base, recursive=True))
            if p.is_file()
        ]
        kind = f"no .parquet or .csv file matches {pattern}"
    else:
        near = sorted(p.name for p in there.parent.glob("*") if p.suffix.lower() in _SUFFIXES)[:5]
        beside = f" There are: {', '.join(near)}." if near else ""
        raise DataError(f"no file or folder {pattern}; paths are taken from the study file's folder.{beside}")
    files = sorted(p for p in found if p.suffix.lower() in _SUFFIXES)
    if not files:
        raise DataError(f"{kind}; paths are taken from the study file's folder")
    return files


def _csv(files: list[Path], paths: Mapping[str, str]) -> tuple[str, dict[str, str]]:
    """All files with the same columns, in whatever order each has them, every column as text."""
    by_header: dict[tuple[str, ...], list[Path]] = {}
    for path in files:
        by_header.setdefault(csv_header(path, paths[str(path)]), []).append(path)
    _same_columns({paths[str(group[0])]: header for header, group in by_header.items()})
    parts = []
    for header, group in by_header.items():
        listed = ", ".join(map(file_literal, group))
        columns = ", ".join(f"{literal(column)}: 'VARCHAR'" for column in header)
        parts.append(
            f"SELECT * FROM read_csv([{listed}], header = true, delim = ',', quote = '\"', escape = '\"', "
            f"auto_detect = false, strict_mode = true, columns = {{{columns}}})"
        )
    first = next(iter(by_header))
    return "(" + " UNION ALL BY NAME ".join(parts) + ")", dict.fromkeys(first, "VARCHAR")


def _parquet(
    connection: duckdb.DuckDBPyConnection, files: list[Path], paths: Mapping[str, str]
) -> tuple[str, dict[str, str]]:
    names: dict[str, tuple[str, ...]] = {}
    by_zones: dict[tuple[tuple[str, str], ...], list[Path]] = {}
    for path in files:
        try:
            rows = connection.execute(
                f"DESCRIBE SELECT * FROM read_parquet({file_literal(path)}, hive_partitioning = false)"
            ).fetchall()
        except duckdb.Error:
            raise DataError(
                f"{paths[str(path)]} is not a Parquet file, or is damaged or incomplete"
            ) from None
        names[paths[str(path)]] = tuple(row[0] for row in rows)
        zoned = [
            row[0] for row in rows if row[1].startswith("TIMESTAMPTZ") or row[1].endswith("WITH TIME ZONE")
        ]
        by_zones.setdefault(_zones(path, zoned), []).append(path)
    _same_columns(names)
    relation = " UNION ALL BY NAME ".join(_on_own_clock(group, zones) for zones, group in by_zones.items())
    relation = f"({relation})" if any(by_zones) else relation.removeprefix("SELECT * FROM ")
    try:
        rows = connection.execute(f"DESCRIBE SELECT * FROM {relation}").fetchall()
    except duckdb.Error:
        raise DataError(
            f"the Parquet files {', '.join(names)} hold columns of types that do not fit together"
        ) from None
    return relation, {row[0]: row[1] for row in rows}


def _zones(path: Path, columns: list[str]) -> tuple[tuple[str, str], ...]:
    """(column, zone) of the columns that hold times with a zone."""
    if not columns:
        return ()
    schema = pq.read_schema(path)
    return tuple((column, schema.field(column).type.tz or "UTC") for column in columns)


def _on_own_clock(files: list[Path], zones: tuple[tuple[str, str], ...]) -> str:
    """SELECT of Parquet files that agree in their zones; zoned times become those of their own clock."""
    listed = ", ".join(map(file_literal, files))
    changed = []
    for column, zone in zones:
        name = quoted(column)
        offset = re.fullmatch(r"([+-])(\d\d):?(\d\d)", zone)
        if offset:
            minutes = int(offset[2]) * 60 + int(offset[3])
            changed.append(f"({name} AT TIME ZONE 'UTC') {offset[1]} INTERVAL {minutes} MINUTE AS {name}")
        else:
            changed.append(f"{name} AT TIME ZONE {literal(zone)} AS {name}")
    replaced = f" REPLACE ({', '.join(changed)})" if changed else ""
    return (
        f"SELECT *{replaced} FROM read_parquet([{listed}], union_by_name = true, hive_partitioning = false)"
    )


def _same_columns(headers: Mapping[str, tuple[str, ...]]) -> None:
    """Raises DataError when two files differ in their columns (the order may differ)."""
    (first, wanted), *others = headers.items()
    for name, columns in others:
        extra, lacking = sorted(set(columns) - set(wanted)), sorted(set(wanted) - set(columns))
        if extra or lacking:
            differs = [f"lacks {', '.join(lacking)}"] * bool(lacking) + [
                f"also has {', '.join(extra)}"
            ] * bool(extra)
            raise DataError(
                f"{name} {' and '.join(differs)}, compared with {first}: all files need the same columns"
            )


def _plain(column: pd.Series[Any]) -> pd.Series[Any]:
    """A column that the database takes over without guessing: mixed objects and periods as text, dates without zone."""
    kind = column.dtype
    if (
        isinstance(kind, pd.ArrowDtype)
        and pa.types.is_timestamp(kind.pyarrow_dtype)
        and kind.pyarrow_dtype.tz
    ):
        zoned = pd.DatetimeTZDtype(
            kind.pyarrow_dtype.unit, kind.pyarrow_dtype.tz
        )  # an Arrow column would go to UTC
        return pd.Series(column.astype(zoned).dt.tz_localize(None))
    if isinstance(kind, pd.PeriodDtype | pd.CategoricalDtype):
        return column.astype("string")
    if isinstance(kind, pd.DatetimeTZDtype):
        return pd.Series(column.dt.tz_localize(None))
    if kind != np.dtype(object):
        return column
    content = pd.api.types.infer_dtype(column, skipna=True)
    if content in ("integer", "floating", "mixed-integer-float"):
        return pd.to_numeric(column)
    if content == "boolean":
        return column.astype("boolean")
    return column if content == "string" else column.map(str, na_action="ignore").astype("string")
