"""macro.var and missing: conditional as text: what is read, and what a mistake in them says, with its place."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.spec.load import load_scenario, load_study
from tests.spec.texts import changed, said

HERE = "hazards:\n"
VAR = """\
  var:
    variables: {unemployment_rate: difference, house_price_index: log_difference}
    lags: aic
    max_lags: 6
    from: 1990Q1
    floors: {unemployment_rate: 0}
    band: 0.8
hazards:
"""


def with_var(text: str) -> str:
    return changed("harbour_study.yaml", (HERE, text))


def test_everything_is_read(tmp_path: Path) -> None:
    (tmp_path / "study.yaml").write_text(with_var(VAR), encoding="utf-8")
    macro = load_study(tmp_path / "study.yaml").model.macro
    assert macro is not None
    assert macro.var is not None
    assert macro.var.model_dump(by_alias=True) == {
        "variables": {"unemployment_rate": "difference", "house_price_index": "log_difference"},
        "lags": "aic", "max_lags": 6, "from": "1990Q1", "floors": {"unemployment_rate": 0.0}, "band": 0.8,
    }  # fmt: skip


def test_what_is_left_out_has_stated_defaults(tmp_path: Path) -> None:
    text = "  var: {variables: {unemployment_rate: level, house_price_index: difference}}\nhazards:\n"
    (tmp_path / "study.yaml").write_text(with_var(text), encoding="utf-8")
    macro = load_study(tmp_path / "study.yaml").model.macro
    assert macro is not None
    assert macro.var is not None
    assert (macro.var.lags, macro.var.max_lags, macro.var.from_, macro.var.band) == ("bic", 4, None, 0.9)


CASES = {
    "unknown variable": ("house_price_index: log", "house_prices: log", "19:48: macro.var.variables.house_prices: no macro variable 'house_prices'; did you mean 'house_price_index'? (macro.variables: house_price_index, unemployment_rate)"),
    "unknown transform": (": log_difference}", ": log_change}", "19:67: macro.var.variables.house_price_index: expected 'level', 'difference' or 'log_difference', got the text 'log_change'"),
    "one variable": (", house_price_index: log_difference}", "}", "19:16: macro.var.variables: expected a mapping of at least 2 items, got a mapping with key unemployment_rate"),
    "unknown criterion": ("lags: aic", "lags: hqic", "20:11: macro.var.lags: expected 'aic', 'bic' or a whole number from 1 to 24; got the text 'hqic'"),
    "no lags": ("lags: aic", "lags: 0", "20:11: macro.var.lags: expected a whole number from 1 to 24, got the number 0"),
    "most lags of a fixed number": ("lags: aic", "lags: 2", "21:5: macro.var.max_lags: max_lags has no use with a fixed number of lags; leave it out"),
    "too many lags": ("max_lags: 6", "max_lags: 60", "21:15: macro.var.max_lags: expected a whole number from 1 to 24, got the number 60"),
    "floor of another variable": ("{unemployment_rate: 0}", "{gdp: 0}", "23:14: macro.var.floors.gdp: 'gdp' is not under variables (unemployment_rate, house_price_index)"),
    "floor as text": ("{unemployment_rate: 0}", "{unemployment_rate: zero}", "23:33: macro.var.floors.unemployment_rate: expected a number, got the text 'zero'"),
    "a band of everything": ("band: 0.8", "band: 1", "24:11: macro.var.band: expected a number from 0.01 to 0.999, got the number 1"),
    "a start that is no period": ("from: 1990Q1", "from: 1990Q7", "22:11: macro.var.from: '1990Q7' is not a period: expected '2025-12', '2025Q4', '2025 Q4' or '2025-12-31'"),
    "unknown key": ("max_lags: 6", "maxlags: 6", "21:5: macro.var.maxlags: unknown key; did you mean 'max_lags'? (keys here: variables, lags, max_lags, from, floors, band)"),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_words_and_place(name: str, tmp_path: Path) -> None:
    old, new, expected = CASES[name]
    assert old in VAR
    assert said(tmp_path / "x.yaml", with_var(VAR.replace(old, new)), load_study) == f"file:{expected}"


@pytest.mark.parametrize("key", ["at_least", "at_most", "between", "above", "below", "range", "min", "max"])
def test_a_range_as_a_condition_is_refused_by_name(key: str, tmp_path: Path) -> None:
    text = f"scenario: s\nstarts: 2026Q1\npaths:\n  u: {{{key}: 8}}\nmissing: conditional\n"
    assert said(tmp_path / "x.yaml", text, load_scenario) == (
        "file:4:6: paths.u: a range or an inequality as a condition is not available yet; state values, or leave the variable "
        f"out with missing: conditional; got a mapping with key {key}"
    )


def test_what_may_be_missing(tmp_path: Path) -> None:
    text = "scenario: s\nstarts: 2026Q1\npaths:\n  u: {values: [1]}\nmissing: conditionally\n"
    assert said(tmp_path / "x.yaml", text, load_scenario) == (
        "file:5:10: missing: expected 'error' or 'conditional', got the text 'conditionally'; did you mean 'conditional'?"
    )
