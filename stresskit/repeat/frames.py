"""Tables of two runs, row by row of the same key."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
from numpy.typing import NDArray

from stresskit.repeat.moved import FLOOR, KEPT, Moved, Tally

#: Columns that say what a row is about, where a table has them.
KEYS = (
    "scenario", "balance_sheet", "cause", "by", "segment", "loan", "name", "what", "reason", "code", "term", "feature",
    "variable", "asked", "first", "second", "span", "place", "period", "step", "year", "until", "age", "kind", "group",
    "horizon", "default_year", "specification", "decile", "treatment", "test",
)  # fmt: skip
_ONLY = ("(row)", "(nothing)")


def csv_differences(old: Path, new: Path, tally: Tally) -> None:
    """Two CSV files; cells as text where they are no numbers."""
    one, two = (
        pd.read_csv(f, dtype=str, keep_default_na=False, na_filter=False, encoding="utf-8")
        for f in (old, new)
    )
    frame_differences(one, two, tally)


def parquet_differences(old: Path, new: Path, tally: Tally) -> None:
    """Two Parquet files, row group by row group where both are cut alike, so that a long table is never held twice."""
    one, two = pq.ParquetFile(old), pq.ParquetFile(new)
    try:
        groups = [
            [f.metadata.row_group(k).num_rows for k in range(f.metadata.num_row_groups)] for f in (one, two)
        ]
        if groups[0] != groups[1]:
            frame_differences(one.read().to_pandas(), two.read().to_pandas(), tally)
            return
        for k in range(len(groups[0])):
            frame_differences(one.read_row_group(k).to_pandas(), two.read_row_group(k).to_pandas(), tally)
    finally:
        one.close()
        two.close()


def frame_differences(one: pd.DataFrame, two: pd.DataFrame, tally: Tally) -> None:
    """Two frames of one table. Columns and rows that only one has are counted as moved."""
    for name in [str(c) for c in one.columns.symmetric_difference(two.columns, sort=False)]:
        before, after = ("(column)", "(nothing)") if name in one else ("(nothing)", "(column)")
        tally.text("", name, before, after)
    keys = [k for k in KEYS if k in one and k in two]
    if "loan" in keys:
        # columns of the loan file may be called like one of ours; the loan says it all
        keys = [k for k in keys if k in ("scenario", "loan", "reason")]
    one, two = _aligned(one, two, keys, tally)
    labels = [one[k].astype(str).to_numpy() for k in keys]
    for column in (c for c in one if c in two and c not in keys):
        _column(str(column), one[column], two[column], labels, tally)


def _aligned(
    one: pd.DataFrame, two: pd.DataFrame, keys: list[str], tally: Tally
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """The rows that both have, in one order."""
    if len(one) == len(two) and all((one[k].astype(str) == two[k].astype(str)).all() for k in keys):
        return one.reset_index(drop=True), two.reset_index(drop=True)
    a, b = _index(one, keys), _index(two, keys)
    for index, other, where in ((a, b, _ONLY), (b, a, _ONLY[::-1])):
        for row in index[~index.isin(other)]:
            tally.text(" / ".join(str(v) for v in row if str(v)), "", *where)
    both = a[a.isin(b)]
    return (
        one.iloc[a.get_indexer(both)].reset_index(drop=True),
        two.iloc[b.get_indexer(both)].reset_index(drop=True),
    )


def _index(frame: pd.DataFrame, keys: list[str]) -> pd.MultiIndex:
    """What each row is about; rows of one key (all of them, without keys) are told apart by their order."""
    heads = frame[keys].astype(str)
    heads["#"] = (heads.groupby(keys).cumcount() if keys else pd.Series(range(len(frame)), frame.index)) + 1
    if keys and (heads["#"] == 1).all():
        heads["#"] = ""
    return pd.MultiIndex.from_frame(heads)


def _numbers(values: pd.Series) -> NDArray[np.float64] | None:
    """The column as numbers, blanks as NaN; None when it holds anything else."""
    if pd.api.types.is_bool_dtype(values):
        return None
    try:
        if values.dtype == object:
            # as Python reads text: to the last digit
            return np.array([np.nan if v in ("", None) else v for v in values], dtype=object).astype(
                np.float64
            )
        return pd.to_numeric(values).to_numpy(dtype=np.float64, na_value=np.nan)
    except (ValueError, TypeError):
        return None


def _column(
    name: str, old: pd.Series, new: pd.Series, labels: list[NDArray[np.object_]], tally: Tally
) -> None:
    x, y = _numbers(old), _numbers(new)
    if x is None or y is None:
        for i in np.flatnonzero((old.astype(str) != new.astype(str)).to_numpy()):
            tally.words(_label(labels, int(i)), name, str(old.iloc[i]), str(new.iloc[i]))
        return
    same = (x == y) | (np.isnan(x) & np.isnan(y))
    if same.all():
        return
    finite = np.isfinite(x) & np.isfinite(y)
    size = np.maximum(np.abs(x), np.abs(y))
    distance = np.where(finite, np.abs(y - x) / np.where(size > 0, size, 1.0), np.inf)
    distance[same] = 0.0
    differ = int((distance > 0).sum())
    if tally.rel > 0:
        scale = np.abs(x[np.isfinite(x)]).max(initial=0.0)
        distance[finite & (np.abs(np.where(finite, y - x, 0.0)) <= FLOOR * scale)] = 0.0
    beyond = np.flatnonzero(distance > tally.rel)
    first = [
        Moved(
            tally.file, _label(labels, int(i)), name, repr(float(x[i])), repr(float(y[i])), float(distance[i])
        )
        for i in beyond[:KEPT]
    ]
    tally.several(differ, beyond.size, float(distance.max()), first)


def _label(labels: list[NDArray[np.object_]], i: int) -> str:
    return " / ".join(_words(labels, i)) or f"row {i + 1}"


def _words(labels: list[NDArray[np.object_]], i: int) -> Iterator[str]:
    return (str(values[i]) for values in labels if str(values[i]))
