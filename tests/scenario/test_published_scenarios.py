"""The supervisor's published scenarios, read by a mapping, equal the files; joined to its history they make features."""

from __future__ import annotations

import csv

import numpy as np
import pytest

from stresskit.core.period import parse_period
from stresskit.macro.features import build_features
from stresskit.macro.read import read_history
from stresskit.scenario.resolve import resolve
from stresskit.spec.load import load_scenario
from tests.macro.world import MONTH, QUARTER, section, supervisory
from tests.scenario.world import write

pytestmark = pytest.mark.realdata

TABLES = {
    "baseline": ("2025-Table_2A_Supervisory_Baseline_Domestic.csv", "Supervisory Baseline"),
    "severely_adverse": (
        "2025-Table_3A_Supervisory_Severely_Adverse_Domestic.csv",
        "Supervisory Severely Adverse",
    ),
}
COLUMNS = {
    "unemployment_rate": "Unemployment rate",
    "house_price_index": "House Price Index (Level)",
    "bbb_yield": "BBB corporate yield",
}


def mapping(folder, name: str) -> str:
    table, wanted = TABLES[name]
    columns = "".join(f"  {variable}: {column}\n" for variable, column in COLUMNS.items())
    bonds = "hold" if name == "baseline" else "baseline"
    return (
        f"scenario: {name}\ntable: {folder / table}\nperiod: Date\nonly: {{Scenario Name: [{wanted}]}}\n"
        f"variables:\n{columns}afterwards:\n  unemployment_rate: {{revert_to: long_run_mean, over: 8}}\n  bbb_yield: {bonds}\n"
    )


@pytest.fixture(scope="module")
def study():
    folder = supervisory()
    macro = section(
        {
            v: {"unit": "index" if "index" in v else "percent", "column": column, "place": "linear"}
            for v, column in COLUMNS.items()
        },
        {
            "unemployment_change": {"of": "unemployment_rate", "transform": "difference", "over": 4},
            "house_price_growth": {"of": "house_price_index", "transform": "year_on_year", "lag": 1},
        },
        file="2025-Table_1A_Historic_Domestic.csv",
        period="Date",
    )
    return folder, macro, read_history(macro, base=folder, model=MONTH)


@pytest.fixture(scope="module")
def paths(study, tmp_path_factory):
    folder, macro, past = study
    home = tmp_path_factory.mktemp("mappings")
    loaded = [load_scenario(write(home, name, mapping(folder, name))) for name in TABLES]
    return {
        p.name: p
        for p in resolve(loaded, macro, past, as_of=parse_period("2024-12", MONTH), model=MONTH, horizon=60)
    }


@pytest.mark.parametrize("name", TABLES)
def test_every_value_of_the_published_scenario(name, study, paths):
    folder, _, _ = study
    path = paths[name]
    with (folder / TABLES[name][0]).open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [r["Date"] for r in (rows[0], rows[-1])] == ["2025 Q1", "2028 Q1"]
    assert len(rows) == 13
    assert path.start == parse_period("2025Q1", QUARTER)
    assert path.horizon == 20
    for variable, column in COLUMNS.items():
        assert path.values[variable][:13].tolist() == [float(row[column]) for row in rows]
        assert path.flags[variable].tolist() == [0] * 13 + [2] * 7


def test_afterwards_continues_the_published_path(study, paths):
    _, _, past = study
    mean = past.values["unemployment_rate"].mean()
    # severely adverse ends at 7.5 in 2028Q1; a quarter of the way is made two quarters later
    assert paths["severely_adverse"].values["unemployment_rate"][14] == pytest.approx(7.5 + (mean - 7.5) / 4)
    assert (
        paths["severely_adverse"].values["bbb_yield"][13] == paths["baseline"].values["bbb_yield"][13] == 5.9
    )


def test_features_at_the_join_worked_by_hand(study, paths):
    """Unemployment of 2024Q1..Q4: 3.8, 4.0, 4.2, 4.1; severely adverse 2025Q1 5.6, 2025Q2 6.8 (read off the files)."""
    _, macro, past = study
    start = parse_period("2025-03", MONTH)
    table = build_features(
        macro, past, model=MONTH, start=start, end=start + 3, path=paths["severely_adverse"]
    )
    march, june = 5.6 - 3.8, 6.8 - 4.0
    expected = [march, (2 * march + june) / 3, (march + 2 * june) / 3, june]
    np.testing.assert_allclose(table.column("unemployment_change"), expected, atol=1e-12)
    # house prices, lag 1: March reads 2024Q4 / 2023Q4, June 2025Q1 / 2024Q1
    prices = past.values["house_price_index"]
    assert table.column("house_price_growth")[0] == pytest.approx(prices[-1] / prices[-5] - 1, rel=1e-14)
    assert table.column("house_price_growth")[3] == pytest.approx(275.1 / prices[-4] - 1, rel=1e-14)
