"""Sentences from tables written by hand: the right status and the right words at the edges."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from stresskit.evidence import verdicts


def profile(
    behind: dict[int, float], *, signs: dict[int, float] | None = None, scale: float = 1.0
) -> pd.DataFrame:
    top = min(behind.values())
    return pd.DataFrame(
        {
            "term": "m", "lag": list(behind), "shift": [lag - 1 for lag in behind], "llf": [-100.0 - b for b in behind.values()],
            "behind": list(behind.values()), "behind_scaled": [b / scale for b in behind.values()],
            "coef": [(signs or {}).get(lag, 0.4) for lag in behind], "best": [b == top for b in behind.values()],
            "study": [lag == 1 for lag in behind],
        }
    )  # fmt: skip


@pytest.mark.parametrize(
    ("gap", "status", "words"),
    [
        (1.9, "in order", "within 2"),
        (2.1, "note", "beyond 2"),
        (2.6, "note", "beyond 2"),
        (2.8, "look at", "beyond 2"),
    ],
)
def test_lag_status(gap: float, status: str, words: str) -> None:
    """Three lags tried: a look beyond 2 + log(2) = 2.69."""
    verdict = verdicts.on_lag("default", profile({0: 0.0, 1: gap, 2: 30.0}))
    assert verdict.status == status
    assert words in verdict.found


def test_lag_words() -> None:
    alone = verdicts.on_lag("default", profile({0: 9.0, 1: 0.0, 2: 9.0}))
    assert alone.found.endswith("; no other lag comes near.")
    against = verdicts.on_lag("default", profile({0: 1.0, 1: 0.0, 2: 1.0, 3: 50.0}, signs={0: -0.3}))
    assert "Lags 1 and 2 cannot be told apart. Lag 0 does as well with the opposite sign." in against.found
    turned = verdicts.on_lag("default", profile({0: 0.0, 1: 9.0}, signs={0: -0.3}))
    assert turned.found.endswith("; no other lag comes near, but there the sign is the opposite.")
    scaled = verdicts.on_lag("default", profile({0: 0.0, 1: 6.0}, scale=6.0))
    assert scaled.status == "in order"
    assert "6.0 log-likelihood units behind (beyond 2), 1.0 once" in scaled.found
    refused = profile({0: 0.0, 1: 1.0})
    refused.loc[refused["study"], "llf"] = np.nan
    assert verdicts.on_lag("default", refused).status == "not possible"


def memory(first: float, p: float) -> pd.DataFrame:
    return pd.DataFrame(
        {
            "lag": [1, 2],
            "autocorrelation": [first, 0.4],
            "band": 0.2,
            "ljung_box": [1.0, 20.0],
            "p_value": [0.5, p],
            "periods": 96,
        }
    )


def test_memory_words() -> None:
    persistent, odd, fine = (
        verdicts.on_memory("default", memory(*v)) for v in ((0.5, 1e-5), (0.0, 1e-5), (0.0, 0.3))
    )
    assert "A driver that persists" in persistent.found
    assert "outside the band: lags 1 and 2" in persistent.found
    assert "season or for chance" in odd.found
    assert (persistent.status, odd.status, fine.status) == ("look at", "look at", "in order")
    assert fine.found.endswith("outside the band: lag 2.")


def calibrated(level: float, half: float, p: float) -> pd.DataFrame:
    row = {"term": ["intercept", "slope", "level"], "estimate": [0.0, 1.0, level], "p_value": [1.0, 0.9, p]}
    return pd.DataFrame(
        row
        | {
            "lower": [0, 0, level - half],
            "upper": [0, 2, level + half],
            "events": 90.0,
            "expected": 100.0,
            "periods": 40,
        }
    )


def test_out_of_time_words() -> None:
    yes, vague, no = (
        verdicts.on_out_of_time("default", calibrated(*v), "2019-12")
        for v in ((-0.1, 0.2, 0.5), (-1.0, 2.0, 0.3), (0.9, 0.3, 1e-6))
    )
    assert (yes.status, vague.status, no.status) == ("in order", "note", "look at")
    assert vague.found.startswith("Cannot be told")
    assert "factor of 7.4" in vague.found
    assert no.found.startswith("No: fitted up to 2019-12, then 90 events against 100.0 expected")


def test_groups_share_the_significance() -> None:
    totals = pd.DataFrame(
        {"by": ["period", "age", "cohort"], "df": [40, 9, 9], "p_value": [1e-9, 0.004, 0.5], "p_clustered": [np.nan, 0.2, 0.006],
         "shock_sd": 0.0, "chi2": 1.0, "contradicted": 0, "note": ""}
    )  # fmt: skip
    plain = verdicts.on_groups("default", totals)
    assert (
        plain.found
        == "Not by age (p = 0.004); yes by cohort (p = 0.5); each held to p >= 0.005, its share of 1 %."
    )
    shaken = verdicts.on_groups("default", totals.assign(shock_sd=0.2))
    assert shaken.status == "in order"
    assert "the furthest is cohort (p = 0.006" in shaken.found
    assert verdicts.on_groups("default", totals.assign(df=0)).status == "not possible"
    assert verdicts.on_shocks("default", totals.assign(shock_sd=0.2)).status == "note"


def test_age_and_intercept_do_not_decide_stability() -> None:
    table = pd.DataFrame(
        {"term": ["intercept", "age[12]", "x", "m"], "macro": [False, False, False, True], "held": False, "before": 0.1, "after": 0.2,
         "z": [9.0, 9.0, 1.0, 0.5], "p_value": [1e-9, 1e-9, 0.3, 0.6], "joint_p": 0.6, "events_before": 50.0, "events_after": 60.0,
         "periods_before": 40, "periods_after": 41}
    )  # fmt: skip
    steady = verdicts.on_stability("default", table, "2019-12")
    assert steady.status == "in order"
    assert (
        "furthest x, 0.1 to 0.2 (z +1.0); macro terms together p = 0.6; 50 and 60 events, 40 and 41 periods"
        in steady.found
    )
    assert verdicts.on_stability("default", table.assign(joint_p=0.001), "2019-12").status == "look at"
    assert verdicts.on_stability("default", table.assign(held=True), "2019-12").status == "not possible"


def test_a_test_that_was_not_made_is_never_in_order() -> None:
    nan = float("nan")
    silent = verdicts.on_memory("default", memory(0.5, nan))
    assert silent.status == "not possible"
    assert silent.found.startswith("Not computed: the residuals of calendar periods do not vary")
    unjudged = verdicts.on_out_of_time("default", calibrated(0.1, nan, nan), "2019-12")
    assert unjudged.status == "not possible"
    assert unjudged.found.startswith("Not computed: fitted up to 2019-12")
    assert unjudged.found.endswith(
        "The error of the level has no value on these rows, so the test was not made."
    )
    half = calibrated(0.9, 0.3, 1e-6)
    half.loc[half["term"] == "slope", "p_value"] = nan
    assert verdicts.on_out_of_time("default", half, "2019-12").status == "look at"
    swapped = calibrated(0.1, 0.3, 0.5)
    swapped.loc[swapped["term"] == "slope", "p_value"] = nan
    assert verdicts.on_out_of_time("default", swapped, "2019-12").status == "not possible"


def test_a_p_value_that_is_not_there_is_no_pass_of_the_groups() -> None:
    totals = pd.DataFrame(
        {"by": ["period", "age", "cohort"], "df": [40, 9, 9], "p_value": [np.nan, np.nan, 0.5], "p_clustered": np.nan,
         "shock_sd": np.nan, "chi2": np.nan, "contradicted": 0, "note": ""}
    )  # fmt: skip
    part = verdicts.on_groups("default", totals)
    assert part.status == "note"
    assert part.found.endswith("1 looked at). Not computed by age: the test has no p-value.")
    assert verdicts.on_groups("default", totals.assign(p_value=np.nan)).status == "not possible"
    assert verdicts.on_shocks("default", totals).status == "not possible"
    sized = verdicts.on_shocks("default", totals.assign(p_value=1e-9, chi2=400.0))
    assert sized.status == "note"
    assert "nan" not in sized.found


def test_macro_terms_that_could_not_be_tested_together_are_named() -> None:
    table = pd.DataFrame(
        {"term": ["x", "m", "k"], "macro": [False, True, True], "held": False, "before": 0.1, "after": 0.2, "z": [1.0, 0.5, 0.2],
         "p_value": [0.3, 0.6, 0.8], "joint_p": np.nan, "events_before": 50.0, "events_after": 60.0, "periods_before": 40,
         "periods_after": 41}
    )  # fmt: skip
    alone = verdicts.on_stability("default", table, "2019-12")
    assert alone.status == "note"
    assert "macro terms together not computed (their covariance on a side has no inverse)" in alone.found
    few = verdicts.on_stability("default", table.assign(periods_before=2), "2019-12")
    assert "not computed (2 of them, 2 periods on a side)" in few.found
    none = verdicts.on_stability("default", table.assign(macro=False), "2019-12")
    assert none.status == "in order"
    assert "together" not in none.found
    lost = table.assign(z=[1.0, np.nan, 0.2], p_value=[0.3, np.nan, 0.8], joint_p=0.4)
    told = verdicts.on_stability("default", lost, "2019-12")
    assert told.status == "note"
    assert "furthest x" in told.found
    assert "m not computed (no error on a side)" in told.found
    assert (
        verdicts.on_stability("default", lost.assign(z=np.nan, p_value=np.nan), "2019-12").status
        == "not possible"
    )
