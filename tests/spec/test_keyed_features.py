"""Features that go by a loan column: what the text may say, and the exact words where it may not."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.spec.load import load_study
from tests.spec.texts import changed, said

HARBOUR = "harbour_study.yaml"
PLAIN = "of: house_price_index"
SOUTH = (
    "    house_price_index: {unit: index, place: linear}\n",
    "    house_price_index: {unit: index, place: linear}\n    house_price_south: {unit: index, place: linear}\n",
)
KEYED = (PLAIN, "by: region, of: {south: house_price_south, north: house_price_index}")
AT = "macro.features.house_price_growth"
A_MAPPING = "expected text of 1 to 120 characters or a mapping of at least 1 text"
VARIABLES = "(macro.variables: house_price_index, unemployment_rate)"

CASES: dict[str, tuple[tuple[tuple[str, str], ...], str]] = {
    "unknown variable of a level": (
        ((PLAIN, "by: region, of: {north: house_price_index, south: house_price_idnex}"),),
        f"17:70: {AT}.of.south: no macro variable 'house_price_idnex'; did you mean 'house_price_index'? {VARIABLES}",
    ),
    "unknown variable of all loans": (
        ((PLAIN, "of: house_price_idnex"),),
        f"17:27: {AT}.of: no macro variable 'house_price_idnex'; did you mean 'house_price_index'? {VARIABLES}",
    ),
    "another unit": (
        ((PLAIN, "by: region, of: {north: house_price_index, south: unemployment_rate}"),),
        f"17:70: {AT}.of.south: 'unemployment_rate' has unit: percent and 'house_price_index' has unit: index; the variables of "
        "one feature share one coefficient, so they need one unit",
    ),
    "another placement": (
        ((SOUTH[0], SOUTH[1].replace("south: {unit: index, place: linear", "south: {unit: index, place: step")), KEYED),
        f"18:70: {AT}.of.north: 'house_price_index' has place: linear and 'house_price_south' has place: step; the variables of "
        "one feature share one coefficient, so they need one place",
    ),
    "levels without a column": (
        ((PLAIN, "of: {north: house_price_index}"),),
        f"17:27: {AT}.of: of maps levels to variables, so the feature needs by: the loan column whose levels these are",
    ),
    "a column without levels": (
        ((PLAIN, "by: region, of: house_price_index"),),
        f"17:27: {AT}.by: by needs of as a mapping of the column's levels to variables",
    ),
    "no levels": (((PLAIN, "by: region, of: {}"),), f"17:43: {AT}.of: {A_MAPPING}; got an empty mapping"),
    "a list of variables": (
        ((PLAIN, "by: region, of: [house_price_index]"),),
        f"17:43: {AT}.of: {A_MAPPING}; got a list of 1 item",
    ),
    "a number for a variable": (
        ((PLAIN, "by: region, of: {north: 5}"),),
        f"17:51: {AT}.of.north: expected text of 1 to 120 characters, got the number 5: put it in quotes, '5'",
    ),
    "a level twice": (
        ((PLAIN, "by: region, of: {north: house_price_index, north: house_price_index}"),),
        f"17:70: {AT}.of.north: duplicate key, given first at line 17, column 44",
    ),
    "a column that changes over time": (
        ((PLAIN, "by: region, of: {north: house_price_index}"), ("  segments: [product, region]", "  varying: [region]\n  segments: [product]")),
        f"18:27: {AT}.by: 'region' changes over time (loans.varying), and a feature goes by a column that stays the same over a "
        "loan's life",
    ),
    "a column given as known before": (
        ((PLAIN, "by: region, of: {north: house_price_index}"), ("  segments: [product, region]", "  lagged: [region]\n  segments: [product]")),
        f"18:27: {AT}.by: 'region' changes over time (loans.lagged), and a feature goes by a column that stays the same over a "
        "loan's life",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_exact_words_and_place(name: str, tmp_path: Path) -> None:
    changes, words = CASES[name]
    assert said(tmp_path / HARBOUR, changed(HARBOUR, *changes), load_study) == f"file:{words}"


def test_a_feature_by_region_is_read(tmp_path: Path) -> None:
    text = changed(HARBOUR, SOUTH, KEYED, ("{macro: unemployment_change, ", "{macro: house_price_growth, "), ("product, unemployment_change]", "product, house_price_growth]"))  # fmt: skip
    (tmp_path / HARBOUR).write_text(text, encoding="utf-8")
    study = load_study(tmp_path / HARBOUR).model
    assert study.macro is not None
    feature = study.macro.features["house_price_growth"]
    assert feature.variables == ("house_price_south", "house_price_index")
    columns = study.macro.columns()
    assert list(columns) == ["unemployment_change", "house_price_growth[north]", "house_price_growth[south]"]
    north = columns["house_price_growth[north]"]
    assert (north.variable, north.transform, north.over, north.lag) == (
        "house_price_index",
        "log_growth",
        4,
        1,
    )
    assert study.macro.keys() == {"house_price_growth": "region"}
    assert study.hazards["default"].macro_features() == ("house_price_growth",)
    with pytest.raises(ValueError, match="a feature by region has a variable for each level"):
        _ = feature.variable


def test_levels_may_look_like_numbers(tmp_path: Path) -> None:
    text = changed(HARBOUR, SOUTH, (PLAIN, "by: region, of: {1: house_price_index, 2: house_price_south}"))
    (tmp_path / HARBOUR).write_text(text, encoding="utf-8")
    study = load_study(tmp_path / HARBOUR).model
    assert study.macro is not None
    assert list(study.macro.columns())[1:] == ["house_price_growth[1]", "house_price_growth[2]"]
