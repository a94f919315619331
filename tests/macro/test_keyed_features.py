"""Features that go by a loan column are, column by column, the features of their variables."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.core.period import parse_period
from stresskit.macro.features import alignment_sample, build_features
from stresskit.macro.read import read_history
from stresskit.macro.rules import check_calendars, growth_users, used_by
from tests.macro.world import MONTH, QUARTER, history, path, section, table

VARIABLES = {"north": "index", "south": "index", "rate": "percent"}
KEYED = {"by": "region", "of": {"south": "south", "north": "north", "isles": "north"}, "transform": "log_growth", "over": 4, "lag": 1}  # fmt: skip
START, END = parse_period("2018-01", MONTH), parse_period("2021-12", MONTH)


def _values(seed: int, n: int) -> list[float]:
    return list(100 * np.exp(np.cumsum(np.random.default_rng(seed).normal(0, 0.02, n))))


def test_each_column_is_the_feature_of_its_variable() -> None:
    rate = {"of": "rate", "transform": "difference", "over": 2}
    keyed = section(VARIABLES, {"growth": KEYED, "rate": rate})
    plain = section(
        VARIABLES,
        {"n": {**KEYED, "of": "north", "by": None}, "s": {**KEYED, "of": "south", "by": None}, "rate": rate},
    )
    past = {"north": _values(1, 20), "south": _values(2, 20), "rate": _values(3, 20)}
    ahead = {"north": _values(4, 12), "south": _values(5, 12), "rate": _values(6, 12)}
    scenario = path("2020Q1", given=5, **ahead)
    for more in ({}, {"path": scenario}):
        end = END if more else parse_period("2019-12", MONTH)
        a = build_features(keyed, history(keyed, "2015Q1", **past), model=MONTH, start=START, end=end, **more)
        b = build_features(plain, history(plain, "2015Q1", **past), model=MONTH, start=START, end=end, **more)
        assert a.names == ("growth[isles]", "growth[north]", "growth[south]", "rate")
        assert a.features == ("growth", "rate")
        assert (a.keyed["growth"].by, a.keyed["growth"].levels) == ("region", ("isles", "north", "south"))
        for column, other in zip(a.names, ("n", "n", "s", "rate"), strict=True):
            np.testing.assert_array_equal(a.column(column), b.column(other))
            np.testing.assert_array_equal(a.flags[:, a.names.index(column)], b.flags[:, b.names.index(other)])
            assert a.definitions[column] == b.definitions[other]
    assert a.definitions["growth[south]"].of == "south"


def test_the_order_of_the_levels_in_the_text_changes_nothing() -> None:
    past = {"north": _values(1, 20), "south": _values(2, 20), "rate": _values(3, 20)}
    turned = {**KEYED, "of": dict(reversed(list(KEYED["of"].items())))}  # type: ignore[attr-defined]
    a, b = (
        build_features(m, history(m, "2015Q1", **past), model=MONTH, start=START, end=START + 20)
        for m in (section(VARIABLES, {"growth": f}) for f in (KEYED, turned))
    )
    assert (a.names, a.keyed, a.definitions) == (b.names, b.keyed, b.definitions)
    np.testing.assert_array_equal(a.values, b.values)


def test_every_variable_counts_as_used() -> None:
    macro = section(VARIABLES, {"growth": KEYED})
    assert used_by(macro) == {"south": ("growth",), "north": ("growth",)}
    assert growth_users(macro, "north") == growth_users(macro, "south") == ("growth",)
    assert growth_users(macro, "rate") == ()
    bare = section({"north": {"unit": "index"}, "south": {"unit": "index"}}, {"growth": {**KEYED, "of": {"a": "north", "b": "south"}}})  # fmt: skip
    with pytest.raises(TextError, match="north, south are quarterly in a monthly study"):
        check_calendars(bare, model=MONTH, frequency=QUARTER)


def test_values_that_have_no_growth_are_named_with_the_feature(tmp_path) -> None:  # type: ignore[no-untyped-def]
    macro = section(VARIABLES, {"growth": KEYED})
    frame = table("2015Q1", QUARTER, north=[1.0, 2.0], south=[1.0, -2.0], rate=[1.0, 1.0])
    with pytest.raises(DataError, match="values of south at or below zero, of which growth takes growth"):
        read_history(macro, base=tmp_path, model=MONTH, frame=frame)


def test_the_alignment_sample_has_rows_for_each_level() -> None:
    macro = section(VARIABLES, {"growth": KEYED})
    past = history(macro, "2015Q1", north=_values(1, 20), south=_values(2, 20), rate=_values(3, 20))
    features = build_features(macro, past, model=MONTH, start=START, end=START + 20)
    sample = alignment_sample(macro, past, features, model=MONTH, rows=3)
    assert sample["feature"].value_counts().to_dict() == dict.fromkeys(features.names, 2)
    south = sample[sample["feature"] == "growth[south]"].iloc[-1]
    assert south["model_period"] == "2019-09"
    # September 2019 stands at the end of its quarter: growth over the four quarters to 2019Q2.
    assert south["macro_period"] == "2018Q2, 2019Q2"
    values = past.values["south"]
    assert south["value"] == pytest.approx(np.log(values[17] / values[13]))


def test_a_path_without_a_regions_variable_is_refused() -> None:
    macro = section(VARIABLES, {"growth": KEYED})
    past = history(macro, "2015Q1", north=_values(1, 20), south=_values(2, 20), rate=_values(3, 20))
    with pytest.raises(DataError, match=r"scenario .* has no path of 'south'; it has north"):
        build_features(
            macro, past, model=MONTH, start=END - 20, end=END, path=path("2020Q1", north=_values(4, 12))
        )
