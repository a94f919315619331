"""Good texts: what is read, and that it does not depend on how the same things are written."""

from __future__ import annotations

import io
import json
from pathlib import Path
from typing import Any

import pytest
from ruamel.yaml import YAML

from stresskit.spec.load import load_scenario, load_study
from stresskit.spec.scenario import (
    AddTo,
    GivenValues,
    MultiplyBy,
    PeakAndBack,
    Revert,
    ScenarioSpec,
    TableMapping,
)
from stresskit.spec.study import ConstantLgd, FlagOutcome, PanelOutcome, SegmentLgd, SpellOutcome
from stresskit.spec.terms import AgeTerm, InteractionTerm, LoanTerm, MacroTerm, OffsetTerm
from stresskit.spec.yaml import read_document, scalar
from tests.spec.texts import GOOD, SCENARIOS, STUDIES, load


def test_harbour_study() -> None:
    study = load_study(GOOD / "harbour_study.yaml").model
    assert (study.study, study.frequency, study.as_of) == ("harbour-retail", "month", "2025-12")
    assert isinstance(study.loans.outcome, PanelOutcome)
    assert (study.loans.outcome.default, study.loans.outcome.payoff) == (("D",), ("P",))
    assert study.loans.columns.rate == "annual_rate"
    assert study.macro is not None
    assert study.macro.features["house_price_growth"].transform == "log_growth"
    age, macro, ltv, product, pair = study.hazards["default"].terms
    assert isinstance(age, AgeTerm)
    assert (age.age, age.knots, age.beyond) == ("spline", 5, "hold")
    assert isinstance(macro, MacroTerm)
    assert macro.expect == "positive"
    assert isinstance(ltv, LoanTerm)
    assert (ltv.as_, ltv.transform) == ("number", "standardise")
    assert isinstance(product, LoanTerm)
    assert (product.as_, product.reference) == ("category", "fixed")
    assert isinstance(pair, InteractionTerm)
    assert pair.interaction == ("product", "unemployment_change")
    steps = study.hazards["payoff"].terms[0]
    assert isinstance(steps, AgeTerm)
    assert steps.bands == (12, 24, 36)
    assert isinstance(study.loss.lgd, SegmentLgd)
    assert study.loss.lgd.values == {"fixed": 0.35, "floating": 0.4}
    assert study.loss.discount == "rate"


def test_spells_study_keeps_codes_as_written() -> None:
    study = load_study(GOOD / "spells_study.yaml").model
    outcome = study.loans.outcome
    assert isinstance(outcome, SpellOutcome)
    assert outcome.default == ("1", "02", "NO", "12:30", "true", "0x1F", "1_000")
    assert outcome.payoff == ("P", "on", "2025-12-31")
    assert study.loans.assume == {"rate": 0.001}
    assert (study.loans.counter_starts, study.loans.observed_until) == ("2000Q2", "2025-12-31")
    assert study.portfolio.from_ == "contract"
    assert isinstance(study.hazards["default"].terms[2], OffsetTerm)
    assert (study.loss.exposure.schedule, study.loss.exposure.accrued) == ("linear", 0.5)
    assert isinstance(study.loss.lgd, ConstantLgd)
    assert (study.loss.lgd.constant, study.loss.discount, study.horizon) == (0.45, -0.01, 40)


def test_json_is_yaml() -> None:
    study = load_study(GOOD / "flags_study.yaml").model
    assert isinstance(study.loans.outcome, FlagOutcome)
    assert study.macro is None
    age = study.hazards["default"].terms[0]
    assert isinstance(age, AgeTerm)
    assert age.knots == (6.0, 12.5, 24.0)
    assert study.loss.discount == "none"


def test_deep_recession() -> None:
    spec = load_scenario(GOOD / "deep_recession.yaml").model
    assert isinstance(spec, ScenarioSpec)
    assert (spec.scenario, spec.based_on, spec.weight, spec.starts) == (
        "deep_recession",
        "baseline",
        0.2,
        "2026Q1",
    )
    given, peak, added = (spec.paths[n] for n in ("unemployment_rate", "house_price_index", "policy_rate"))
    assert isinstance(given, GivenValues)
    assert given.values == (5.1, 6.0, 7.4, 8.2, 8.0, 7.6)
    assert isinstance(peak, PeakAndBack)
    assert (peak.peak, peak.at, peak.back_by) == (-0.24, "2027Q2", "2031Q4")
    assert isinstance(added, AddTo)
    assert (added.values, added.then) == ((-0.5, -1.0, -1.5), "hold")
    assert isinstance(spec.afterwards, Revert)
    assert (spec.afterwards.revert_to, spec.afterwards.over) == ("long_run_mean", 12)


