"""The nearest point beyond a threshold against closed forms and against brute force."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy.optimize import minimize

from stresskit.analyses.nearest import Point, Search, furthest_loss, least_norm, nearest, same

#: misc_checks.json, "worst_case": largest w'x over (x - mu)' S^-1 (x - mu) <= 3^2.
MU, SD = np.array([1.5, 5.0, 2.0]), np.array([2.0, 1.5, 6.0])
CORR = np.array([[1.0, -0.6, 0.4], [-0.6, 1.0, -0.3], [0.4, -0.3, 1.0]])
W = np.array([-0.8, 1.2, -0.25])
WORST_X, WORST_LOSS = (
    np.array([-3.573580615095797, 8.72397723501315, -10.436459800417747]),
    15.936752124196854,
)
ROOT = np.linalg.cholesky(CORR * np.outer(SD, SD))


def searched(value, gradient, size, rows=None, least=None) -> Search:
    none = np.zeros((0, size))
    return Search(
        size,
        lambda points: np.array([value(u) for u in points]),
        lambda u, _: gradient(u),
        none if rows is None else rows,
        np.zeros(0) if least is None else least,
    )


def solved(search: Search, start: np.ndarray) -> Point:
    found = nearest(search, start)
    assert found is not None
    return found


def linear(threshold: float, rows=None, least=None) -> Search:
    slope = ROOT.T @ W
    return searched(lambda u: float(W @ (MU + ROOT @ u)) - threshold, lambda _: slope, 3, rows, least)


def test_the_worst_linear_loss_on_an_ellipsoid_as_published() -> None:
    found = furthest_loss(linear(0.0), 3.0, np.zeros(3))
    assert found.settled
    assert found.value == pytest.approx(WORST_LOSS, rel=1e-9)
    np.testing.assert_allclose(MU + ROOT @ found.u, WORST_X, rtol=1e-6)


def test_the_nearest_path_to_that_loss_is_the_same_one() -> None:
    found = solved(linear(WORST_LOSS), np.zeros(3))
    assert found.settled
    assert found.distance == pytest.approx(3.0, rel=1e-6)
    np.testing.assert_allclose(MU + ROOT @ found.u, WORST_X, rtol=1e-5)


def test_a_floor_is_kept_and_the_rest_makes_up_for_it() -> None:
    rows, least = ROOT[[0]], np.array([-2.0 - MU[0]])  # the first variable stays at or above -2
    found = solved(linear(WORST_LOSS, rows, least), np.zeros(3))
    x = MU + ROOT @ found.u
    assert x[0] >= -2.0 - 1e-9
    assert W @ x >= WORST_LOSS
    want = minimize(
        lambda u: u @ u, np.ones(3), method="SLSQP", tol=1e-14,
        constraints=[
            {"type": "ineq", "fun": lambda u: W @ (MU + ROOT @ u) - WORST_LOSS},
            {"type": "ineq", "fun": lambda u: (MU + ROOT @ u)[0] + 2.0},
        ],
    )  # fmt: skip
    assert found.distance == pytest.approx(float(np.linalg.norm(want.x)), rel=1e-5)
    worst = furthest_loss(linear(0.0, rows, least), 3.0, np.zeros(3))
    assert worst.distance <= 3.0 + 1e-9
    assert (MU + ROOT @ worst.u)[0] >= -2.0 - 1e-9
    assert 0.0 < worst.value < WORST_LOSS


def test_a_curved_threshold_by_brute_force() -> None:
    a, b = np.array([1.0, 0.4]), np.array([[0.15, 0.05], [0.05, -0.1]])
    search = searched(lambda u: float(a @ u + u @ b @ u) - 2.0, lambda u: a + 2 * b @ u, 2)
    found = solved(search, np.zeros(2))
    angle = np.linspace(0, 2 * np.pi, 20_001)
    way = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    square, slope = np.einsum("ai,ij,aj->a", way, b, way), way @ a
    with np.errstate(invalid="ignore", divide="ignore"):
        r = (-slope + np.sqrt(slope**2 + 8.0 * square)) / (2.0 * square)
    best = np.nanmin(np.where(r > 0, r, np.nan))
    assert found.settled
    assert found.value >= 0.0
    assert found.distance == pytest.approx(best, rel=1e-5)


def test_two_ways_out_are_two_solutions_and_coming_back_to_one_is_none() -> None:
    # a valley with the threshold at both ends: u0 = 2 and u0 = -3
    search = searched(
        lambda u: float((u[0] - 2.0) * (u[0] + 3.0)), lambda u: np.array([2.0 * u[0] + 1.0, 0.0]), 2
    )
    near, far = solved(search, np.array([1.0, 0.5])), solved(search, np.array([-2.0, 0.0]))
    np.testing.assert_allclose(near.u, [2.0, 0.0], atol=1e-5)
    np.testing.assert_allclose(far.u, [-3.0, 0.0], atol=1e-5)
    assert not same(near, far)
    assert nearest(search, np.array([1.5, 1.0]), [near]) is None


def test_a_function_that_saturates_is_not_reached_and_says_so() -> None:
    search = searched(
        lambda u: float(np.tanh(u[0])) - 2.0, lambda u: np.array([1 - np.tanh(u[0]) ** 2, 0.0]), 2
    )
    assert not solved(search, np.zeros(2)).settled


@settings(max_examples=60, deadline=None)
@given(
    arrays(np.float64, (3, 4), elements=st.floats(-3, 3)), arrays(np.float64, 3, elements=st.floats(-2, 2))
)
def test_least_norm_is_feasible_and_no_projection_improves_it(rows: np.ndarray, least: np.ndarray) -> None:
    found = least_norm(rows, least)
    if found is None or np.linalg.norm(found) > 1e3:
        return
    slack = rows @ found - least
    assert slack.min() >= -1e-7 * max(1.0, float(np.abs(found).max()))
    active = rows[slack < 1e-6 * max(1.0, float(np.abs(found).max()))]
    # the optimum is a combination of the rows that bind, with weights of no wrong sign (Karush-Kuhn-Tucker)
    if not active.size:
        np.testing.assert_allclose(found, 0.0, atol=1e-9)
        return
    want = minimize(
        lambda w: float(((active.T @ w - found) ** 2).sum()), np.zeros(active.shape[0]),
        bounds=[(0, None)] * active.shape[0], method="L-BFGS-B", options={"ftol": 1e-18, "gtol": 1e-12},
    )  # fmt: skip
    assert want.fun <= 1e-6 * max(1.0, float(found @ found))
