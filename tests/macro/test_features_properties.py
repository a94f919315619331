"""Features against a plain loop, and what must not change them: later values, and units."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.period import parse_period
from stresskit.macro.features import build_features
from tests.macro import plain
from tests.macro.world import MONTH, QUARTER, history, path, section

TRANSFORMS = ("level", "difference", "growth", "log_growth", "year_on_year", "moving_average")
SCALING = ("level", "difference", "moving_average")
START = 2015


def spec(transform: str, over: int, lag: int) -> dict:
    return {"of": "x", "transform": transform, "lag": lag} | (
        {} if transform in ("level", "year_on_year") else {"over": over}
    )


values = st.lists(st.floats(0.5, 500.0), min_size=6, max_size=20)
features = st.builds(spec, st.sampled_from(TRANSFORMS), st.integers(1, 5), st.integers(0, 4))


def keys(n: int, per_year: int) -> list[tuple[int, int]]:
    return [(START + i // per_year, i % per_year + 1) for i in range(n)]


def agree(got: np.ndarray, expected: list[float | None]) -> None:
    assert [bool(np.isnan(v)) for v in got] == [v is None for v in expected]
    np.testing.assert_allclose(got, [math.nan if v is None else v for v in expected], rtol=1e-9, atol=1e-9)


@settings(max_examples=120, deadline=None)
@given(values=values, blank=st.integers(0, 4), feature=features, place=st.sampled_from(["linear", "step"]))
def test_quarters_on_months_agree_with_a_plain_loop(values, blank, feature, place):
    x = [math.nan] * blank + values
    macro = section({"x": {"unit": "index", "place": place}}, {"f": feature})
    past = history(macro, f"{START}Q1", x=x)
    data = dict(zip(keys(len(x), 4), x))
    n_months = 3 * (len(x) + feature["lag"])
    start = parse_period(f"{START}-01", MONTH)
    table = build_features(macro, past, model=MONTH, start=start, end=start + n_months - 1)
    agree(
        table.column("f"),
        [
            plain.month_feature(
                data,
                month,
                feature["transform"],
                feature.get("over", 1),
                feature["lag"],
                quarterly=True,
                linear=place == "linear",
            )
            for month in keys(n_months, 12)
        ],
    )


@settings(max_examples=60, deadline=None)
@given(
    values=st.lists(st.floats(0.5, 500.0), min_size=14, max_size=30),
    split=st.integers(1, 13),
    feature=features,
)
def test_months_with_a_path_agree_with_a_plain_loop(values, split, feature):
    macro = section({"x": "index"}, {"f": feature})
    past = history(macro, f"{START}-01", MONTH, x=values[:split])
    stress = path(f"{START + split // 12}-{split % 12 + 1:02d}", MONTH, x=values[split:])
    back = feature["lag"] + (12 if feature["transform"] == "year_on_year" else feature.get("over", 1))
    start, end = past.start + min(back, split), past.start + len(values) - 1
    if back > split:
        return  # such a path is refused; tests by hand cover it
    table = build_features(macro, past, model=MONTH, start=start, end=end, path=stress)
    data = dict(zip(keys(len(values), 12), values))
    expected = [
        plain.month_feature(
            data,
            month,
            feature["transform"],
            feature.get("over", 1),
            feature["lag"],
            quarterly=False,
            linear=False,
        )
        for month in keys(len(values), 12)
    ]
    agree(table.column("f"), expected[start - past.start :])


@settings(max_examples=120, deadline=None)
@given(values=values, feature=features, place=st.sampled_from(["linear", "step"]), data=st.data())
def test_a_later_value_changes_nothing_earlier(values, feature, place, data):
    """A quarter's value is seen from its own first month on at lag 0, and ``lag`` quarters later at lag >= 1."""
    row = data.draw(st.integers(1, len(values) - 1))
    other = list(values)
    other[row] = values[row] * 3.0
    macro = section({"x": {"unit": "index", "place": place}}, {"f": feature})
    start = parse_period(f"{START}-01", MONTH)
    one, two = (
        build_features(
            macro,
            history(macro, f"{START}Q1", x=x),
            model=MONTH,
            start=start,
            end=start + 3 * len(values) - 1,
        ).column("f")
        for x in (values, other)
    )
    seen = 3 * (row + feature["lag"])
    assert one[:seen].tobytes() == two[:seen].tobytes()
    if feature["lag"]:
        assert one[: 3 * row + 3].tobytes() == two[: 3 * row + 3].tobytes()
    # the test can fail: the change does reach the feature as soon as it may
    at_quarter_end = seen + 2
    if at_quarter_end < one.size and not np.isnan(one[at_quarter_end]):
        assert one[at_quarter_end] != two[at_quarter_end]


@settings(max_examples=80, deadline=None)
@given(values=values, feature=features, place=st.sampled_from(["linear", "step"]))
def test_another_unit_scales_levels_and_leaves_growth_alone(values, feature, place):
    macro = section({"x": {"unit": "level", "place": place}}, {"f": feature})
    start = parse_period(f"{START}-01", MONTH)

    def feature_of(x: list[float]) -> np.ndarray:
        past = history(macro, f"{START}Q1", x=x)
        return build_features(macro, past, model=MONTH, start=start, end=start + 3 * len(x) - 1).column("f")

    plain_unit, eighths, hundredths = (
        feature_of(values),
        feature_of([v * 8 for v in values]),
        feature_of([v / 100 for v in values]),
    )
    factor = 1.0 if feature["transform"] not in SCALING else 8.0
    # a power of two leaves every rounding alone: the same bits
    assert (plain_unit * factor).tobytes() == eighths.tobytes()
    factor = 1.0 if feature["transform"] not in SCALING else 0.01
    np.testing.assert_allclose(hundredths, plain_unit * factor, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("feature", [spec(t, 3, 1) for t in TRANSFORMS], ids=TRANSFORMS)
def test_a_window_of_the_table_is_the_table(feature):
    """Where a caller starts and ends does not matter for the values in between."""
    rng = np.random.default_rng(7)
    macro = section({"x": "index"}, {"f": feature})
    past = history(macro, "2015Q1", x=100 * np.exp(rng.normal(0, 0.02, 24).cumsum()))
    start = parse_period("2015-01", MONTH)
    whole = build_features(macro, past, model=MONTH, start=start, end=start + 71).column("f")
    part = build_features(macro, past, model=MONTH, start=start + 20, end=start + 40).column("f")
    assert whole[20:41].tobytes() == part.tobytes()


def test_equal_calendars_do_not_interpolate():
    macro = section({"x": {"unit": "percent", "place": "linear"}}, {"f": {"of": "x"}})
    past = history(macro, "2015Q1", QUARTER, x=[1.0, 7.0, 2.0])
    table = build_features(macro, past, model=QUARTER, start=past.start, end=past.end)
    assert table.column("f").tolist() == [1.0, 7.0, 2.0]
