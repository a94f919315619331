"""Scheduled balances against published loan tables, payment by payment, and at the edges."""

from __future__ import annotations

from decimal import Decimal, localcontext

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.kernels.schedule import SCHEDULES, balance_after, balance_path

#: Level payments and balances by the annuity formula (Kellison, The Theory of Interest, ch. 5), to 6 decimals:
#: principal, nominal annual rate, periods a year, payments, (k, balance after payment k) ...
TABLE = [
    (
        100000,
        0.06,
        12,
        360,
        [(1, 99900.449475), (12, 98771.988288), (180, 71048.844451), (359, 596.567687), (360, 0)],
    ),
    (
        200000,
        0.04,
        12,
        360,
        [(1, 199711.836076), (12, 196477.927133), (180, 129085.599193), (359, 951.658396)],
    ),
    (
        250000,
        0.035,
        12,
        300,
        [(1, 249477.607741), (12, 243629.748265), (150, 151877.836218), (299, 1247.919161)],
    ),
    (
        10000,
        0.12,
        12,
        36,
        [(1, 9767.856902), (12, 7055.844458), (18, 5446.571730), (35, 328.854553), (36, 0)],
    ),
    (
        1000000,
        0.10,
        1,
        5,
        [(1, 836202.519205), (2, 656025.290331), (3, 457830.338569), (4, 239815.891632), (5, 0)],
    ),
    (
        1000000,
        0.06,
        1,
        5,
        [(1, 822603.599569), (2, 634563.415112), (3, 435240.819587), (4, 223958.868331), (5, 0)],
    ),
]


def path(balance: float, rate: float, remaining: int, steps: int, schedule: str = "annuity") -> np.ndarray:
    return balance_path(np.array([balance]), np.array([rate]), np.array([remaining]), steps, schedule)[0]


@pytest.mark.parametrize(("principal", "rate", "per_year", "n", "balances"), TABLE)
def test_published_balances(
    principal: float, rate: float, per_year: int, n: int, balances: list[tuple[int, float]]
) -> None:
    found = path(principal, rate / per_year, n, n)
    for k, expected in balances:
        assert found[k] == pytest.approx(expected, abs=6e-7)


@settings(max_examples=60, deadline=None)
@given(st.floats(1e-6, 0.05), st.integers(1, 400))
def test_payment_by_payment(rate: float, n: int) -> None:
    """Interest on, level payment off, in 50 digits: not the closed form."""
    with localcontext() as context:
        context.prec = 50
        r, owed = Decimal(rate), Decimal(1000)
        payment = owed * r / (1 - (1 + r) ** -n)
        balances = [owed]
        for _ in range(n):
            owed = owed * (1 + r) - payment
            balances.append(owed)
    np.testing.assert_allclose(path(1000.0, rate, n, n), [float(b) for b in balances], rtol=1e-12, atol=1e-9)


@pytest.mark.parametrize("rate", [1e-16, 1e-12, 1e-8, -1e-10, -0.002, 0.5])
def test_extreme_rates_against_many_digits(rate: float) -> None:
    mpmath.mp.dps = 60
    n, found = 240, path(1.0, rate, 240, 240)
    for k in (0, 1, 120, 239):
        v = 1 / (1 + mpmath.mpf(rate))
        exact = (1 - v ** (n - k)) / (1 - v**n)
        assert found[k] == pytest.approx(float(exact), rel=1e-13)


def test_no_rate_is_linear_and_the_limit_of_small_ones() -> None:
    flat = path(1200.0, 0.0, 12, 14)
    assert flat.tolist() == [1200.0 - 100.0 * k for k in range(13)] + [0.0, 0.0]
    np.testing.assert_allclose(path(1200.0, 1e-14, 12, 14), flat, rtol=1e-12)
    np.testing.assert_array_equal(path(1200.0, 0.01, 12, 14, "linear"), flat)


def test_bullet() -> None:
    assert path(5.0, 0.01, 3, 5, "bullet").tolist() == [5.0, 5.0, 5.0, 0.0, 0.0, 0.0]


@pytest.mark.parametrize("schedule", SCHEDULES)
def test_every_schedule(schedule: str) -> None:
    """Starts at the balance, falls, ends at 0 in the last payment and stays there; doubling doubles."""
    balance, rate = np.array([100.0, 7.0, 0.0]), np.array([0.01, 0.0, 0.02])
    found = balance_path(balance, rate, np.array([10, 4, 1]), 12, schedule)
    assert found.shape == (3, 13)
    np.testing.assert_array_equal(found[:, 0], balance)
    assert (np.diff(found, axis=1) <= 0).all()
    assert (found[0, 10:] == 0).all()
    assert (found[1, 4:] == 0).all()
    assert (found[0, :10] > 0).all()
    np.testing.assert_array_equal(
        balance_path(2 * balance, rate, np.array([10, 4, 1]), 12, schedule), 2 * found
    )


@pytest.mark.parametrize("schedule", SCHEDULES)
def test_path_continues_from_any_point(schedule: str) -> None:
    """A loan rolled four payments, then taken up anew with what is left, goes on as if nothing had been."""
    whole = path(100.0, 0.02, 15, 15, schedule)
    np.testing.assert_allclose(path(whole[4], 0.02, 11, 11, schedule), whole[4:], rtol=1e-13, atol=1e-12)


def test_many_loans_at_their_own_steps() -> None:
    steps = np.array([0, 3, 9])
    found = balance_after(np.full(3, 50.0), np.full(3, 0.01), np.full(3, 8), steps, "annuity")
    np.testing.assert_array_equal(found, [50.0, path(50.0, 0.01, 8, 3)[3], 0.0])


def test_no_payments_to_go_means_nothing_owed() -> None:
    for schedule in SCHEDULES:
        assert path(9.0, 0.01, 0, 2, schedule).tolist() == [0.0, 0.0, 0.0]


def test_impossible_calls() -> None:
    with pytest.raises(ValueError, match="none of annuity, linear, bullet"):
        path(1.0, 0.01, 5, 5, "balloon")
    with pytest.raises(ValueError, match="must not be negative"):
        path(1.0, 0.01, -1, 5)
    with pytest.raises(ValueError, match="-100 %"):
        path(1.0, -1.0, 5, 5)


@pytest.mark.parametrize("rate", [-0.999999, -0.9, -0.5, -0.01])
def test_negative_rates_overflow_nowhere(rate: float) -> None:
    """Against 60 digits of mpmath; a power of 1/(1+r) alone would be beyond the largest double."""
    steps = np.array([0, 1, 2, 10, 359, 360, 361])
    found = balance_after(np.array([100.0]), np.array([rate]), np.array([360]), steps, "annuity")
    with mpmath.workdps(60):
        v = 1 / (1 + mpmath.mpf(rate))
        exact = [100 * (1 - v ** max(360 - int(k), 0)) / (1 - v**360) for k in steps]
    assert found.tolist() == pytest.approx([float(x) for x in exact], rel=1e-10, abs=1e-300)
