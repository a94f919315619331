"""Losses in lanes: tables, values loan by loan, threads, years; all against the plain route in numpy to 1e-12."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from stresskit.core.errors import NumericError, TextError
from stresskit.core.period import Frequency
from stresskit.core.values import AFTERWARDS
from stresskit.loss.assess import LossResult, assess
from stresskit.loss.book import BLOCK, DENSE_BLOCK, Route, prepare_book
from stresskit.loss.interfaces import YearFlows
from stresskit.loss.lgd import StaticLgd, lgd_per_loan, lgd_source
from stresskit.loss.money import Money, has_recursion
from stresskit.projection import packing
from stresskit.projection.packing import pack
from tests.oracle.worlds import AS_OF, fitted, table
from tests.projection.world import (
    ONE,
    THREE,
    TWO,
    Contracts,
    Moving,
    SlowLgd,
    StepLgd,
    book,
    by_tiles,
    losses,
)

MONTH = Frequency.MONTH
PATH = table(MONTH, AS_OF[MONTH] + 1, 60, seed=3)
LOSS = losses()


def cells_of(n: int) -> np.ndarray:
    return (np.arange(n) * 7) % 5


def run(portfolio: Any, fits: Any, *, loss: Any = LOSS, path: Any = PATH, **more: Any) -> LossResult:
    cells = cells_of(portfolio.n_loans)
    return assess(portfolio, fits, path, loss, cells=cells, n_cells=5, **more)


def compare(
    got: LossResult, flows: dict[str, np.ndarray], loans: dict[str, np.ndarray], portfolio: Any
) -> None:
    size, n = float(portfolio.balance.max()), portfolio.n_loans
    for name, values in loans.items():
        scale = size if name.startswith(("el", "exposed")) else 1.0
        np.testing.assert_allclose(got.loans[name], values, rtol=0, atol=1e-12 * scale, err_msg=name)
    for cell in range(5):
        mine = cells_of(n) == cell
        for name, values in flows.items():
            scale = size * n if name in ("balance", "default_amount", "exposed", "el") else n
            np.testing.assert_allclose(
                got.cells[name][cell], values[mine].sum(axis=0), rtol=0, atol=1e-12 * scale, err_msg=name
            )


def same(one: LossResult, two: LossResult, rtol: float = 0.0) -> None:
    for a, b in ((one.loans, two.loans), (one.cells, two.cells)):
        for name in a:
            if rtol:
                np.testing.assert_allclose(a[name], b[name], rtol=rtol, atol=1e-12, err_msg=name)
            else:
                np.testing.assert_array_equal(a[name], b[name], err_msg=name)


@pytest.mark.parametrize("cap", [None, 30, 7])
@pytest.mark.parametrize("name", [ONE, TWO, THREE])
def test_tables_are_the_plain_route(name: str, cap: int | None) -> None:
    portfolio, fits = book(1500), fitted(name, MONTH)
    flows, loans, _ = by_tiles(
        portfolio, fits, PATH, Money(portfolio, LOSS, lgd_source(LOSS.lgd, portfolio)), cap=cap
    )
    compare(run(portfolio, fits, cap=cap), flows, loans, portfolio)


@pytest.mark.parametrize("name", [TWO, THREE])
def test_more_groups_than_tables_take(name: str) -> None:
    """A number times the age: every loan is its own group, and the cause is added up loan by loan."""
    portfolio, fits = book(9000, term=20), fitted(name, MONTH)
    prepared = prepare_book(portfolio, fits, LOSS, cells=cells_of(9000), n_cells=5)
    assert prepared.factors.grouped == (name == THREE)
    flows, loans, _ = by_tiles(portfolio, fits, PATH, prepared.money, cap=None)
    compare(prepared.along([Route(PATH)])[0], flows, loans, portfolio)


def test_values_loan_by_loan_give_the_figures_of_the_tables() -> None:
    portfolio, fits = book(3000), fitted(TWO, MONTH)
    plain = run(portfolio, fits)
    slow = SlowLgd(lgd_per_loan(LOSS.lgd, portfolio))
    same(run(portfolio, fits, lgd=slow), plain, rtol=1e-12)
    same(run(portfolio, fits, contracts=Contracts(portfolio, "annuity", 1.5)), plain, rtol=1e-12)
    still = {c: Moving(f, 0.0) for c, f in fits.items()}
    same(run(portfolio, still, contracts=Contracts(portfolio, "annuity", 1.5)), plain, rtol=1e-12)


@pytest.mark.parametrize("name", [ONE, TWO, THREE])
@pytest.mark.parametrize("discount", ["rate", 0.07, "none"])
def test_moving_columns_contracts_and_lgd_along_the_path(name: str, discount: Any) -> None:
    portfolio, loss = book(1300), losses(discount=discount, timing="end")
    fits = {c: Moving(f, 1.5) if c == "default" else f for c, f in fitted(name, MONTH).items()}
    contracts = Contracts(portfolio, "linear", 0.5, more=1.3)
    flows, loans, _ = by_tiles(
        portfolio, fits, PATH, Money(portfolio, loss, StepLgd()), cap=40, contracts=contracts
    )
    got = run(portfolio, fits, loss=loss, contracts=contracts, lgd=StepLgd(), cap=40)
    compare(got, flows, loans, portfolio)
    without = run(portfolio, fitted(name, MONTH), loss=loss, cap=40)
    assert (got.loans["pd_lifetime"] > without.loans["pd_lifetime"]).all()


@pytest.mark.parametrize("moving", [False, True])
def test_the_same_bits_for_any_number_of_threads(moving: bool) -> None:
    n = 3 * (DENSE_BLOCK if moving else BLOCK) + 77
    portfolio, fits = book(n, term=15), fitted(TWO if moving else THREE, MONTH)
    more = {"contracts": Contracts(portfolio, "bullet", 0.0), "lgd": StepLgd()} if moving else {}
    one = run(portfolio, fits, threads=1, **more)
    for threads in (2, 3, 8):
        same(run(portfolio, fits, threads=threads, **more), one)


def test_several_paths_together_are_each_by_itself() -> None:
    portfolio, fits = book(2500), fitted(THREE, MONTH)
    prepared = prepare_book(portfolio, fits, LOSS, cells=cells_of(2500), n_cells=5, cap=33)
    paths = [table(MONTH, AS_OF[MONTH] + 1, 60, seed=k) for k in range(3)]
    told: list[tuple[int, int]] = []
    together = prepared.along([Route(p) for p in paths], progress=lambda a, b: told.append((a, b)))
    for path, found in zip(paths, together, strict=True):
        same(run(portfolio, fits, path=path, cap=33), found)
    assert told == [(k + 1, len(told)) for k in range(len(told))]


def test_a_loan_has_the_same_bits_in_any_company() -> None:
    """Neighbours with much larger hazards, other lives, other cells."""
    portfolio, fits = book(700), fitted(THREE, MONTH)
    whole = run(portfolio, fits)
    wild = portfolio.static["push"].copy()
    wild[::2] += 6.0
    other = run(replace(portfolio, static={**portfolio.static, "push": wild}), fits)
    for name, values in whole.loans.items():
        np.testing.assert_array_equal(values[1::2], other.loans[name][1::2], err_msg=name)


def test_hazards_past_every_number() -> None:
    """eta of +-2,000: nothing overflows, defaults are certain or impossible."""
    portfolio, fits = book(40), fitted(THREE, MONTH)
    push = np.where(np.arange(40) % 2 == 0, 2000.0, -2000.0)
    odd = replace(portfolio, static={**portfolio.static, "push": push})
    got = run(odd, fits).loans
    np.testing.assert_allclose(got["pd_lifetime"][::2], 1.0, rtol=0, atol=1e-12)
    np.testing.assert_allclose(got["pd_no_payoff"], (push > 0).astype(float), rtol=0, atol=1e-12)
    assert (got["pd_lifetime"][1::2] == 0.0).all()


def test_where_the_path_was_given_and_where_not() -> None:
    """beyond_path with a flag that comes and goes."""
    portfolio, fits = book(400), fitted(TWO, MONTH)
    flags = np.zeros_like(PATH.flags)
    flags[[3, 4, 9, 20, 21, 22, 59], 0] = AFTERWARDS
    path = replace(PATH, flags=flags)
    flows, _, _ = by_tiles(portfolio, fits, path, Money(portfolio, LOSS, StepLgd()), cap=None)
    after = (flags[:50, 0] == AFTERWARDS)[: flows["default"].shape[1]]
    want = flows["default"][:, after].sum(axis=1)
    np.testing.assert_allclose(run(portfolio, fits, path=path).loans["beyond_path"], want, rtol=0, atol=1e-13)


def flows_by_tiles(
    portfolio: Any, fits: Any, money: Money, edges: list[int], **more: Any
) -> dict[str, np.ndarray]:
    flows, _, m = by_tiles(portfolio, fits, PATH, money, **more)
    steps = flows["default"].shape[1]
    amount = flows["default"] * m.exposure
    parts = {n: flows[n] for n in ("default", "payoff", "default_amount", "el")} | {"loss": amount * m.lgd}
    first = [0, *edges[:-1]]
    out = {
        n: np.stack([v[:, a:b].sum(axis=1) for a, b in zip(first, edges)], axis=1) for n, v in parts.items()
    }
    ends = [min(e, steps) - 1 for e in edges]
    out["survival"] = flows["on_book"][:, ends]
    out["balance"] = flows["on_book"][:, ends] * m.balance[:, [e + 1 for e in ends]]
    grown = np.diff(flows["matured"], axis=1, prepend=0.0)
    out["matured"] = np.stack([grown[:, a:b].sum(axis=1) for a, b in zip(first, edges)], axis=1)
    return out


@pytest.mark.parametrize("moving", [False, True])
@pytest.mark.parametrize("cap", [None, 33])
def test_flows_by_year(moving: bool, cap: int | None) -> None:
    portfolio, fits = book(2600), fitted(THREE, MONTH)
    more: dict[str, Any] = {"contracts": Contracts(portfolio, "annuity", 1.0, more=1.2)} if moving else {}
    source: Any = StepLgd() if moving else lgd_source(LOSS.lgd, portfolio)
    edges = [4, 16, 28, 40]
    seen: list[YearFlows] = []
    got = run(portfolio, fits, cap=cap, lgd=source, years=edges, on_years=seen.append, **more)
    same(run(portfolio, fits, cap=cap, lgd=source, **more), got)
    loans = np.concatenate([y.loans for y in seen])
    assert np.sort(loans).tolist() == list(range(2600))
    want = flows_by_tiles(portfolio, fits, Money(portfolio, LOSS, source), edges, cap=cap, **more)
    for name, values in want.items():
        ours = np.concatenate([getattr(y, name) for y in seen])
        scale = 1e5 if name in ("default_amount", "el", "loss", "balance") else 1.0
        np.testing.assert_allclose(ours, values[loans], rtol=0, atol=1e-12 * scale, err_msg=name)
    discount = np.concatenate([y.discount for y in seen])
    lives = portfolio.remaining[loans][:, None] >= np.array(edges)[None, :]
    lives &= np.array(edges)[None, :] <= (cap or 99)
    factor = (1 + portfolio.rate[loans] / 12)[:, None] ** -np.array(edges, dtype=float)
    np.testing.assert_allclose(discount[lives], factor[lives], rtol=1e-12)
    if cap is None:
        parts = sum(
            np.concatenate([getattr(y, n) for y in seen])[:, :3] for n in ("default", "payoff", "matured")
        )
        left = np.concatenate([y.survival for y in seen])[:, 2]
        assert (parts.sum(axis=1) + left <= 1 + 1e-12).all()  # a third cause takes the rest


def test_refusals() -> None:
    portfolio, fits = book(50), fitted(TWO, MONTH)
    moving = {c: Moving(f, 1.0) for c, f in fits.items()}
    with pytest.raises(TextError, match=r"change over time \(ltv\) and no path is"):
        run(portfolio, moving)
    with pytest.raises(TextError, match="no path is"):
        run(portfolio, moving, contracts=replace(Contracts(portfolio, "annuity", 0.0), names=("age",)))
    with pytest.raises(NumericError, match="exposures along the path have numbers that are not finite"):
        run(portfolio, fits, contracts=Contracts(portfolio, "annuity", 0.0, more=np.nan))
    with pytest.raises(NumericError, match="needs a fit for 'default'"):
        run(portfolio, {"payoff": fits["payoff"]})


def test_rates_whose_powers_leave_the_numbers_take_the_closed_form() -> None:
    portfolio = book(30, term=3)
    steep = replace(portfolio, rate=np.full(30, -11.9), remaining=np.full(30, 700))
    loss = losses(discount=0.05)
    assert not has_recursion(loss, steep)
    assert has_recursion(losses(exposure={"schedule": "linear"}), steep)
    fits = fitted(ONE, MONTH)
    money = Money(steep, loss, StaticLgd(lgd_per_loan(loss.lgd, steep)))
    flows, loans, _ = by_tiles(steep, fits, PATH, money, cap=20)
    compare(run(steep, fits, loss=loss, cap=20), flows, loans, steep)


@pytest.mark.parametrize("room", [packing._ROOM, -20_000])
def test_packing_puts_every_loan_into_one_lane(room: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """With combinations of cell and row counted, and with too many of them to be counted."""
    monkeypatch.setattr(packing, "_ROOM", room)
    rng = np.random.default_rng(8)
    cell, row, life = rng.integers(0, 4, 5000), rng.integers(0, 9, 5000), rng.integers(1, 90, 5000)
    p = pack(cell, row, life)
    real = p.loan[p.loan >= 0]
    assert np.sort(real).tolist() == list(range(5000))
    assert (p.size % 8 == 0).all()
    assert p.size.max() == 64
    for c in range(p.start.size):
        mine = p.loan[p.start[c] : p.start[c] + p.size[c]]
        mine = mine[mine >= 0]
        assert (row[mine] == p.row[c]).all()
        assert len(set(cell[mine])) == 1
        assert (life[mine].min(), life[mine].max()) == (p.least[c], p.steps[c])
    for r in range(p.cell.size):
        mine = p.loan[p.start[p.cut[r]] : np.append(p.start, p.loan.size)[p.cut[r + 1]]]
        assert set(cell[mine[mine >= 0]]) == {p.cell[r]}
    order = [i for i in p.loan if i >= 0]
    assert order == sorted(range(5000), key=lambda i: (cell[i], row[i], life[i], i))
    cuts = p.blocks(512)
    assert cuts[0] == 0
    assert cuts[-1] == p.cell.size
