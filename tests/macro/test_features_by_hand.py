"""Transforms, lags and placement against numbers worked out by hand."""

from __future__ import annotations

import math

import numpy as np
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import parse_period
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, ScenarioPath
from stresskit.macro.features import build_features
from tests.macro.world import MONTH, QUARTER, history, path, section

INDEX = [100.0, 102.0, 101.0, 105.0, 110.0, 108.0, 112.0, 120.0]  # 2023Q1 .. 2024Q4
NAN = math.nan


def quarterly(feature: dict, values=INDEX, unit: str = "index"):
    macro = section({"x": unit}, {"f": {"of": "x"} | feature})
    past = history(macro, "2023Q1", x=values)
    table = build_features(macro, past, model=QUARTER, start=past.start, end=past.end)
    assert table.names == ("f",)
    assert not table.flags.any()
    return table.column("f")


@pytest.mark.parametrize(
    ("feature", "expected"),
    [
        ({"transform": "level"}, INDEX),
        ({"transform": "level", "lag": 2}, [NAN, NAN, 100, 102, 101, 105, 110, 108]),
        ({"transform": "difference"}, [NAN, 2, -1, 4, 5, -2, 4, 8]),
        ({"transform": "difference", "over": 2}, [NAN, NAN, 1, 3, 9, 3, 2, 12]),
        ({"transform": "difference", "over": 2, "lag": 1}, [NAN, NAN, NAN, 1, 3, 9, 3, 2]),
        ({"transform": "growth", "over": 3}, [NAN, NAN, NAN, 5 / 100, 8 / 102, 7 / 101, 7 / 105, 10 / 110]),
        ({"transform": "year_on_year"}, [NAN, NAN, NAN, NAN, 10 / 100, 6 / 102, 11 / 101, 15 / 105]),
        (
            {"transform": "year_on_year", "over": 4},
            [NAN, NAN, NAN, NAN, 10 / 100, 6 / 102, 11 / 101, 15 / 105],
        ),
        # natural logarithms of 1.02, 101/102, 105/101, ... to ten digits
        (
            {"transform": "log_growth"},
            [
                NAN,
                0.0198026273,
                -0.0098522964,
                0.0388398333,
                0.0465200156,
                -0.0183491387,
                0.0363676442,
                0.0689928715,
            ],
        ),
        (
            {"transform": "moving_average", "over": 3},
            [NAN, NAN, 101, 308 / 3, 316 / 3, 323 / 3, 110, 340 / 3],
        ),
        ({"transform": "moving_average", "over": 4}, [NAN, NAN, NAN, 102, 104.5, 106, 108.75, 112.5]),
        ({"transform": "moving_average", "over": 1}, INDEX),
    ],
)
def test_transforms(feature, expected):
    np.testing.assert_allclose(quarterly(feature), expected, rtol=0, atol=5e-11)


def test_a_variable_that_starts_late_is_blank_only_at_its_head():
    got = quarterly(
        {"transform": "difference", "lag": 1}, [NAN, NAN, 3.0, 4.0, 6.0, 5.0, 5.5, 7.0], unit="percent"
    )
    np.testing.assert_array_equal(got, [NAN, NAN, NAN, NAN, 1.0, 2.0, -1.0, 0.5])


def test_a_span_longer_than_history_gives_no_values():
    assert np.isnan(quarterly({"transform": "difference", "over": 8})).all()
    assert np.isnan(quarterly({"transform": "moving_average", "over": 30})).all()


def test_year_on_year_spans_twelve_rows_of_a_monthly_table():
    values = [100.0 + i for i in range(14)]
    macro = section({"x": "index"}, {"f": {"of": "x", "transform": "year_on_year"}})
    past = history(macro, "2024-01", MONTH, x=values)
    table = build_features(macro, past, model=MONTH, start=past.start, end=past.end)
    np.testing.assert_allclose(table.column("f"), [NAN] * 12 + [112 / 100 - 1, 113 / 101 - 1], atol=1e-15)


# --- quarters on months. Unemployment stands at 4.0 at the end of 2023Q4, 4.6 of 2024Q1, 5.5 of 2024Q2.
#     Straight lines between the quarters' last months: January 4.0 + 1/3 of 0.6, February + 2/3, March
#     4.6; April 4.6 + 1/3 of 0.9, May + 2/3, June 5.5.
QUARTERS = [4.0, 4.6, 5.5]
LINEAR = {"2024-01": 4.2, "2024-02": 4.4, "2024-03": 4.6, "2024-04": 4.9, "2024-05": 5.2, "2024-06": 5.5}
STEP = {"2024-01": 4.6, "2024-02": 4.6, "2024-03": 4.6, "2024-04": 5.5, "2024-05": 5.5, "2024-06": 5.5}


