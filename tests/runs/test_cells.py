"""Cells of the CSV files."""

from __future__ import annotations

import json
from pathlib import Path

import pandas as pd
import pytest

from stresskit.runs.folder import neutral, plain_csv


@pytest.mark.parametrize("text", ["=1+1", "+1", "-1", "@SUM(A1)", "\t=1", "\r=1"])
def test_cells_that_a_spreadsheet_would_run(text: str, tmp_path: Path) -> None:
    assert neutral(text) == "'" + text
    plain_csv(pd.DataFrame({"segment": [text], "value": [-1.5]}), tmp_path / "t.csv")
    back = pd.read_csv(tmp_path / "t.csv")
    assert back.loc[0, "segment"] == "'" + text
    assert back.loc[0, "value"] == -1.5  # numbers stay numbers


def test_csv_keeps_every_bit(tmp_path: Path) -> None:
    value = 0.1 + 0.2
    plain_csv(pd.DataFrame({"v": [value]}), tmp_path / "t.csv")
    assert pd.read_csv(tmp_path / "t.csv", float_precision="round_trip").loc[0, "v"] == value
    assert json.loads((tmp_path / "t.csv").read_text().splitlines()[1]) == value
