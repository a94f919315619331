"""Scenarios that are YAML but no scenario: exact words and place. Every text is the good one with one change."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.spec.load import load_scenario
from tests.spec.texts import changed, said

PERIODS = "expected '2025-12', '2025Q4', '2025 Q4' or '2025-12-31'"
TOP = "(keys here: scenario, based_on, weight, weighted, starts, paths, afterwards, missing, title, severity, author_role, approved_on, notes)"
A_NAME = "a name that begins with a letter and holds letters, digits, '_' and '-' only, 80 at most"
A_PATH = "a path is one of: {values: ...}, {add_to: ...}, {multiply: ...}, {change_from: ...}, {growth: ...}, {hold: ...}, {reach: ...}"
PEAK = "a relative change above -100% with its percent sign, for example -24%"
VALUES = "[5.1, 6.0, 7.4, 8.2, 8.0, 7.6]"
AFTER = "{revert_to: long_run_mean, over: 12}"
RULES = "'hold', 'baseline', {revert_to: ...}, {grow_by: ...}, {back_to: ...} or a mapping of items"

CASES: dict[str, tuple[str, str, str]] = {
    "unknown key": ("weight", "weigth", f"3:1: weigth: unknown key; did you mean 'weight'? {TOP}"),
    "missing start": ("starts: 2026Q1\n", "", "1:1: missing key 'starts': expected a period such as 2025-12, 2025Q4 or 2025-12-31"),
    "word for a weight": ("weight: 0.2", "weight: NO", "3:9: weight: expected a number from 0 to 1, got the text 'NO'"),
    "weight above one": ("weight: 0.2", "weight: 20", "3:9: weight: expected a number from 0 to 1, got the number 20"),
    "percent for a weight": ("weight: 0.2", "weight: 20%", "3:9: weight: expected a number from 0 to 1, got the text '20%': write it without the percent sign, in the unit that is expected here"),
    "year as start": ("starts: 2026Q1", "starts: 2026", f"4:9: starts: '2026' is not a period: {PERIODS}"),
    "no such quarter": ("2027Q2", "2027Q5", f"7:62: paths.house_price_index.at: '2027Q5' is not a period: {PERIODS}"),
    "no such month": ("2031Q4", "2031-13", f"7:79: paths.house_price_index.back_by: '2031-13' has no month 13: {PERIODS}"),
    "peak without percent": ("-24%", "-24", "7:52: paths.house_price_index.peak: write a relative change with a percent sign, for example -24%"),
    "peak below nothing": ("-24%", "-124%", f"7:52: paths.house_price_index.peak: expected {PEAK}, got the text '-124%'"),
    "peak of words": ("-24%", "deep", f"7:52: paths.house_price_index.peak: expected {PEAK}, got the text 'deep'"),
    "peak with underscore": ("-24%", "-2_4%", f"7:52: paths.house_price_index.peak: expected {PEAK}, got the text '-2_4%'"),
    "peak that is no number": ("-24%", "nan%", f"7:52: paths.house_price_index.peak: expected {PEAK}, got the text 'nan%'"),
    "no peak": ("peak: -24%, ", "", "7:3: paths.house_price_index: give peak (for example -24%), peak_points or peak_factor, one of them"),
    "two peaks": ("peak: -24%", "peak: -24%, peak_points: 2", "7:3: paths.house_price_index: give peak (for example -24%), peak_points or peak_factor, one of them"),
    "misspelt values": ("values: [5.1", "value: [5.1", "6:23: paths.unemployment_rate.value: unknown key; did you mean 'values'? (keys here: values, unit, rate)"),
    "misspelt rest": ("then: hold", "then: holt", "8:69: paths.policy_rate.then: expected 'hold' or 'zero', got the text 'holt'; did you mean 'hold'?"),
    "key of another path": ("then: hold", "at: 2026Q1", "8:63: paths.policy_rate.at: unknown key (keys here: add_to, values, then, unit)"),
    "path of a number": (f"{{values: {VALUES}}}", "5", f"6:22: paths.unemployment_rate: {A_PATH}; got the number 5"),
    "path of null": (f"{{values: {VALUES}}}", "~", f"6:22: paths.unemployment_rate: {A_PATH}; got null"),
    "path of nothing known": (f"{{values: {VALUES}}}", "{xyz: 5}", f"6:22: paths.unemployment_rate: {A_PATH}; got a mapping with key xyz"),
    "path of an empty mapping": (f"{{values: {VALUES}}}", "{}", f"6:22: paths.unemployment_rate: {A_PATH}; got an empty mapping"),
    "one value": (VALUES, "5.1", "6:31: paths.unemployment_rate.values: expected a list of numbers or a mapping of numbers; got the number 5.1"),
    "word among values": ("7.4", "NO", "6:42: paths.unemployment_rate.values#3: expected a number, got the text 'NO'"),
    "percent among values": ("7.4", "7.4%", "6:42: paths.unemployment_rate.values#3: expected a number, got the text '7.4%': write it without the percent sign, in the unit that is expected here"),
    "null among values": ("7.4", "null", "6:42: paths.unemployment_rate.values#3: expected a number, got null"),
    "list among values": ("7.4", "[7.4]", "6:42: paths.unemployment_rate.values#3: expected a number, got a list of 1 item"),
    "label of no period": (VALUES, "{2026Q1: 5, 2026Q5: 6}", f"6:43: paths.unemployment_rate.values.2026Q5: '2026Q5' is not a period: {PERIODS}"),
    "word at a label": (VALUES, "{2026Q1: 5, 2026Q2: on}", "6:51: paths.unemployment_rate.values.2026Q2: expected a number, got the text 'on'"),
    "variable with a space": ("policy_rate", "policy rate", f"8:3: paths.'policy rate': not a key that can stand here: expected {A_NAME}"),
    "unknown end": (AFTER, "flat", f"9:13: afterwards: expected {RULES}; got the text 'flat'"),
    "misspelt end": (AFTER, "holds", f"9:13: afterwards: expected {RULES}; got the text 'holds'; did you mean 'hold'?"),
    "end as a list": (AFTER, "[hold]", f"9:13: afterwards: expected {RULES}; got a list of 1 item"),
    "reversion without a span": (", over: 12", "", "9:1: afterwards: give over (periods until it is reached) or half_life (periods in which the distance halves), one of them"),
    "reversion to a word": ("long_run_mean", "mean", "9:25: afterwards.revert_to: expected 'long_run_mean' or a number; got the text 'mean'"),
    "reversion misspelt": ("over: 12", "ovr: 12", "9:40: afterwards.ovr: unknown key; did you mean 'over'? (keys here: revert_to, over, half_life, unit)"),
    "misspelt end of a variable": (AFTER, "{policy_rate: baselin}", "9:27: afterwards.policy_rate: expected 'hold', 'baseline', {revert_to: ...}, {grow_by: ...} or {back_to: ...}; got the text 'baselin'; did you mean 'baseline'?"),
    "reversion of a variable": (AFTER, "{policy_rate: {revert_to: 2, over: 0}}", "9:48: afterwards.policy_rate.over: expected a whole number from 1 to 400, got the number 0"),
    "number among notes": (AFTER, "hold\nnotes: {year: 2025}", "10:15: notes.year: expected text, got the number 2025: put it in quotes, '2025'"),
}  # fmt: skip

TABLES: dict[str, tuple[str, str, str]] = {
    "misspelt table": ("table:", "tabel:", "2:1: tabel: unknown key; did you mean 'table'? (keys here: scenario, table, period, only, variables, weight, weighted, afterwards, missing, title, severity, author_role, approved_on, notes)"),
    "column as a list": ("Unemployment rate", "[Unemployment rate]", "6:22: variables.unemployment_rate: expected text of 1 to 120 characters, got a list of 1 item"),
    "rows by a text": ("[Severely adverse]", "Severely adverse", "4:23: only.'Scenario Name': expected a list of texts, got the text 'Severely adverse': write [Severely adverse]"),
    "start of a table": ("afterwards: hold", "starts: 2026Q1", "8:1: starts: unknown key (keys here: scenario, table, period, only, variables, weight, weighted, afterwards, missing, title, severity, author_role, approved_on, notes)"),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_words_and_place(name: str, tmp_path: Path) -> None:
    old, new, expected = CASES[name]
    assert (
        said(tmp_path / "x.yaml", changed("deep_recession.yaml", (old, new)), load_scenario)
        == f"file:{expected}"
    )


@pytest.mark.parametrize("name", TABLES)
def test_words_and_place_in_tables(name: str, tmp_path: Path) -> None:
    old, new, expected = TABLES[name]
    assert (
        said(tmp_path / "x.yaml", changed("published_table.yaml", (old, new)), load_scenario)
        == f"file:{expected}"
    )


def test_study_where_a_scenario_was_expected(tmp_path: Path) -> None:
    words = said(tmp_path / "x.yaml", changed("harbour_study.yaml"), load_scenario)
    assert words == "file:1:1: this file is a study, where a scenario was expected"