@pytest.mark.parametrize(("place", "expected"), [("linear", LINEAR), ("step", STEP)])
@pytest.mark.parametrize("lag", [0, 1, 2])
def test_quarters_on_months(place, expected, lag):
    macro = section({"u": {"unit": "percent", "place": place}}, {"f": {"of": "u", "lag": lag}})
    past = history(macro, "2023Q4", u=QUARTERS)
    start = parse_period("2024-01", MONTH) + 3 * lag
    table = build_features(macro, past, model=MONTH, start=start, end=start + 5)
    np.testing.assert_allclose(table.column("f"), list(expected.values()), rtol=1e-15)


def test_months_before_the_first_quarter_end_have_no_value_and_the_quarter_end_has():
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(macro, "2023Q4", u=QUARTERS)
    table = build_features(
        macro, past, model=MONTH, start=parse_period("2023-08", MONTH), end=parse_period("2024-01", MONTH)
    )
    np.testing.assert_allclose(table.column("f"), [NAN, NAN, NAN, NAN, 4.0, 4.2])


def test_a_quarterly_change_is_transformed_before_it_is_placed():
    # changes: 2024Q1 0.6, 2024Q2 0.9; April = 0.6 + 1/3 of 0.3 -- not the change since March of a placed level
    macro = section({"u": "percent"}, {"f": {"of": "u", "transform": "difference"}})
    past = history(macro, "2023Q4", u=QUARTERS)
    april = parse_period("2024-04", MONTH)
    table = build_features(macro, past, model=MONTH, start=april, end=april + 2)
    np.testing.assert_allclose(table.column("f"), [0.7, 0.8, 0.9])


# --- history joined to a path


def test_lags_on_a_path_reach_back_into_history_and_flags_follow_the_values_used():
    macro = section(
        {"u": "percent"},
        {"now": {"of": "u"}, "change": {"of": "u", "transform": "difference", "over": 2, "lag": 1}},
    )
    past = history(macro, "2025Q1", u=[4.0, 4.2, 4.5, 5.0])
    stress = path("2026Q1", given=2, u=[6.0, 7.0, 6.5, 6.0])
    first = parse_period("2026Q1", QUARTER)
    table = build_features(macro, past, model=QUARTER, start=first, end=first + 3, path=stress)
    np.testing.assert_allclose(table.column("now"), [6.0, 7.0, 6.5, 6.0])
    # lag 1 over 2: 5.0 - 4.2, 6.0 - 4.5, 7.0 - 5.0, 6.5 - 6.0
    np.testing.assert_allclose(table.column("change"), [0.8, 1.5, 2.0, 0.5])
    assert table.flags[:, 0].tolist() == [0, 0, 2, 2]
    assert table.flags[:, 1].tolist() == [0, 0, 0, 2]


def test_a_moving_average_carries_the_worst_flag_of_its_window():
    macro = section({"u": "percent"}, {"f": {"of": "u", "transform": "moving_average", "over": 3}})
    past = history(macro, "2025Q3", u=[4.0, 5.0])
    stress = path("2026Q1", given=1, u=[6.0, 7.0, 7.0])
    first = parse_period("2026Q1", QUARTER)
    table = build_features(macro, past, model=QUARTER, start=first, end=first + 2, path=stress)
    np.testing.assert_allclose(table.column("f"), [5.0, 6.0, 20 / 3])
    assert table.flags[:, 0].tolist() == [0, 2, 2]


def test_a_month_between_two_quarters_carries_the_worse_flag_and_a_quarter_end_its_own():
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    past = history(macro, "2025Q4", u=[5.0])
    stress = path("2026Q1", given=1, u=[6.2, 6.8])
    january = parse_period("2026-01", MONTH)
    table = build_features(macro, past, model=MONTH, start=january, end=january + 5, path=stress)
    np.testing.assert_allclose(table.column("f"), [5.4, 5.8, 6.2, 6.4, 6.6, 6.8])
    assert table.flags[:, 0].tolist() == [0, 0, 0, 2, 2, 2]


def test_the_worse_flag_counts_also_when_the_earlier_quarter_carries_it():
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    flags = np.array([FILLED, GIVEN, FILLED, AFTERWARDS])
    first = parse_period("2026Q1", QUARTER)
    mixed = ScenarioPath("stress", None, QUARTER, first, {"u": np.array([6.0, 6.3, 6.6, 6.9])}, {"u": flags})
    january = parse_period("2026-01", MONTH)
    past = history(macro, "2025Q4", u=[5.0])
    table = build_features(macro, past, model=MONTH, start=january, end=january + 11, path=mixed)
    assert table.flags[:, 0].tolist() == [1, 1, 1, 1, 1, 0, 1, 1, 1, 2, 2, 2]


def test_history_beyond_the_start_of_the_path_is_not_seen():
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    short, long = (
        history(macro, "2025Q3", u=[4.0, 5.0]),
        history(macro, "2025Q3", u=[4.0, 5.0, 99.0, 99.0, 99.0]),
    )
    stress = path("2026Q1", u=[6.2, 6.8])
    start, end = parse_period("2025-10", MONTH), parse_period("2026-06", MONTH)
    one, two = (
        build_features(macro, past, model=MONTH, start=start, end=end, path=stress) for past in (short, long)
    )
    assert one.values.tobytes() == two.values.tobytes()
    assert np.isfinite(one.values).all()


