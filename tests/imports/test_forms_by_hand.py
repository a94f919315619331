"""Every form in which a table can state a path, with numbers worked by hand."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.imports.forms import converted, deviated, grown, spread
from tests.imports.world import MAPPING, TABLE, imported, levels

#: The bank's own history on another base: 2025Q4 is 200, a third more than the table's 150.
JOIN = "period,u,hpi\n" + "".join(
    f"{q},{u},{h}\n"
    for q, u, h in (
        ("2024Q4", 5.4, 186.0), ("2025Q1", 5.3, 190.0), ("2025Q2", 5.2, 194.0), ("2025Q3", 5.1, 197.0), ("2025Q4", 5.0, 200.0),
    )
)  # fmt: skip


def changed(*changes: tuple[str, str], text: str = MAPPING) -> str:
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return text


def with_join(*changes: tuple[str, str]) -> str:
    return changed(*changes) + "join: {file: join.csv}\n"


def test_levels_are_the_tables_own_bits(tmp_path):
    result = imported(tmp_path)
    assert levels(result, "u") == [5.2, 5.4, 5.6, 5.5]
    assert levels(result, "hpi") == [149.0, 147.5, 146.0, 145.0]
    assert result.cautions["stress"] == ()
    assert result.history == (
        "period,u,hpi\n2024Q4,5.7,140.0\n2025Q1,5.3,143.0\n2025Q2,5.2,146.0\n2025Q3,5.1,148.0\n2025Q4,5.0,150.0\n"
    )


def test_a_fraction_becomes_percent_without_binary_dust(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026 Q1,0.053,150\n2026 Q2,0.057,150\n2026 Q3,0.29,150\n"
    result = imported(tmp_path, changed(("unit: percent", "unit: percent, table_unit: fraction")), table)
    assert levels(result, "u") == [5.3, 5.7, 29.0]  # 0.29 * 100 is 28.999999999999996 in binary
    assert 0.29 * 100 != 29.0
    assert result.paths["stress"].told["u"] == "converted from fraction to percent"
    back = imported(
        tmp_path, changed(("unit: percent", "unit: fraction, table_unit: percent")), table.replace("0.0", "")
    )
    assert levels(back, "u")[:2] == [0.53, 0.57]


@pytest.mark.parametrize(
    ("form", "amounts", "cells", "expected"),
    [
        # 200 * 1.01 = 202, * 0.98 = 197.96
        ("per_period", "percent", ["1", "-2"], [202.0, 197.96]),
        ("per_period", "fraction", ["0.01", "-0.02"], [202.0, 197.96]),
        # (1 + 0.0824321600)^(1/4) = 1.02 exactly, since 1.02^4 = 1.08243216; 0.98^4 = 0.92236816
        ("annualised", "percent", ["8.243216", "-7.763184"], [204.0, 199.92]),
        # on the same quarter a year before: 2025Q1 190, 2025Q2 194
        ("year_on_year", "percent", ["10", "-50"], [209.0, 97.0]),
    ],
)
def test_growth(form, amounts, cells, expected, tmp_path):
    table = f"Quarter,Unemployment,Houses\n2026 Q1,5,{cells[0]}\n2026 Q2,5,{cells[1]}\n"
    result = imported(
        tmp_path,
        with_join(("unit: index", f"unit: index, growth: {form}, amounts: {amounts}")),
        table,
        join=JOIN,
    )
    assert levels(result, "hpi") == pytest.approx(expected, rel=1e-14)


def test_year_on_year_growth_reads_its_own_path_after_a_year(tmp_path):
    cells = "".join(f"2026 Q{q},5,10\n" for q in range(1, 5)) + "2027 Q1,5,-10\n"
    mapping = with_join(("unit: index", "unit: index, growth: year_on_year, amounts: percent"))
    result = imported(tmp_path, mapping, "Quarter,Unemployment,Houses\n" + cells, join=JOIN)
    # 190, 194, 197, 200 up by a tenth; then 209 down by a tenth
    assert levels(result, "hpi") == pytest.approx([209.0, 213.4, 216.7, 220.0, 188.1], rel=1e-14)


def test_growth_from_a_stated_level(tmp_path):
    mapping = changed(("unit: index", "unit: index, growth: per_period, amounts: percent, at_as_of: 120"))
    table = "Quarter,Unemployment,Houses\n2026 Q1,5,5\n2026 Q2,5,-5\n"
    assert levels(imported(tmp_path, mapping, table), "hpi") == pytest.approx([126.0, 119.7], rel=1e-14)


def test_deviation_from_baseline_in_points_and_percent(tmp_path):
    table = (
        "Quarter,Unemployment,Houses,dU,dH\n"
        "2026 Q1,4.1,150,1.5,-10\n2026 Q2,4.2,152,2.7,-20\n2026 Q3,4.3,154,,\n"
    )
    mapping = """
    import: supervisor
    table: table.csv
    period: Quarter
    as_of: 2025Q4
    last_row: 3
    variables:
      u: {column: Unemployment, unit: percent}
      hpi: {column: Houses, unit: index}
    scenarios:
      baseline: {}
      stress:
        variables:
          u: {column: dU, unit: percent, deviation_from: baseline, amounts: points}
          hpi: {column: dH, unit: index, deviation_from: baseline, amounts: percent}
    """
    result = imported(tmp_path, mapping, table)
    assert levels(result, "u") == [5.6, 6.9]  # 4.1 + 1.5 is 5.6 in decimals, 5.6 in the text
    assert "values: [5.6, 6.9]" in result.texts["stress"]
    assert levels(result, "hpi") == [135.0, 121.6]
    assert levels(result, "hpi", "baseline") == [150.0, 152.0]
    assert result.paths["stress"].told["hpi"] == "baseline plus deviations in percent"


def test_a_deviation_from_a_baseline_that_is_growth_itself(tmp_path):
    table = "Quarter,g,d\n2026 Q1,1,-0.1\n2026 Q2,1,-0.2\n"
    mapping = """
    import: supervisor
    table: table.csv
    period: Quarter
    as_of: 2025Q4
    variables: {hpi: {column: g, unit: index, growth: per_period, amounts: percent}}
    scenarios:
      baseline: {}
      stress: {variables: {hpi: {column: d, unit: index, deviation_from: baseline, amounts: fraction}}}
    join: {file: join.csv}
    """
    assert levels(imported(tmp_path, mapping, table, join=JOIN), "hpi") == pytest.approx(
        [202.0 * 0.9, 204.02 * 0.8], rel=1e-14
    )


def test_a_splice_continues_history_by_the_tables_growth(tmp_path):
    """149 / 150 of 200 and so on; the first growth starts from the table's own 2025Q4."""
    result = imported(tmp_path, with_join(("unit: index", "unit: index, splice: growth")), join=JOIN)
    assert levels(result, "hpi") == pytest.approx(
        [200 * 149 / 150, 200 * 147.5 / 150, 200 * 146 / 150, 200 * 145 / 150], rel=1e-15
    )
    assert "spliced onto history by growth" in result.texts["stress"]
    assert levels(result, "u") == [5.2, 5.4, 5.6, 5.5]


