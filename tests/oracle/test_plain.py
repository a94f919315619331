"""The plain loop itself, against numbers worked out by hand or published."""

from __future__ import annotations

import math

import mpmath
import pytest

from tests.oracle import plain


def test_who_is_at_risk() -> None:
    def seen(loan: str, *periods: int, origin: int = 0, end: str | None = None) -> list[dict[str, object]]:
        rows = [{"loan": loan, "period": p, "origin": origin, "event": None} for p in periods]
        rows[-1]["event"] = end
        return rows

    observed = [
        *seen("new", 1, 2, 3, end="default"),
        *seen("late", 5, 6, 7),
        *seen("gap", 1, 2, 4, 5, end="payoff"),
        *seen("after", 1, 2, end="default"), {"loan": "after", "period": 3, "origin": 0, "event": None},
    ]  # fmt: skip
    rows = plain.risk_rows(observed)
    got: dict[str, list[int]] = {}
    for row in rows:
        got.setdefault(row["loan"], []).append(row["age"])
    assert got == {"new": [1, 2, 3], "late": [6, 7], "gap": [1, 2, 5], "after": [1, 2]}
    assert [r["age"] for r in plain.risk_rows(observed, "at_risk") if r["loan"] == "late"] == [5, 6, 7]


@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("eta", [-60.0, -20.0, -9.3, -1.0, 0.0, 2.0, 5.0])
def test_logs_against_mpmath(link: str, eta: float) -> None:
    with mpmath.workdps(200):
        x = mpmath.mpf(eta)
        p = 1 - mpmath.exp(-mpmath.exp(x)) if link == "cloglog" else 1 / (1 + mpmath.exp(-x))
        assert plain.log_event(eta, link) == pytest.approx(float(mpmath.log(p)), rel=1e-13)
        assert plain.log_survival(eta, link) == pytest.approx(float(mpmath.log(1 - p)), rel=1e-13)
        assert plain.probability(eta, link) == pytest.approx(float(p), rel=1e-13)


def test_exits_compete_by_their_odds() -> None:
    stay, leave = plain.compete({"default": 0.5, "payoff": 0.2})
    odds = {"default": 1.0, "payoff": 0.25}
    assert stay == pytest.approx(1 / 2.25)
    assert leave == pytest.approx({c: o / 2.25 for c, o in odds.items()})


def test_annuity_against_published_arithmetic() -> None:
    """100,000 at 6 % nominal, 360 months: payment 599.55052515; balances after k payments (annuity formula)."""
    owed = plain.balances(100_000, 0.06 / 12, 360, "annuity")
    for k, balance in ((1, 99900.449475), (12, 98771.988288), (180, 71048.844451), (359, 596.567687)):
        assert owed[k] == pytest.approx(balance, abs=1e-6)
    assert plain.balances(1200, 0.0, 12, "annuity") == pytest.approx([1200 - 100 * k for k in range(12)])
    assert plain.balances(1200, 0.01, 3, "linear") == [1200, 800, 400]
    assert plain.balances(1200, 0.01, 3, "bullet") == [1200, 1200, 1200]


def test_two_periods_by_hand() -> None:
    """Constant P(default) 0.1 and P(payoff) 0.2 (logit), two periods, 1,000 at 12 % nominal, linear, LGD 0.4."""
    etas = {"default": lambda age, h: math.log(0.1 / 0.9), "payoff": lambda age, h: math.log(0.2 / 0.8)}
    loan = {"age": 3, "remaining": 2, "balance": 1000.0, "rate": 0.12}
    steps = plain.project_loan(
        loan, etas, {"default": "logit", "payoff": "logit"}, schedule="linear", lgd=0.4, timing="mid"
    )
    whole = 1 + 1 / 9 + 1 / 4
    stay, default = 1 / whole, (1 / 9) / whole
    got = plain.measures(steps, 3, largest_age=4)
    assert got["pd_lifetime"] == pytest.approx(default * (1 + stay))
    assert got["pd_no_payoff"] == pytest.approx(1 - 0.9**2)
    assert got["matured"] == pytest.approx(stay**2)
    assert got["extrapolated"] == pytest.approx(stay * default)
    assert got["el_lifetime"] == pytest.approx(0.4 * default * (1000 * 1.01**-0.5 + stay * 500 * 1.01**-1.5))
    totals = plain.cell_totals([steps, steps[:1]], 3)
    assert totals[1]["default"] == pytest.approx(stay * default)
    assert totals[2] == {
        **dict.fromkeys(totals[2], 0.0),
        "on_book": pytest.approx(stay),
        "matured": pytest.approx(stay**2),
    }