def test_values_by_label_and_rules_by_variable() -> None:
    spec = load_scenario(GOOD / "by_label.yaml").model
    assert isinstance(spec, ScenarioSpec)
    given, peak, times = (spec.paths[n] for n in ("unemployment_rate", "house_price_index", "export_demand"))
    assert isinstance(given, GivenValues)
    assert given.values == {"2026-01": 5.0, "2026-02": 5.5, "2026M03": 6.0}
    assert isinstance(peak, PeakAndBack)
    assert (peak.peak, peak.peak_points, peak.at) == (None, -12.5, "202606")
    assert isinstance(times, MultiplyBy)
    assert times.values == (0.9, 0.95)
    assert isinstance(spec.afterwards, dict)
    rule = spec.afterwards["unemployment_rate"]
    assert isinstance(rule, Revert)
    assert rule.revert_to == 4.5
    assert spec.afterwards["house_price_index"] == "baseline"
    assert spec.title == "Labels: with a colon"
    assert spec.notes == {"source": "Written by hand for this test.", "12:30": 'it\'s "quoted"'}


def test_published_table() -> None:
    spec = load_scenario(GOOD / "published_table.yaml").model
    assert isinstance(spec, TableMapping)
    assert spec.only == {"Scenario Name": ("Severely adverse",)}
    assert spec.variables["house_price_index"] == "House price index (level)"


def _block_style(data: Any) -> str:
    """The data in block style as another program writes it."""
    out = io.StringIO()
    yaml = YAML(typ="safe", pure=True)
    yaml.default_flow_style = False
    yaml.width = 10_000
    yaml.dump(data, out)
    return out.getvalue()


@pytest.mark.parametrize("name", STUDIES + SCENARIOS)
@pytest.mark.parametrize("style", ["block", "one line", "indented", "with lines between"])
def test_the_same_things_written_otherwise(name: str, style: str, tmp_path: Path) -> None:
    first = load(GOOD / name)
    data = read_document(first.text.encode(), name).data
    text = {
        "block": _block_style(data),
        "one line": json.dumps(data),
        "indented": json.dumps(data, indent=3, ensure_ascii=False),
        "with lines between": json.dumps(data, indent=1).replace("\n", "\n\n# a remark\n"),
    }[style]
    path = tmp_path / name
    path.write_text(text, encoding="utf-8")
    again = load(path)
    assert again.model == first.model
    assert set(again.marks.by_keys) == set(first.marks.by_keys)


@pytest.mark.parametrize("name", STUDIES)
def test_models_written_out_load_to_the_same_model(name: str, tmp_path: Path) -> None:
    model = load(GOOD / name).model
    path = tmp_path / name
    path.write_text(model.model_dump_json(by_alias=True, exclude_none=True), encoding="utf-8")
    assert load(path).model == model


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("0", 0),
        ("-0", 0),
        ("+7", 7),
        ("120", 120),
        ("1e-3", 0.001),
        ("1E3", 1000.0),
        ("+1.5e+2", 150.0),
        (".5", 0.5),
        ("-.5", -0.5),
        ("5.", 5.0),
        ("0.1", 0.1),
        ("true", True),
        ("FALSE", False),
        ("null", None),
        ("~", None),
    ],
)
def test_scalars_that_mean_something(text: str, value: object) -> None:
    found = scalar(text)
    assert found == value
    assert type(found) is type(value)


@pytest.mark.parametrize(
    "text",
    [
        "NO",
        "no",
        "yes",
        "on",
        "off",
        "y",
        "n",
        "12:30",
        "1:30:00",
        "2025-12",
        "2025-12-31",
        "2025Q4",
        "007",
        "-01.5",
    ]
    + [
        "0x1F",
        "0o17",
        "0b1",
        "1_000",
        "1,000",
        "1.2.3",
        "e5",
        "1e",
        "1e5.0",
        ".",
        "-",
        "+.",
        "nan",
        "NaN",
        "inf",
    ]
    + ["Infinity", "tRUE", "nULL", "None", "-24%", "5 %", "١٢", "½", "1 000"],
)
def test_scalars_that_stay_text(text: str) -> None:
    assert scalar(text) == text
