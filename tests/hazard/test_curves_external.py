"""Observed curves against numbers from elsewhere: R 4.2.2, survival 3.5-3 (tests/data/curves/README.md)."""

from __future__ import annotations

import warnings
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from lifelines import KaplanMeierFitter, NelsonAalenFitter

from stresskit.hazard.curves import cumulative_incidence, incidence_from_hazards, product_limit

DATA = Path(__file__).parent.parent / "data" / "curves"
TOLERANCE = 1e-6

# AML maintenance study (Miller 1997), data set `aml` of R survival: weeks to relapse, + = censored.
AML = {
    "Maintained": "9 13 13+ 18 23 28+ 31 34 45+ 48 161+",
    "Nonmaintained": "5 5 8 8 12 16+ 23 27 30 33 43 45",
}


def read(name: str) -> pd.DataFrame:
    return pd.read_csv(DATA / name)


def assert_rows(curve: pd.DataFrame, want: pd.DataFrame) -> None:
    """R writes se as NA where the curve is 0; so do we."""
    for ours, theirs in (
        ("age", "t"), ("at_risk", "n_risk"), ("events", "n_event"), ("survival", "S_km"),
        ("se", "se_greenwood"), ("cumulative_hazard", "H_na"), ("cumulative_hazard_se", "se_na"),
    ):  # fmt: skip
        if theirs in want:
            theirs_numbers = want[theirs].astype(float)
            np.testing.assert_allclose(curve[ours], theirs_numbers, rtol=0, atol=TOLERANCE, err_msg=ours)


@pytest.mark.parametrize("arm", ["6-MP", "control"])
def test_gehan(arm: str) -> None:
    cases = read("gehan.csv").query("treat == @arm")
    want = read("km_na_gehan.csv").query("treat == @arm")
    curve = product_limit(np.zeros(len(cases)), cases["time"], cases["event"])
    assert len(want) > 5
    assert_rows(curve.to_frame(), want)


@pytest.mark.parametrize("group", sorted(AML))
def test_aml(group: str) -> None:
    marks = AML[group].split()
    curve = product_limit(
        np.zeros(len(marks)), [float(m.rstrip("+")) for m in marks], [not m.endswith("+") for m in marks]
    )
    assert_rows(curve.to_frame(), read("km_na_aml.csv").query("group == @group"))


@pytest.mark.parametrize("gender", [1, 2])
@pytest.mark.parametrize("years", [0, 68, 80])
def test_channing_late_entry(gender: int, years: int) -> None:
    cases = read("channing.csv").query("gender == @gender")
    want = read("channing_lt_km.csv").query("gender == @gender and cond_age == @years")
    curve = product_limit(
        cases["ageentry"], cases["exit"], cases["death"], condition_on=12 * years if years else None
    )
    got = curve.at(want["age"] * 12, hold=True)
    assert len(want) >= 4
    np.testing.assert_allclose(got["survival"], want["S"], rtol=0, atol=TOLERANCE)
    np.testing.assert_allclose(got["se"], want["se"].astype(float), rtol=0, atol=TOLERANCE)
    assert int(curve.events.sum()) == int(want["deaths"].iloc[0])
    assert (cases["exit"] > 12 * years).sum() == want["n"].iloc[0]


def test_channing_men_unconditional_curve_says_that_its_risk_set_emptied() -> None:
    men = read("channing.csv").query("gender == 1")
    everything = product_limit(men["ageentry"], men["exit"], men["death"])
    assert everything.emptied_at is not None
    assert everything.emptied_at < 68 * 12
    conditional = product_limit(men["ageentry"], men["exit"], men["death"], condition_on=68 * 12)
    assert conditional.emptied_at is None


@pytest.mark.parametrize("sex", ["F", "M"])
def test_mgus2_exact_incidence_and_its_standard_error(sex: str) -> None:
    cases = read("mgus2_cr.csv").query("sex == @sex")
    want = read("aj_mgus2.csv").query(f"sex == 'sex={sex}'")
    table = cumulative_incidence(
        np.zeros(len(cases)), cases["etime"], cases["event"], causes=("pcm", "death")
    )
    got = table.at(want["t"], hold=True)
    assert len(want) == 7
    for ours, theirs in (
        ("survival", "p0"), ("incidence_pcm", "cif_pcm"), ("incidence_death", "cif_death"),
        ("se_pcm", "se_pcm"), ("se_death", "se_death"),
    ):  # fmt: skip
        np.testing.assert_allclose(got[ours], want[theirs], rtol=0, atol=1e-12, err_msg=ours)


@pytest.mark.parametrize(("male", "sex"), [(0, "F"), (1, "M")])
def test_mgus2_by_year(male: int, sex: str) -> None:
    """Years as periods: many ties; the exact curve is the discrete cause-specific one."""
    cases = read("mgus2_cr.csv").query("sex == @sex")
    want = read("mgus2_discrete_cif.csv").query("male == @male and year <= 30")
    years = np.ceil(cases["etime"] / 12)
    table = cumulative_incidence(np.zeros(len(cases)), years, cases["event"], causes=("pcm", "death"))
    frame = table.to_frame().set_index("age").reindex(want["year"]).reset_index()
    seen = frame["at_risk"].notna().to_numpy()
    assert seen.sum() >= 20
    for ours, theirs in (
        ("at_risk", "n"), ("hazard_pcm", "h_pcm"), ("hazard_death", "h_death"), ("survival", "S"),
        ("incidence_pcm", "cif_pcm"), ("incidence_death", "cif_death"),
    ):  # fmt: skip
        np.testing.assert_allclose(frame[ours][seen], want[theirs][seen], atol=TOLERANCE, err_msg=ours)
    # The conditional hazards P(c | c or survive), recombined by their odds, give the same curves.
    # (The last man dies: the other cause had no one who could have stayed.)
    known = np.isfinite(table.conditional_hazard).all(axis=1)
    assert (~known).sum() == male
    survival, incidence = incidence_from_hazards(table.conditional_hazard[known])
    np.testing.assert_allclose(survival, table.survival[known], rtol=0, atol=1e-13)
    np.testing.assert_allclose(incidence, table.incidence[known], rtol=0, atol=1e-13)


@pytest.mark.parametrize("gender", [1, 2])
def test_lifelines_with_entry(gender: int) -> None:
    """lifelines counts a case at its own entry age, so ages are shifted apart first."""
    cases = read("channing.csv").query("gender == @gender and exit > 816")
    entry = np.maximum(cases["ageentry"], 816)
    ours = product_limit(entry, cases["exit"], cases["death"])
    with warnings.catch_warnings():
        # lifelines warns of thin early risk sets and of pandas' deprecations; the numbers are compared below.
        warnings.simplefilter("ignore")
        observed = {"durations": cases["exit"], "event_observed": cases["death"], "entry": entry + 0.5}
        theirs = KaplanMeierFitter().fit(**observed)
        hazard = NelsonAalenFitter(nelson_aalen_smoothing=False).fit(**observed)
    frame = ours.to_frame()
    np.testing.assert_allclose(
        frame["survival"], theirs.survival_function_at_times(ours.age), rtol=0, atol=1e-12
    )
    np.testing.assert_allclose(
        frame["cumulative_hazard"], hazard.cumulative_hazard_at_times(ours.age), rtol=0, atol=1e-12
    )
    interval = theirs.confidence_interval_.loc[ours.age].to_numpy()
    inside = (frame["survival"] > 0).to_numpy()
    ours_interval = frame[["lower", "upper"]].to_numpy()
    np.testing.assert_allclose(ours_interval[inside], interval[inside], rtol=0, atol=1e-9)
