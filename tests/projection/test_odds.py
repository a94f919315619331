"""Odds from products against mpmath, over all sizes of a hazard."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from stresskit.kernels.odds import LARGEST, LIMIT, MIDDLE, SMALL, odds_of
from stresskit.kernels.rollforward import period_odds

EDGES = [b * (1 + e) for b in (SMALL, MIDDLE, 16.0) for e in (-1e-6, -1e-15, 0.0, 1e-15, 1e-6)]


def test_cloglog_odds_are_expm1_to_the_last_digits() -> None:
    x = np.concatenate([np.geomspace(1e-300, 600.0, 4000), np.linspace(1e-9, 1.1, 3000), EDGES])
    with mpmath.workdps(40):
        want = [mpmath.expm1(mpmath.mpf(float(v))) for v in x]
        apart = np.array(
            [float(abs(mpmath.mpf(float(o)) / w - 1)) for o, w in zip(odds_of(x, "cloglog"), want)]
        )
    assert apart[x <= SMALL].max() < 2.3e-16
    assert apart[(x > SMALL) & (x <= MIDDLE)].max() < 1e-15
    assert apart.max() < 1.2e-15


def test_zero_and_certainty() -> None:
    assert (odds_of([0.0, 0.0], "cloglog") == 0.0).all()
    assert (odds_of([0.0], "logit") == 0.0).all()
    assert odds_of([1e5, LIMIT], "cloglog").tolist() == [np.expm1(LIMIT)] * 2
    assert odds_of([1e308, 2.0], "logit").tolist() == [LARGEST, 2.0]
    np.testing.assert_allclose(LARGEST, period_odds(np.array([1e4]), "logit")[0], rtol=1e-15)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
@given(x=st.lists(st.floats(0, 1e3), min_size=2, max_size=40))
def test_a_lane_does_not_depend_on_its_neighbours(link: str, x: list[float]) -> None:
    together = odds_of(x, link)
    alone = np.array([odds_of([v], link)[0] for v in x])
    np.testing.assert_array_equal(together, alone)
    with np.errstate(divide="ignore"):
        np.testing.assert_allclose(together, period_odds(np.log(np.array(x)), link), rtol=1e-12)
