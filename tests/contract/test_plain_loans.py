"""Every schedule, rate and moving column against one loan and one period at a time."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from stresskit.contract.collateral import collateral_shortfall
from stresskit.contract.paths import ContractPaths, contract_paths
from stresskit.core.values import Portfolio
from tests.contract.books import AS_OF, BACK, KINDS, book, macro, own_schedule, plain_loan, study_of
from tests.contract.plain import Course, Plain, course

STEPS = 150
N = 160


@pytest.fixture(scope="module")
def made(
    tmp_path_factory: pytest.TempPathFactory,
) -> tuple[ContractPaths, Portfolio, list[tuple[Plain, Course]]]:
    rng = np.random.default_rng(77)
    study = study_of(tmp_path_factory.mktemp("plain"))
    history, path = macro(rng)
    portfolio = book(rng, N)
    own = own_schedule(rng, portfolio)
    paths = contract_paths(
        study, portfolio, history=history, path=path, horizon=STEPS, frames={"own.csv": own}
    )
    assert paths is not None
    policy = np.concatenate([history.values["policy_rate"][-1:], path.values["policy_rate"]]) / 100
    use = np.concatenate([history.values["card_use"][-1:], path.values["card_use"]])
    slow = []
    for i in range(N):
        loan = plain_loan(portfolio, i, own)
        follows = use if portfolio.static["kind"][i] == "card" else ()
        slow.append((loan, course(loan, STEPS, policy=policy, use=follows)))
    return paths, portfolio, slow


def close(found: np.ndarray, wanted: object, scale: float = 1.0) -> None:
    np.testing.assert_allclose(found, np.asarray(wanted, dtype=float), rtol=1e-12, atol=1e-12 * scale)


@pytest.mark.parametrize("kind", KINDS)
def test_balances_rates_and_exposures_are_those_of_the_plain_loop(made, kind: str) -> None:
    paths, portfolio, slow = made
    rows = np.flatnonzero(portfolio.static["kind"] == kind)
    balances, rates = paths.balances(rows, STEPS), paths.rates(rows, STEPS)
    exposures = paths.exposures(rows, STEPS)
    assert rows.size == N // len(KINDS)
    for j, i in enumerate(rows):
        loan, wanted = slow[i]
        # the loop subtracts payments, so its error is that of the balance it started from
        close(balances[j], wanted.balances, scale=10 * loan.balance)
        close(rates[j], wanted.rates)
        close(exposures[j], wanted.exposures, scale=10 * max(loan.balance, loan.limit))


def test_moving_columns_are_those_of_the_plain_loop(made) -> None:
    paths, portfolio, slow = made
    history, path = macro(np.random.default_rng(77))
    rows = np.arange(N)
    columns = paths.columns(rows, STEPS)
    assert paths.names == ("current_ltv", "use", "interest_now", "real_rate", "burden", "since")
    expected = {name: np.full((N, STEPS), np.nan) for name in paths.names}
    for i in rows:
        loan, wanted = slow[i]
        s = {name: column[i] for name, column in portfolio.static.items()}
        level = {v: np.concatenate([x, path.values[v]]) for v, x in history.values.items()}
        house = level[f"house_{s['place']}"]
        origin = AS_OF - int(portfolio.age[i]) + 1
        life = min(loan.remaining, STEPS)
        for h in range(1, life + 1):
            before = AS_OF + h - 1
            owed = wanted.balances[h - 1]
            at = max(before, origin) - AS_OF + BACK - 1
            value = s["price"] * house[at] / house[origin - AS_OF + BACK - 1]
            rate = loan.rate if h == 1 else wanted.rates[h - 2]
            expected["current_ltv"][i, h - 1] = owed / value
            expected["use"][i, h - 1] = owed / s["line"]
            expected["interest_now"][i, h - 1] = rate
            expected["real_rate"][i, h - 1] = rate - level["policy_rate"][before - AS_OF + BACK - 1] / 100
            arrears = s["last_arrears"]
            since = 120 if np.isnan(arrears) or arrears > before else min(before - arrears, 60)
            expected["since"][i, h - 1] = since
            now = Plain(
                balance=owed, rate=rate, age=loan.age + h - 1, remaining=loan.remaining - h + 1, schedule=loan.schedule,
                interest_only=loan.interest_only, balloon=loan.balloon, limit=loan.limit, supplied=loan.supplied[h - 1 :],
            )  # fmt: skip
            payment = course(now, 1).payments[0]
            expected["burden"][i, h - 1] = 12 * payment / s["income"]
        for column in columns.values():
            assert (column[i, life:] == column[i, life - 1]).all()
    for name, column in columns.items():
        reached = np.isfinite(expected[name])
        assert reached.sum() > 5000
        # sizes are near 1, payments of a month to income up to 100
        close(column[reached], expected[name][reached], scale=100 if name == "burden" else 10)


def test_collateral_is_that_of_the_plain_loop(made, tmp_path: Path) -> None:
    paths, portfolio, slow = made
    history, path = macro(np.random.default_rng(77))
    study = study_of(tmp_path)
    assert study.collateral is not None
    source = collateral_shortfall(study.collateral, portfolio, history=history, path=path, horizon=STEPS)
    rows = np.arange(N)
    found = source.tile(rows, STEPS, paths.exposures(rows, STEPS))
    floored = 0
    for i in rows:
        loan, wanted = slow[i]
        place, price = portfolio.static["place"][i], portfolio.static["price"][i]
        house = np.concatenate([history.values[f"house_{place}"], path.values[f"house_{place}"]])
        origin = BACK - int(portfolio.age[i])
        for h in range(1, min(loan.remaining, STEPS) + 1):
            value = price * house[BACK - 1 + h] / house[origin]
            lgd = max(0.1, 1 - value * (1 - 0.25) * (1 - 0.04) / wanted.exposures[h - 1])
            floored += lgd == 0.1
            # LGD = 1 - value / EAD: its error is that of EAD, which shrinks to nothing towards maturity
            slack = 1e-11 * loan.balance / wanted.exposures[h - 1] * value / wanted.exposures[h - 1]
            assert abs(found[i, h - 1] - lgd) <= 1e-12 + slack
    assert 0 < floored < found.size


def test_a_block_gives_the_same_bits_whoever_stands_beside_it(made) -> None:
    paths, _, _ = made
    rows = np.arange(N)
    whole = paths.columns(rows, STEPS)
    for part in np.split(np.random.default_rng(5).permutation(N), 8):
        some = paths.columns(part, STEPS)
        for name, column in whole.items():
            np.testing.assert_array_equal(some[name], column[part])
        np.testing.assert_array_equal(paths.exposures(part, STEPS), paths.exposures(rows, STEPS)[part])
