"""The supervisor's published history, read by mapping columns, equals the file."""

from __future__ import annotations

import csv

import numpy as np
import pytest

from stresskit.core.period import parse_period
from stresskit.macro.features import build_features
from stresskit.macro.read import read_history
from tests.macro.world import MONTH, QUARTER, section, supervisory

pytestmark = pytest.mark.realdata

COLUMNS = {
    "unemployment_rate": ("percent", "Unemployment rate"),
    "house_price_index": ("index", "House Price Index (Level)"),
    "equity_index": ("index", "Dow Jones Total Stock Market Index (Level)"),
    "bbb_yield": ("percent", "BBB corporate yield"),
    "volatility": ("level", "Market Volatility Index (Level)"),
}


def macro(features: dict | None = None):
    variables = {
        v: {"unit": unit, "column": column, "place": "linear"} for v, (unit, column) in COLUMNS.items()
    }
    return section(
        variables,
        features,
        file="2025-Table_1A_Historic_Domestic.csv",
        period="Date",
        only={"Scenario Name": ["Actual"]},
    )


def test_every_value_of_the_published_history():
    folder = supervisory()
    past = read_history(macro(), base=folder, model=MONTH)
    assert past.frequency is QUARTER
    assert past.start == parse_period("1976Q1", QUARTER)
    assert past.end == parse_period("2024Q4", QUARTER)
    with (folder / "2025-Table_1A_Historic_Domestic.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == past.n_periods == 196
    for variable, (_, column) in COLUMNS.items():
        expected = [float(row[column]) if row[column] else np.nan for row in rows]
        np.testing.assert_array_equal(past.values[variable], expected)
    # blanks only at the head, as the file has them
    assert {v: int(np.isnan(past.values[v]).sum()) > 0 for v in COLUMNS} == {
        "unemployment_rate": False, "house_price_index": False, "equity_index": True, "bbb_yield": True, "volatility": True,
    }  # fmt: skip


def test_a_feature_of_the_published_history_worked_by_hand():
    """Unemployment 2024Q3 4.2 and 2024Q4 4.1, a year before 3.7 and 3.8 (read off the file)."""
    study = macro({"change": {"of": "unemployment_rate", "transform": "difference", "over": 4}})
    past = read_history(study, base=supervisory(), model=MONTH)
    october = parse_period("2024-10", MONTH)
    table = build_features(study, past, model=MONTH, start=october, end=october + 2)
    third, fourth = 4.2 - 3.7, 4.1 - 3.8
    np.testing.assert_allclose(
        table.column("change"), [(2 * third + fourth) / 3, (third + 2 * fourth) / 3, fourth], atol=1e-12
    )
