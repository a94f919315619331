"""The shipped library: every file resolves against the demo's history, says what it is for, and moves as its name says."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.core.period import parse_period
from stresskit.core.values import GIVEN
from stresskit.demo.bank import SCENARIOS, demo_economy, shipped_scenarios
from tests.docs.test_pages import script
from tests.macro.world import MONTH, QUARTER
from tests.shared_inputs import REPOSITORY

MODULE = script("make_library")
LIBRARY = MODULE.library()
OTHERS = [n for n in MODULE.ORDER if n != "baseline"]
BASE = LIBRARY.whole["baseline"].values


def test_every_file_of_the_folder_is_on_the_page_and_none_else():
    files = {p.stem for p in (REPOSITORY / "scenarios").glob("*.yaml")}
    assert files == set(MODULE.ORDER)
    assert len(files) >= 12
    assert {f.removesuffix(".yaml") for f in SCENARIOS} == set(MODULE.ORDER[:3])
    assert shipped_scenarios().resolve() == (REPOSITORY / "scenarios").resolve()


@pytest.mark.parametrize("name", MODULE.ORDER)
def test_name_title_purpose_and_severity(name):
    spec = LIBRARY.loaded[name].model
    assert spec.scenario == name
    assert spec.title
    assert len(spec.notes["purpose"].split()) >= 7
    assert "Invented" in spec.notes["origin"]
    if name + ".yaml" not in SCENARIOS:
        assert spec.severity
        assert (spec.weight, spec.weighted) == (None, False)
        assert spec.based_on == "baseline"


@pytest.mark.parametrize("name", MODULE.ORDER)
def test_paths_are_complete_possible_and_begin_after_the_demo_history(name):
    path, whole = LIBRARY.paths[name], LIBRARY.whole[name]
    assert path.start == parse_period("2026Q1", QUARTER) == LIBRARY.history.end + 1
    assert list(path.values) == list(MODULE.DECLARED)
    assert path.horizon == whole.horizon == 40
    for variable, values in whole.values.items():
        assert np.isfinite(values).all(), variable
        assert (values > 0).all(), variable
        assert (whole.flags[variable][:6] == GIVEN).all(), variable
    further = set(whole.values) - set(path.values)
    assert all(v in path.notes.get("left out", "") for v in further)
    assert bool(further) == ("left out" in path.notes)


def test_the_demo_history_is_the_one_that_the_demo_writes():
    economy = demo_economy()
    assert {v: float(x[-1]) for v, x in economy.values.items()} == {
        "unemployment_rate": 5.0, "house_price_index": 150.0, "policy_rate": 2.5,
    }  # fmt: skip


def test_cautions_are_those_that_are_documented():
    """The page is compared with its generator elsewhere; here the count, so that a new caution is noticed as such."""
    counts = {n: len(MODULE.cautions(LIBRARY, n)) for n in MODULE.ORDER}
    assert {n: c for n, c in counts.items() if c} == {
        "deep_recession": 2, "rates_up": 1, "v_shape": 1, "stagflation": 1,
    }  # fmt: skip
    text = (REPOSITORY / "docs" / "scenario-library.md").read_text(encoding="utf-8")
    for name in MODULE.ORDER:
        section = text.split(f"\n## {name}\n")[1].split("\n## ")[0]
        assert LIBRARY.loaded[name].model.notes["purpose"] in section
        for caution in MODULE.cautions(LIBRARY, name):
            assert caution in section
        assert section.count("\n- ") == counts[name]


def apart(name, variable):
    """Path against baseline over 20 quarters: relative for the index, in points for the others."""
    ours, base = LIBRARY.whole[name].values[variable][:20], BASE[variable][:20]
    return ours / base - 1.0 if "index" in variable else ours - base


def test_moves_are_what_the_names_say():
    u, h, r = MODULE.DECLARED
    assert apart("house_price_fall", h).min() == pytest.approx(-0.22)
    assert apart("house_price_fall", u).max() == pytest.approx(0.4)
    stag = LIBRARY.whole["stagflation"].values
    assert apart("stagflation", u).max() > 2.5
    assert apart("stagflation", r).max() == pytest.approx(3.0)
    assert stag["inflation_rate"].max() > 7
    squeeze = LIBRARY.whole["credit_squeeze"].values
    assert apart("credit_squeeze", r).min() == pytest.approx(-1.5)
    # what borrowers pay does not fall for two years: policy rate and spread together, 2.5 + 1.8 before
    assert (squeeze[r] + squeeze["credit_spread"])[:8].min() > 2.5 + 1.8
    assert squeeze["inflation_rate"].min() < 0.5
    assert int(np.argmax(apart("v_shape", u))) == 2
    assert apart("v_shape", u)[8:].max() == 0.0
    grind = apart("slow_grind", u)
    assert int(np.argmax(grind)) == 11
    assert np.diff(grind[:12]).max() < 0.25
    assert apart("early_recovery", u).max() <= 0 <= apart("early_recovery", h).min()
    dip = apart("double_dip", u)
    valleys = [i for i in range(1, 19) if dip[i - 1] > dip[i] < dip[i + 1]]
    assert len(valleys) == 1
    assert LIBRARY.whole["low_rates_long"].values[r].min() == 0.5
    for name in OTHERS:
        worse = apart(name, u).max() > 1.5
        assert worse == (name not in ("early_recovery", "low_rates_long", "house_price_fall")), name


def test_the_national_figures_of_the_regional_downturn_are_its_regions():
    values = LIBRARY.whole["regional_downturn"].values
    for variable in ("unemployment_rate", "house_price_index"):
        parts = [values[f"{variable}_{region}"][:20] for region in ("north", "coast", "valley")]
        mean = 0.35 * parts[0] + 0.40 * parts[1] + 0.25 * parts[2]
        assert np.abs(mean - values[variable][:20]).max() <= 0.05 + 1e-9, variable


def test_months_are_the_demo_model():
    assert MODULE.MONTHS == 120
    assert parse_period(MODULE.AS_OF, MONTH) == parse_period("2025-12", MONTH)
