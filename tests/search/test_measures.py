"""VIF, ADF, KPSS and adjusted p-values against statsmodels, and cases worked by hand."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.outliers_influence import variance_inflation_factor
from statsmodels.tsa.stattools import adfuller, kpss

from stresskit.search.measures import adjusted, inflation, stationarity_of


def _direct(x: np.ndarray, code: str) -> tuple[float, float, float, float]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        a, k = adfuller(x, regression=code), kpss(x, regression=code)
    return float(a[0]), float(a[1]), float(k[0]), float(k[1])


def test_vif_over_periods_equals_vif_over_all_rows() -> None:
    """Rows repeated by their weight, with a constant: what a regression over all rows at risk gives."""
    rng = np.random.default_rng(5)
    x = rng.normal(size=(30, 3))
    x[:, 2] = x[:, 0] - 0.4 * x[:, 1] + 0.3 * x[:, 2] + 7.0
    weight = rng.integers(1, 40, size=30)
    rows = np.column_stack([np.ones(weight.sum()), np.repeat(x, weight, axis=0)])
    expected = [variance_inflation_factor(rows, j) for j in (1, 2, 3)]
    assert inflation(x, weight.astype(float)) == pytest.approx(expected, rel=1e-9)
    assert max(expected) > 5
    unweighted = [variance_inflation_factor(np.column_stack([np.ones(30), x]), j) for j in (1, 2, 3)]
    assert not np.allclose(unweighted, expected, rtol=0.01)


def test_vif_does_not_depend_on_units_and_is_infinite_for_a_combination() -> None:
    rng = np.random.default_rng(6)
    x = rng.normal(size=(25, 2))
    weight = np.full(25, 3.0)
    assert inflation(x * [1e-6, 1e9] + [5.0, -3.0], weight) == pytest.approx(inflation(x, weight), rel=1e-6)
    assert np.isinf(inflation(np.column_stack([x, x.sum(axis=1)]), weight)).all()
    assert inflation(x[:, :1], weight).tolist() == [1.0]


@pytest.mark.parametrize("around", ["constant", "trend"])
@pytest.mark.parametrize("kind", ["noise", "walk", "trend"])
def test_adf_and_kpss_are_those_of_statsmodels(kind: str, around: str) -> None:
    noise = np.random.default_rng(11).normal(size=90)
    x = {"noise": noise, "walk": noise.cumsum(), "trend": noise + 0.2 * np.arange(90)}[kind]
    ours = stationarity_of(x, level=0.05, around=around)  # type: ignore[arg-type]
    assert (ours.adf, ours.adf_p, ours.kpss, ours.kpss_p) == _direct(
        x, {"constant": "c", "trend": "ct"}[around]
    )
    assert ours.values == 90


def test_verdicts() -> None:
    noise = np.random.default_rng(3).normal(size=120)
    still = stationarity_of(noise, level=0.05, around="constant")
    walk = stationarity_of(noise.cumsum(), level=0.05, around="constant")
    assert (still.verdict, walk.verdict) == ("stationary", "unit root")
    assert [still.passes(r, 0.05) for r in ("none", "adf", "kpss", "both")] == [True] * 4
    assert [walk.passes(r, 0.05) for r in ("none", "adf", "kpss", "both")] == [True, False, False, False]


@pytest.mark.parametrize(
    ("x", "why"),
    [
        (np.ones(50), "does not vary"),
        (np.arange(19.0), "19 values, fewer than 20"),
        (0.3 * np.arange(28.0), "no unique solution"),
    ],
)
def test_what_cannot_be_tested_says_why_and_passes_no_rule(x: np.ndarray, why: str) -> None:
    test = stationarity_of(x, level=0.05, around="constant")
    assert test.verdict == "not tested"
    assert why in test.note
    assert test.passes("none", 0.05)
    assert not test.passes("adf", 0.05)


def test_adjusted_p_values_are_those_of_statsmodels() -> None:
    p = np.array([0.01, 0.04, 0.03, 0.2, 0.0004, 0.03, 0.9])
    bonferroni, holm = adjusted(p, p.size)
    assert bonferroni == pytest.approx(multipletests(p, method="bonferroni")[1], rel=1e-12)
    assert holm == pytest.approx(multipletests(p, method="holm")[1], rel=1e-12)


def test_trials_without_p_value_count_among_those_tried() -> None:
    p = np.array([0.01, np.nan, 0.002])
    bonferroni, holm = adjusted(p, 3)
    whole = np.array([0.01, 1.0, 0.002])
    assert holm[[0, 2]] == pytest.approx(multipletests(whole, method="holm")[1][[0, 2]], rel=1e-12)
    assert bonferroni[[0, 2]] == pytest.approx([0.03, 0.006], rel=1e-12)
    assert np.isnan(holm[1])
    assert np.isnan(bonferroni[1])
