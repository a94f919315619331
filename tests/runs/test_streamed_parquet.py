"""Tables written row group by row group come back whole, whatever a group holds."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest

from stresskit.runs import folder
from stresskit.runs.folder import streamed_parquet


@pytest.mark.parametrize("rows", [0, 1, 7, 8, 23])
def test_round_trip(rows: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(folder, "ROW_GROUP", 8)
    frame = pd.DataFrame(
        {
            "scenario": np.array(["base"] * rows, dtype=object), "age": np.arange(rows),
            "lgd": np.where(np.arange(rows) < 9, np.nan, 0.5),
            "late text": np.array([None if i < 12 else f"t{i}" for i in range(rows)], dtype=object),
        }
    )  # fmt: skip
    streamed_parquet(frame, tmp_path / "a.parquet")
    back = pd.read_parquet(tmp_path / "a.parquet")
    assert list(back.columns) == list(frame.columns)
    assert len(back) == rows
    if rows:
        pd.testing.assert_frame_equal(back, frame)
    assert pq.ParquetFile(tmp_path / "a.parquet").num_row_groups == max(1, -(-rows // 8))
