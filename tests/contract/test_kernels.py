"""Compiled and closed-form balances against published figures, closed forms and examples worked by hand."""

from __future__ import annotations

import csv

import numpy as np
import pytest

from stresskit.kernels.annuity import annuity_balances, hold_after
from stresskit.kernels.runoff import payment_due, run_off
from stresskit.kernels.schedule import balance_path
from tests.shared_inputs import shared

#: Level-payment schedules computed payment by payment in decimal arithmetic, rounded at the end to the digits shown:
#: principal, annual rate, payments a year, n, payment, balances after k.
ANNUITIES = [
    (100000.0, 0.06, 12, 360, 599.55052515, {1: 99900.449475, 12: 98771.988288, 180: 71048.844451, 359: 596.567687}),
    (10000.0, 0.12, 12, 36, 332.14309813, {1: 9767.856902, 12: 7055.844458, 18: 5446.57173, 35: 328.854553}),
    (1000000.0, 0.1, 1, 5, 263797.48079475, {1: 836202.519205, 3: 457830.338569, 4: 239815.891632}),
]  # fmt: skip


def fixed(
    balance: float,
    rate: float,
    n: int,
    steps: int,
    *,
    wait: int = 0,
    kept: float = 0.0,
    kind: str = "annuity",
):
    return run_off(
        np.array([balance]), np.array([[rate]]), np.array([n]), steps, kind,
        interest_only=np.array([wait]), kept=np.array([kept]),
    )[0]  # fmt: skip


def changing(balance: float, rates: list[float], n: int, *, wait: int = 0, kept: float = 0.0):
    return run_off(
        np.array([balance]), np.array([rates]), np.array([n]), len(rates), "annuity",
        interest_only=np.array([wait]), kept=np.array([kept]),
    )[0]  # fmt: skip


@pytest.mark.parametrize("case", ANNUITIES)
def test_published_annuity_schedules(case) -> None:
    principal, annual, per_year, n, payment, after = case
    path = fixed(principal, annual / per_year, n, n)
    stepwise = changing(principal, [annual / per_year] * n, n)
    for k, wanted in after.items():
        assert abs(path[k] - wanted) < 5e-7 * 2
        assert abs(stepwise[k] - wanted) < 5e-7 * 2
    assert path[n] == stepwise[n] == 0.0
    due = payment_due(np.array([principal]), np.array([annual / per_year]), np.array([n]), "annuity")
    assert abs(due[0] - payment) < 5e-9


def test_shared_annuity_table() -> None:
    place = shared("checks/annuity.csv")
    with place.open() as file:
        rows = list(csv.DictReader(file))
    assert len(rows) > 20
    for row in rows:
        per_year = 12 if row["period"] == "monthly" else 1
        path = fixed(float(row["principal"]), float(row["rate"]) / per_year, int(row["n"]), int(row["n"]))
        assert abs(path[int(row["k"])] - float(row["balance_after_k"])) < 1e-6


def test_the_recurrence_is_the_closed_form_at_every_rate_and_term() -> None:
    rng = np.random.default_rng(8)
    rates = np.concatenate([[0.0, 1e-15, 1e-9, -1e-12, -0.02, 0.3], rng.uniform(-0.01, 0.02, 300)])
    n = rng.integers(1, 480, rates.size)
    balance = rng.uniform(1.0, 1e6, rates.size)
    for steps in (1, 17, 120, 480):
        found = annuity_balances(
            balance, np.zeros(rates.size), rates[:, None], n, np.zeros(rates.size, dtype=np.int64), steps
        )
        wanted = balance_path(balance, rates, n, steps, "annuity")
        np.testing.assert_allclose(found, wanted, rtol=1e-12, atol=1e-300)
        np.testing.assert_array_equal(found[:, 0], balance)


def test_interest_only_then_annuity() -> None:
    """Nothing is repaid for 24 months; then a level payment over the 96 that are left: closed form of the rest."""
    path = fixed(80000.0, 0.004, 120, 120, wait=24)
    assert (path[:25] == 80000.0).all()
    left = np.arange(96, -1, -1)
    np.testing.assert_allclose(
        path[24:], 80000.0 * (1 - 1.004 ** -left.astype(float)) / (1 - 1.004**-96.0), rtol=1e-12
    )
    np.testing.assert_allclose(changing(80000.0, [0.004] * 120, 120, wait=24), path, rtol=1e-12)
    whole = fixed(80000.0, 0.004, 12, 14, wait=50)
    assert whole.tolist() == [80000.0] * 12 + [0.0] * 3


def test_balloon_is_an_annuity_to_the_amount_that_stays_due() -> None:
    """Prospective: balance after k = payment x a(n - k) + balloon x v^(n - k), payment = (B - G v^n) / a(n)."""
    r, n, b, g = 0.005, 60, 30000.0, 12000.0
    v = 1 / (1 + r)
    payment = (b - g * v**n) / ((1 - v**n) / r)
    k = np.arange(n)
    wanted = payment * (1 - v ** (n - k)) / r + g * v ** (n - k)
    path = fixed(b, r, n, n, kept=g)
    np.testing.assert_allclose(path[:-1], wanted, rtol=1e-12)
    assert path[-1] == 0.0
    np.testing.assert_allclose(changing(b, [r] * n, n, kept=g), path, rtol=1e-12)
    due = payment_due(np.array([b]), np.array([r]), np.array([n]), "annuity", kept=g)
    np.testing.assert_allclose(due, payment, rtol=1e-12)
    straight = fixed(b, r, n, n, kept=g, kind="linear")
    np.testing.assert_allclose(straight[:-1], b - (b - g) * k / n, rtol=1e-12)
    assert (fixed(10.0, r, 3, 3, kept=99.0) == [10.0, 10.0, 10.0, 0.0]).all()


def test_payment_is_set_anew_at_a_reset() -> None:
    """Worked by hand, annual: 1,000 over 3 years at 10 %, set to 20 % after the first payment.

    Payment 1: 1000 x 0.1 / (1 - 1.1^-3) = 402.1148; balance 1100 - 402.1148 = 697.8852.
    Payment 2: 697.8852 x 0.2 / (1 - 1.2^-2) = 456.7976; balance 837.4622 - 456.7976 = 380.6647; 3: 456.7976.
    """
    path = changing(1000.0, [0.1, 0.2, 0.2], 3)
    np.testing.assert_allclose(path, [1000.0, 697.88520, 380.66465, 0.0], atol=5e-6)
    assert abs(path[2] * 1.2 - 456.79758) < 5e-6


def test_the_last_value_in_life_is_held() -> None:
    values = np.arange(12.0).reshape(3, 4)
    held = hold_after(values, np.array([1, 3, 9]))
    assert held.tolist() == [[0.0] * 4, [4.0, 5.0, 6.0, 6.0], [8.0, 9.0, 10.0, 11.0]]
    view = np.broadcast_to(np.arange(4.0), (2, 4))
    assert hold_after(view, np.array([2, 4])).tolist() == [[0.0, 1.0, 1.0, 1.0], [0.0, 1.0, 2.0, 3.0]]
    assert view[0, 3] == 3.0


def test_a_rate_of_minus_one_is_refused() -> None:
    with pytest.raises(ValueError, match="-100 %"):
        fixed(1.0, -1.0, 3, 3)
