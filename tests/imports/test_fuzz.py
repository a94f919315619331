"""Whatever a table or mapping holds: a result, or an error of ours with its place; never a traceback."""

from __future__ import annotations

import contextlib
import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from stresskit.core.errors import StresskitError
from stresskit.imports.api import import_table
from tests.imports.test_forms_by_hand import JOIN
from tests.imports.world import MAPPING, TABLE, put

CELLS = st.one_of(
    st.sampled_from(
        ["", "n/a", "0", "-1", "1e308", "1e-320", "5,1", "5%", "2026", "2026 Q1", "2025Q4", "9999Q4", "0000Q1", "NaN", "inf", "1" * 400,
         "2026-13", "2026-02-30", "\u0665", '"', "=1+1", "\x00", "\u2028", "Projection"]
    ),
    st.text(max_size=6),
)  # fmt: skip
KEYS = [
    "growth: per_period, amounts: percent", "growth: year_on_year, amounts: fraction, at_as_of: 0", "growth: annualised, amounts: percent",
    "splice: growth", "splice: growth, at_as_of: -1", "splice: none", "within_year: linear", "within_year: growth", "within_year: step",
    "deviation_from: stress, amounts: points", "sure: true",
]  # fmt: skip
LINES = [
    "marker: Projection", "last_row: 7", "last_row: 2", "header_row: 2", "header_row: 900", "frequency: month", "frequency: year",
    "calendar: month", "join: {file: join.csv}", "separator: semicolon", "decimal: comma", "scenario_column: Quarter", "only: {Houses: ['150']}",
]  # fmt: skip


def outcome(mapping: str, table: str) -> None:
    """Runs an import; a result must be finite and complete, an error must be ours."""
    with tempfile.TemporaryDirectory() as folder, contextlib.suppress(StresskitError):
        try:
            file = put(Path(folder), mapping, table, join=JOIN)
        except UnicodeEncodeError:
            return
        result = import_table(file)
        for path in result.paths.values():
            for values in path.values.values():
                assert values.size
                assert np.isfinite(values).all()


@pytest.mark.slow
@settings(max_examples=120, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.lists(st.tuples(st.integers(0, 9), st.integers(0, 2), CELLS), max_size=4),
    st.sampled_from(["", *LINES]),
)
def test_any_cells(changes, line):
    rows = [r.split(",") for r in TABLE.splitlines()]
    for i, j, cell in changes:
        rows[i][j] = cell
    outcome(f"{MAPPING}{line}\n", "\n".join(",".join(r) for r in rows) + "\n")


@pytest.mark.slow
@settings(max_examples=80, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(
    st.lists(st.sampled_from(KEYS), max_size=2, unique=True),
    st.lists(st.sampled_from(LINES), max_size=3, unique=True),
    st.sampled_from(["2025Q4", "2025-11", "2025-12-31", "2026Q2", "2024Q4", "1900Q1"]),
    st.booleans(),
    st.booleans(),
)
def test_any_declaration(keys, lines, as_of, annual, declared):
    mapping = MAPPING.replace("unit: index", ", ".join(["unit: index", *keys])).replace("2025Q4", as_of)
    if not declared:
        mapping = mapping.replace("history: rows_up_to_as_of\n", "")
    table = TABLE
    if annual:
        table = "Quarter,Unemployment,Houses\n2024,5,140\n2025,5,150\n2026,6,160\n2027,7,170\n"
    outcome(mapping + "\n".join(lines) + "\n", table)
