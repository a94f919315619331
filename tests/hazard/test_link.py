"""Links against mpmath (50 digits and more) over the whole range of float64 linear predictors."""

from __future__ import annotations

import mpmath
import numpy as np
import pytest

from stresskit.hazard.link import CLogLog, Logit

ETA = np.concatenate(
    [np.linspace(-745.0, 700.0, 290), np.linspace(-40.0, 8.0, 481), [-0.35667494393873245, 0.0, -6.9, -6.91]]
)
LINKS = {"cloglog": CLogLog(), "logit": Logit()}


def _exact(link: str, eta: float, event: bool) -> tuple[mpmath.mpf, mpmath.mpf, mpmath.mpf]:
    """(log-likelihood, score, observed information) of one row, by formula with many digits."""
    with mpmath.workdps(60):
        x = mpmath.exp(mpmath.mpf(eta))
        if link == "logit":
            p = x / (1 + x)
            return -mpmath.log1p(1 / x if event else x), 1 / (1 + x) if event else -p, p / (1 + x)
        if not event:
            return -x, -x, x
        tail = mpmath.exp(-x)
        rest = -mpmath.expm1(-x)
        score = x * tail / rest
        with mpmath.workdps(400 if x < 1e-3 else 60):
            x = mpmath.exp(mpmath.mpf(eta))
            information = score * (x / -mpmath.expm1(-x) - 1)
        return mpmath.log(rest) if x < 1 else mpmath.log1p(-tail), score, information


def _close(ours: float, exact: mpmath.mpf, eta: float) -> bool:
    """Within the error that rounding eta itself makes: eta * 2^-52 in e^eta, times e^eta in e^-e^eta.

    Below 1e-300 float64 has fewer than 16 digits, so the distance counts, not the ratio.
    """
    if not np.isfinite(ours):
        return False
    tail = min(float(np.exp(min(eta, 7.0))), 1000.0)
    room = 4e-16 * (2.0 + abs(eta)) * (1.0 + tail)
    return abs(mpmath.mpf(ours) - exact) <= room * abs(exact) + mpmath.mpf("1e-307")


@pytest.mark.parametrize("event", [False, True])
@pytest.mark.parametrize("name", ["cloglog", "logit"])
def test_rows_match_mpmath_from_minus_745_to_700(name: str, event: bool) -> None:
    link = LINKS[name]
    ours = (link.event if event else link.survive)(ETA, "observed")
    for part, what in enumerate(("log-likelihood", "score", "information")):
        wrong = [
            (float(e), float(v), str(_exact(name, float(e), event)[part]))
            for e, v in zip(ETA, ours[part], strict=True)
            if not _close(float(v), _exact(name, float(e), event)[part], float(e))
        ]
        assert not wrong, (what, wrong[:3])


@pytest.mark.parametrize("name", ["cloglog", "logit"])
def test_expected_information_is_the_mean_of_the_observed_one(name: str) -> None:
    link = LINKS[name]
    eta = np.linspace(-30.0, 2.0, 200)
    p = link.probability(eta)
    mean = p * link.event(eta, "observed")[2] + (1.0 - p) * link.survive(eta, "observed")[2]
    np.testing.assert_allclose(link.survive(eta, "expected")[2], mean, rtol=1e-11)
    np.testing.assert_allclose(link.event(eta, "expected")[2], mean, rtol=1e-11)


@pytest.mark.parametrize("name", ["cloglog", "logit"])
def test_score_and_information_are_derivatives(name: str) -> None:
    link, h = LINKS[name], 1e-5
    eta = np.linspace(-8.0, 2.5, 60)
    for rows in (link.event, link.survive):
        up, down, at = rows(eta + h, "observed"), rows(eta - h, "observed"), rows(eta, "observed")
        np.testing.assert_allclose((up[0] - down[0]) / (2 * h), at[1], rtol=1e-7, atol=1e-9)
        np.testing.assert_allclose(-(up[1] - down[1]) / (2 * h), at[2], rtol=1e-6, atol=1e-9)


@pytest.mark.parametrize("name", ["cloglog", "logit"])
def test_from_exp_agrees_with_the_forms_on_eta(name: str) -> None:
    link = LINKS[name]
    eta = np.linspace(-60.0, 6.0, 300)
    p, q, information = link.from_exp(np.exp(eta))
    np.testing.assert_allclose(p, link.probability(eta), rtol=2e-14)
    np.testing.assert_allclose(np.log(q), link.survive(eta, "observed")[0], rtol=1e-11, atol=3e-16)
    np.testing.assert_allclose(information, link.survive(eta, "expected")[2], rtol=1e-11)
    assert link.from_exp(np.zeros(1)) == (0.0, 1.0, 0.0)


@pytest.mark.parametrize("name", ["cloglog", "logit"])
def test_odds_and_linear_invert_the_probability(name: str) -> None:
    link = LINKS[name]
    for p in (1e-9, 0.003, 0.5, 0.97):
        eta = np.array([link.linear(p)])
        np.testing.assert_allclose(link.probability(eta), p, rtol=1e-12)
        np.testing.assert_allclose(link.odds(eta), p / (1 - p), rtol=1e-10)
