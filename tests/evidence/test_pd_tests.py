"""Jeffreys, exact binomial and Hosmer-Lemeshow against tables and published values."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels
import statsmodels.api as sm
from scipy import stats
from statsmodels.stats.proportion import proportion_confint

from stresskit.core.errors import UsageError
from stresskit.evidence.pd_tests import binomial_p, hosmer_lemeshow, jeffreys_p, two_sided
from stresskit.hazard.diagnostics import jeffreys
from tests.shared_inputs import shared

#: N, D, PD, Jeffreys p, P(X >= D), from checks/pd_calibration_tests.csv (formulas of the ECB's instructions for
#: reporting the validation results of internal models, 2019, by scipy 1.17.1).
TABLE = (
    (100, 0, 0.01, 0.844259279836, 1.0),
    (100, 3, 0.01, 0.0393245047396, 0.0793732022522),
    (250, 5, 0.01, 0.0678592972625, 0.107812373096),
    (500, 0, 0.005, 0.974872092953, 1.0),
)


@pytest.mark.parametrize(("n", "d", "pd_", "jeffreys_value", "upper"), TABLE)
def test_against_tabled_values(n: int, d: int, pd_: float, jeffreys_value: float, upper: float) -> None:
    assert jeffreys_p(d, n, pd_) == pytest.approx(jeffreys_value, rel=1e-10)
    assert binomial_p(d, n, pd_)[0] == pytest.approx(upper, rel=1e-10)


def test_the_whole_table_beside_the_repository() -> None:
    file = shared("checks/pd_calibration_tests.csv")
    t = pd.read_csv(file)
    n, d, p = (t[c].to_numpy(dtype=float) for c in ("N", "D", "PD"))
    np.testing.assert_allclose(jeffreys_p(d, n, p), t["jeffreys_p"], rtol=1e-8)
    np.testing.assert_allclose(binomial_p(d, n, p)[0], t["binom_upper_p"], rtol=1e-8)
    inside = (d > 0) & (d < n)
    low, high = jeffreys(d, n)
    np.testing.assert_allclose(low[inside], t["jeff_lo"][inside], rtol=1e-8)
    np.testing.assert_allclose(high[inside], t["jeff_hi"][inside], rtol=1e-8)


def test_intervals_and_p_values_of_other_libraries() -> None:
    for d, n, p in ((7, 120, 0.03), (1, 40, 0.2), (30, 31, 0.9)):
        np.testing.assert_allclose(
            [float(x[0]) for x in jeffreys(np.array([float(d)]), np.array([float(n)]))],
            proportion_confint(d, n, method="jeffreys"),
            rtol=1e-9,
        )
        upper, lower = binomial_p(d, n, p)
        assert upper == pytest.approx(stats.binomtest(d, n, p, alternative="greater").pvalue, rel=1e-10)
        assert lower == pytest.approx(stats.binomtest(d, n, p, alternative="less").pvalue, rel=1e-10)
        assert two_sided(upper, lower) == min(1.0, 2 * min(float(upper), float(lower)))


def test_hosmer_lemeshow_of_the_low_birth_weight_data() -> None:
    """chi2(8) = 9.65, p = 0.2904: Stata Base Reference Manual, estat gof, with the data of Hosmer and Lemeshow."""
    folder = Path(statsmodels.__file__).parent / "genmod" / "tests" / "results"
    births = pd.read_csv(folder / "stata_lbw_glm.csv")
    x = births[["age", "lwt", "smoke", "ptl", "ht", "ui"]].astype(float)
    x["black"], x["other"] = (births["race"] == "black") * 1.0, (births["race"] == "other") * 1.0
    low = births["low"].astype(float)
    p = np.asarray(sm.Logit(low, sm.add_constant(x)).fit(disp=0).predict())
    edges = np.quantile(p, np.arange(1, 10) / 10, method="averaged_inverted_cdf")
    tenth = np.searchsorted(edges, p, side="left")
    sums = [np.bincount(tenth, w) for w in (low.to_numpy(), np.ones(len(p)), p)]
    chi2, df, value = hosmer_lemeshow(*sums, fitted_here=True)
    assert (round(chi2, 2), df, round(value, 4)) == (9.65, 8, 0.2904)
    assert hosmer_lemeshow(*sums)[1] == 10


def test_hosmer_lemeshow_refuses_what_it_cannot_judge() -> None:
    two = np.array([1.0, 2.0])
    with pytest.raises(UsageError, match="at least three groups of predicted risk, not 2"):
        hosmer_lemeshow(two, two + 9, two)
    three = np.array([1.0, 2.0, 3.0])
    with pytest.raises(UsageError, match="expected defaults above 0 and below the loans in every group"):
        hosmer_lemeshow(three, three + 9, np.array([0.0, 1.0, 1.0]))