def test_a_splice_from_a_stated_value_where_the_table_has_no_history(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026 Q1,5,99\n2026 Q2,5,110\n"
    mapping = with_join(("unit: index", "unit: index, splice: growth, at_as_of: 100"))
    assert levels(imported(tmp_path, mapping, table, join=JOIN), "hpi") == pytest.approx(
        [198.0, 220.0], rel=1e-15
    )


def test_annual_values_are_spread_as_declared(tmp_path):
    table = "Quarter,Unemployment,Houses,Rate\n2026,6,220,3\n2027,8,176,2\n"
    mapping = """
    import: supervisor
    table: table.csv
    period: Quarter
    as_of: 2025Q4
    variables:
      u: {column: Unemployment, unit: percent, within_year: linear}
      hpi: {column: Houses, unit: index, within_year: growth, splice: none}
      rate: {column: Rate, unit: percent, within_year: step}
    scenarios: {stress: {}}
    join: {file: join.csv}
    """
    result = imported(tmp_path, mapping, table, join=JOIN)
    # from 5.0 in 2025Q4 in quarters of one point, then in halves
    assert levels(result, "u") == pytest.approx([5.25, 5.5, 5.75, 6.0, 6.5, 7.0, 7.5, 8.0], rel=1e-15)
    assert levels(result, "rate") == [3.0] * 4 + [2.0] * 4
    up, down = 1.1**0.25, 0.8**0.25
    assert levels(result, "hpi") == pytest.approx(
        [200 * up, 200 * up**2, 200 * up**3, 220, 220 * down, 220 * down**2, 220 * down**3, 176], rel=1e-14
    )
    assert levels(result, "hpi")[3::4] == [220.0, 176.0]  # year-ends to the bit
    assert "starts: 2026Q1" in result.texts["stress"]


def test_annual_growth_on_a_monthly_calendar(tmp_path):
    table = "Quarter,g\n2026,21\n"
    mapping = """
    import: supervisor
    table: table.csv
    period: Quarter
    as_of: 2025-12
    calendar: month
    variables: {hpi: {column: g, unit: index, growth: year_on_year, amounts: percent, within_year: growth, at_as_of: 100}}
    scenarios: {stress: {}}
    """
    result = imported(tmp_path, mapping, table)
    assert levels(result, "hpi") == pytest.approx([100 * 1.21 ** (m / 12) for m in range(1, 13)], rel=1e-14)
    assert "starts: 2026-01" in result.texts["stress"]


@pytest.mark.parametrize(
    "labels",
    [
        ("2025 Q4", "2026 Q1", "2026 Q2"), ("2025Q4", "2026Q1", "2026Q2"), ("2025-12-31", "2026-03-31", "2026-06-30"),
        ("2025-12", "2026-03", "2026-06"), ("2025-10-01", "2026-01-01", "2026-04-01"),
    ],
)  # fmt: skip
def test_date_forms_of_quarters(labels, tmp_path):
    table = "Quarter,Unemployment,Houses\n" + "".join(f"{t},{5 + i / 10},150\n" for i, t in enumerate(labels))
    result = imported(tmp_path, MAPPING, table)
    assert levels(result, "u") == [5.1, 5.2]
    assert result.paths["stress"].calendar == "quarter"


def test_months_and_rows_in_any_order(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026-02,5.2,151\n2025-12,5,150\n2026-01,5.1,152\n"
    result = imported(tmp_path, changed(("as_of: 2025Q4", "as_of: 2025-12")), table)
    assert levels(result, "hpi") == [152.0, 151.0]
    assert result.paths["stress"].calendar == "month"


def test_one_dated_row_needs_a_declared_frequency(tmp_path):
    table = "Quarter,Unemployment,Houses\n2026-03-31,5.1,150\n"
    assert levels(imported(tmp_path, MAPPING + "frequency: quarter\n", table), "u") == [5.1]


def test_a_scenario_column_and_history_under_its_own_name(tmp_path):
    table = (
        "Name,Quarter,Unemployment,Houses\n"
        "Both,2025 Q3,5.1,148\nBoth,2025 Q4,5.0,150\n"
        "Mild,2026 Q1,5.2,149\nHard,2026 Q1,6.2,141\nMild,2026 Q2,5.3,148\nHard,2026 Q2,7.2,133\n"
    )
    mapping = changed(
        ("period: Quarter", "period: Quarter\nscenario_column: Name"),
        ("history: rows_up_to_as_of", "history: {name: Both}"),
        ("  stress: {}", "  mild: {name: Mild}\n  hard: {name: Hard}"),
    )
    result = imported(tmp_path, mapping, table)
    assert levels(result, "u", "mild") == [5.2, 5.3]
    assert levels(result, "u", "hard") == [6.2, 7.2]
    assert result.history == "period,u,hpi\n2025Q3,5.1,148.0\n2025Q4,5.0,150.0\n"


def test_a_marker_row_parts_history_from_projection(tmp_path):
    table = TABLE.replace("2026 Q1", "Projection\n2026 Q1", 1)
    result = imported(
        tmp_path,
        changed(
            ("period: Quarter", "period: Quarter\nmarker: Projection"), ("history: rows_up_to_as_of\n", "")
        ),
        table,
    )
    assert levels(result, "u") == [5.2, 5.4, 5.6, 5.5]
    assert result.history is not None
    assert result.history.endswith("2025Q4,5.0,150.0\n")


def test_semicolons_and_decimal_commas(tmp_path):
    table = TABLE.replace(",", ";").replace(".", ",")
    assert "2026 Q2;5,4;147,5" in table
    result = imported(tmp_path, MAPPING + "separator: semicolon\ndecimal: comma\n", table)
    assert levels(result, "u") == [5.2, 5.4, 5.6, 5.5]
    assert levels(result, "hpi") == [149.0, 147.5, 146.0, 145.0]
    assert result.texts["stress"].split("notes:")[0] == imported(tmp_path).texts["stress"].split("notes:")[0]


def test_the_arithmetic_by_itself():
    assert converted(np.array([np.nan, 5.0]), "percent", "percent")[1] == 5.0
    assert np.isnan(converted(np.array([np.nan]), "percent", "fraction")[0])
    assert grown(np.array([0.0, 0.0]), "year_on_year", np.array([1.0, 2.0, 3.0, 4.0]), 4).tolist() == [
        1.0,
        2.0,
    ]
    assert deviated(np.array([0.1]), np.array([0.2]), "points").tolist() == [0.3]
    assert spread(np.array([4.0]), "linear", 0.0, 4).tolist() == [1.0, 2.0, 3.0, 4.0]
