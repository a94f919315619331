"""The alignment sample shows what was really read."""

from __future__ import annotations

import numpy as np

from stresskit.core.period import parse_period
from stresskit.macro.features import alignment_sample, build_features
from tests.macro.world import MONTH, QUARTER, history, path, section

COLUMNS = ["model_period", "feature", "macro_period", "macro_value", "value"]


def sample(feature: dict, start: str, end: str, *, rows: int = 5, place: str = "linear"):
    macro = section({"u": {"unit": "percent", "place": place}}, {"f": {"of": "u"} | feature})
    past = history(macro, "2023Q1", u=[4.0, 4.6, 5.5, 5.2, 5.0, 4.9, 4.8, 4.7])
    table = build_features(
        macro, past, model=MONTH, start=parse_period(start, MONTH), end=parse_period(end, MONTH)
    )
    return alignment_sample(macro, past, table, model=MONTH, rows=rows)


def test_levels_between_two_quarters_worked_by_hand():
    got = sample({"lag": 1}, "2023-10", "2023-12")
    assert list(got.columns) == COLUMNS
    assert got.drop(columns="value").to_numpy().tolist() == [
        ["2023-10", "f", "2023Q2, 2023Q3", "4.6, 5.5"],
        ["2023-11", "f", "2023Q2, 2023Q3", "4.6, 5.5"],
        ["2023-12", "f", "2023Q3", "5.5"],
    ]
    np.testing.assert_allclose(got["value"], [4.6 + 0.3, 4.6 + 0.6, 5.5])


def test_a_lagged_change_lists_every_quarter_it_reads_oldest_first():
    got = sample({"transform": "difference", "over": 2, "lag": 1}, "2024-02", "2024-02")
    assert got.to_numpy()[0, :4].tolist() == [
        "2024-02",
        "f",
        "2023Q1, 2023Q2, 2023Q3, 2023Q4",
        "4, 4.6, 5.5, 5.2",
    ]
    # 1/3 of (5.5 - 4.0) and 2/3 of (5.2 - 4.6)
    np.testing.assert_allclose(got["value"], [0.5 + 0.4])


def test_step_reads_one_quarter():
    got = sample({}, "2024-01", "2024-01", place="step")
    assert got.to_numpy().tolist() == [["2024-01", "f", "2024Q1", "5", 5.0]]


def test_a_long_window_is_shortened():
    got = sample({"transform": "moving_average", "over": 7}, "2024-12", "2024-12")
    assert got.loc[0, "macro_period"] == "2023Q2, 2023Q3, 2023Q4, ... 3 more ..., 2024Q4"
    assert got.loc[0, "macro_value"] == "4.6, 5.5, 5.2, ... 3 more ..., 4.7"


def test_five_rows_first_to_last_and_not_always_the_same_month_of_the_quarter():
    got = sample({}, "2023-03", "2024-12")  # 22 usable months
    months = [parse_period(p, MONTH) for p in got["model_period"]]
    assert len(got) == 5
    assert (got.loc[0, "model_period"], got.loc[4, "model_period"]) == ("2023-03", "2024-12")
    assert months == sorted(set(months))
    # 25 months are spaced by whole quarters, and still show more than one month of the quarter
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(macro, "2020Q1", u=np.arange(1.0, 13.0))
    table = build_features(
        macro, past, model=MONTH, start=parse_period("2020-12", MONTH), end=parse_period("2022-12", MONTH)
    )
    rows = alignment_sample(macro, past, table, model=MONTH)
    assert len({parse_period(p, MONTH) % 3 for p in rows["model_period"]}) == 3


def test_every_feature_gets_its_rows_and_rows_without_value_are_not_shown():
    macro = section({"u": "percent"}, {"a": {"of": "u"}, "b": {"of": "u", "transform": "year_on_year"}})
    past = history(macro, "2023Q1", u=[4.0, 4.6, 5.5, 5.2, 5.0, 4.9])
    table = build_features(macro, past, model=QUARTER, start=past.start, end=past.end)
    got = alignment_sample(macro, past, table, model=QUARTER)
    assert got["feature"].tolist() == ["a"] * 5 + ["b"] * 2
    assert got["model_period"].tolist()[-2:] == ["2024Q1", "2024Q2"]
    assert got["macro_period"].tolist()[-2:] == ["2023Q1, 2024Q1", "2023Q2, 2024Q2"]


def test_rows_that_read_a_scenario_are_not_sampled():
    macro = section({"u": "percent"}, {"a": {"of": "u", "lag": 1}})
    past = history(macro, "2025Q3", u=[4.0, 5.0])
    start = parse_period("2025Q4", QUARTER)
    table = build_features(
        macro, past, model=QUARTER, start=start, end=start + 4, path=path("2026Q1", u=[6.0] * 4)
    )
    got = alignment_sample(macro, past, table, model=QUARTER)
    assert got["model_period"].tolist() == ["2025Q4", "2026Q1"]


def test_nothing_to_show():
    macro = section({"u": "percent"})
    past = history(macro, "2025Q3", u=[4.0, 5.0])
    table = build_features(macro, past, model=QUARTER, start=past.start, end=past.end)
    got = alignment_sample(macro, past, table, model=QUARTER)
    assert (list(got.columns), len(got)) == (COLUMNS, 0)
