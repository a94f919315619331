"""Contracts replaced like for like: the balance of as_of stands, rates and indices go their way past contract ends."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from stresskit.contract.paths import contract_paths
from stresskit.core.errors import NumericError
from tests.contract.books import AS_OF, BACK, book, macro, own_schedule, plain_loan, study_of
from tests.contract.plain import course

STEPS, N = 60, 160


def test_standing_contracts_are_the_plain_formulas(tmp_path: Path) -> None:
    rng = np.random.default_rng(77)
    study = study_of(tmp_path)
    history, path = macro(rng)
    portfolio = book(rng, N)
    own = own_schedule(rng, portfolio)
    paths = contract_paths(
        study, portfolio, history=history, path=path, horizon=STEPS, frames={"own.csv": own}
    )
    assert paths is not None
    assert (portfolio.remaining < STEPS).sum() > 30
    with pytest.raises(NumericError, match="payment due is not defined"):
        paths.standing(np.arange(N), STEPS).columns()
    paths = replace(paths, moving={n: c for n, c in paths.moving.items() if n != "burden"})
    tile = paths.standing(np.arange(N), STEPS)
    rates, exposures, columns = tile.rates(), tile.exposures(), tile.columns()
    level = {v: np.concatenate([x, path.values[v]]) for v, x in history.values.items()}
    policy = level["policy_rate"][BACK - 1 :] / 100
    for i in range(N):
        loan, s = plain_loan(portfolio, i, own), {n: c[i] for n, c in portfolio.static.items()}
        wanted = course(loan, STEPS, policy=policy).rates
        np.testing.assert_allclose(rates[i], wanted, rtol=1e-12, atol=1e-15)
        house, origin = level[f"house_{s['place']}"], AS_OF - loan.age + 1
        for h in range(1, STEPS + 1):
            before = AS_OF + h - 1
            value = (
                s["price"] * house[max(before, origin) - AS_OF + BACK - 1] / house[origin - AS_OF + BACK - 1]
            )
            rate = loan.rate if h == 1 else wanted[h - 2]
            arrears = s["last_arrears"]
            since = 120 if np.isnan(arrears) or arrears > before else min(before - arrears, 60)
            expected = {
                "current_ltv": loan.balance / value, "use": loan.balance / s["line"], "interest_now": rate,
                "real_rate": rate - policy[h - 1], "since": since,
            }  # fmt: skip
            for name, number in expected.items():
                assert columns[name][i, h - 1] == pytest.approx(number, rel=1e-12, abs=1e-14), name
            drawn = loan.ccf * max(loan.limit - loan.balance, 0.0) if loan.schedule == "revolving" else 0.0
            owed = loan.balance * (1 + loan.accrued * max(wanted[h - 1] / 12, 0.0)) + drawn
            assert exposures[i, h - 1] == pytest.approx(owed, rel=1e-12)