def test_no_features_and_no_periods():
    macro = section({"u": "percent"})
    past = history(macro, "2025Q3", u=[4.0, 5.0])
    assert build_features(macro, past, model=MONTH, start=10, end=14).values.shape == (5, 0)
    macro = section({"u": "percent"}, {"f": {"of": "u"}})
    empty = build_features(macro, past, model=MONTH, start=10, end=9)
    assert (empty.values.shape, empty.names) == ((0, 1), ("f",))


# --- what is refused


def refused(
    feature: dict, values, error=DataError, *, start="2025Q1", end="2025Q4", unit="percent", stress=None
) -> str:
    macro = section({"u": unit}, {"f": {"of": "u"} | feature})
    past = history(macro, "2025Q1", u=values)
    with pytest.raises(error) as caught:
        build_features(
            macro,
            past,
            model=QUARTER,
            start=parse_period(start, QUARTER),
            end=parse_period(end, QUARTER),
            path=stress,
        )
    return str(caught.value)


def test_periods_beyond_history_are_refused_not_filled():
    assert refused({"lag": 1}, [4.0, 4.0, 4.0, 5.0], end="2026Q2") == (
        "macro history ends in 2025Q4, but feature 'f' (lag 1) needs 'u' up to 2026Q1; "
        "supply later values, or use a longer lag"
    )


def test_a_path_that_ends_early_is_refused():
    assert refused({}, [4.0, 4.0, 4.0, 5.0], end="2026Q3", stress=path("2026Q1", u=[5.0])) == (
        "scenario 'stress' ends in 2026Q1, but feature 'f' (lag 0) needs 'u' up to 2026Q3; "
        "supply later values, or use a longer lag"
    )


@pytest.mark.parametrize("start", ["2026Q2", "2025Q1", "2024Q1"])
def test_a_path_that_does_not_join_history_is_refused(start):
    assert refused({}, [4.0, 4.0, 4.0, 5.0], stress=path(start, u=[5.0])) == (
        f"scenario 'stress' starts in {start}, macro history runs from 2025Q1 to 2025Q4: "
        "the period before the scenario's first must be in history"
    )


def test_a_path_on_another_calendar_is_refused():
    assert refused({}, [4.0] * 4, stress=path("2026-01", MONTH, u=[5.0])) == (
        "scenario 'stress' is on a month calendar, macro history on a quarter calendar"
    )


def test_a_path_without_the_variable_is_refused():
    assert (
        refused({}, [4.0] * 4, stress=path("2026Q1", v=[5.0]))
        == "scenario 'stress' has no path of 'u'; it has v"
    )


def test_a_history_without_the_variable_is_refused():
    macro = section({"u": "percent", "w": "percent"}, {"f": {"of": "w"}})
    past = history(macro, "2025Q1", u=[4.0])
    with pytest.raises(DataError, match="macro history has no variable 'w'; it has u"):
        build_features(macro, past, model=QUARTER, start=past.start, end=past.end)


def test_a_path_whose_lags_history_does_not_cover_is_refused():
    stress = path("2026Q1", u=[5.0, 5.0])
    assert refused({"lag": 5}, [4.0, 4.0, 4.0, 5.0], start="2026Q1", end="2026Q2", stress=stress) == (
        "feature 'f' has no value in 1 periods of scenario 'stress' (first 2026Q1): macro history begins too late "
        "for its lag and span; supply earlier values"
    )


@pytest.mark.parametrize("transform", ["growth", "log_growth", "year_on_year"])
@pytest.mark.parametrize("unit", ["index", "level", "percent"])
def test_growth_of_values_at_or_below_zero_is_refused(transform, unit):
    assert refused({"transform": transform}, [4.0, 0.0, -1.5, 5.0], unit=unit) == (
        "macro feature 'f' takes growth of 'u', which is at or below zero in 2 periods "
        "(first 2025Q2: 0, 2025Q3: -1.5); use transform: difference"
    )


def test_a_result_beyond_floating_point_is_refused():
    assert refused({"transform": "difference"}, [1.0, -1.7e308, 1.7e308, 1.0]) == (
        "macro feature 'f' of 'u' is too large to compute in 2025Q3"
    )


def test_a_span_that_a_transform_does_not_use_is_refused():
    assert refused({"over": 4}, [4.0] * 4, TextError) == (
        "macro.features.f: transform level takes one value and has no use for over: 4; leave over out, or choose "
        "difference, growth, log_growth or moving_average"
    )
    assert refused({"transform": "year_on_year", "over": 2}, [4.0] * 4, TextError) == (
        "macro.features.f: year_on_year spans one year, 4 periods of this table, not over: 2; leave over out, or choose growth"
    )
