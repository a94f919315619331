"""A p-value that the fit withholds says so in the report."""

from __future__ import annotations

import dataclasses

import numpy as np

from stresskit.report.evidence import coefficient_table
from tests.report.report_samples import sample


def test_a_withheld_p_value_and_interval_are_called_withheld() -> None:
    result = sample()
    frame = result.coefficients.copy()
    macro = (frame["cause"] == "default") & (frame["term"] == "unemployment_change")
    assert macro.sum() == 1
    frame.loc[macro, ["p_value", "lower", "upper"]] = np.nan
    table = coefficient_table(dataclasses.replace(result, coefficients=frame), "default")
    heads = [c.label for c in table.columns]
    cells = {str(r[0].text): [c.text for c in r] for r in table.rows}
    p, interval = heads.index("p"), heads.index("Interval (95%)")
    assert (cells["unemployment_change"][p], cells["unemployment_change"][interval]) == (
        "withheld",
        "withheld",
    )
    assert "withheld" not in cells["house_price_growth"]


def test_the_column_of_statistics_is_called_by_their_distribution() -> None:
    result = sample()
    for kind, letter in (("period", "t"), ("two_way", "t"), ("loan", "z"), ("model_expected", "z")):
        frame = result.coefficients.assign(se_kind=kind)
        table = coefficient_table(dataclasses.replace(result, coefficients=frame), "default")
        assert table.columns[4].label == letter
