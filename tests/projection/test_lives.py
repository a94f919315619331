"""The engine against lives drawn one by one, against itself in two pieces, and against published curves."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.kernels.rollforward import period_odds
from stresskit.kernels.schedule import balance_path
from stresskit.loss.assess import LossResult, assess
from stresskit.spec.terms import HazardSpec
from tests.oracle.coefficients import predictor
from tests.oracle.worlds import AS_OF, fitted, history, table
from tests.projection.world import THREE, TWO, Contracts, Moving, book, losses

MONTH = Frequency.MONTH
DATA = Path(__file__).parents[1] / "data" / "curves"
START = AS_OF[MONTH] + 1


def run(portfolio: Any, fits: Any, path: FeatureTable, **more: Any) -> LossResult:
    cells = np.arange(portfolio.n_loans)
    return assess(portfolio, fits, path, more.pop("loss", losses()), cells=cells, n_cells=cells.size, **more)


def conditional(portfolio: Any, fits: Any, path: FeatureTable, steps: int) -> dict[str, np.ndarray]:
    """Cause -> (n, steps) P(cause | at risk), from predictors written in plain Python."""
    odds = {}
    for cause, fit in fits.items():
        eta = predictor(fit)
        values = np.empty((portfolio.n_loans, steps))
        for i in range(portfolio.n_loans):
            columns = {name: v[i] for name, v in portfolio.static.items()}
            for h in range(1, steps + 1):
                macro = dict(zip(path.names, path.values[h - 1], strict=True))
                values[i, h - 1] = eta(int(portfolio.age[i]) + h, columns, macro)
        odds[cause] = period_odds(values, fit.spec.link)
    whole = 1.0 + sum(odds.values())
    return {cause: o / whole for cause, o in odds.items()}


@pytest.mark.slow
@pytest.mark.parametrize("name", [TWO, THREE])
def test_lives_drawn_one_by_one(name: str) -> None:
    """Ten million draws: PD, payoff, balance and EL of every loan within its sampling error.

    Each life throws one die per step; what happens is read off its history, nothing is averaged before. With
    about 60 comparisons at 4.5 standard errors a right engine fails one time in 2,500; the seed is fixed.
    """
    steps, lives, rng = 24, 70_000, np.random.default_rng(77)
    portfolio = replace(book(6, seed=1), remaining=np.array([24, 24, 12, 30, 18, 24]))
    portfolio = replace(portfolio, balance=np.full(6, 1e4))
    fits, path, loss = fitted(name, MONTH), table(MONTH, START, 60, seed=3, size=0.3), losses()
    found = run(portfolio, fits, path, cap=steps, loss=loss)
    p = conditional(portfolio, fits, path, steps)
    rate = portfolio.rate / 12
    owed = balance_path(portfolio.balance, rate, portfolio.remaining, steps, "annuity")
    for i in range(6):
        life = int(min(steps, portfolio.remaining[i]))
        order = list(p)
        edges = np.cumsum([p[c][i, :life] for c in order], axis=0)
        dice = rng.random((lives, life))
        happens = [dice < edges[k] for k in range(len(order))]
        leaves = happens[-1]
        first = np.where(leaves.any(axis=1), leaves.argmax(axis=1), life)
        at = np.minimum(first, life - 1)
        who = np.arange(lives)
        cause = sum((~happens[k][who, at]).astype(int) for k in range(len(order)))
        defaulted = (cause == order.index("default")) & (first < life)
        paid = (cause == order.index("payoff")) & (first < life)
        lgd = {"fixed": 0.2, "floating": 0.45, "stepped": 1.0}[portfolio.static["product"][i]]
        exposure = owed[i, at] * (1 + 1.5 * max(rate[i], 0.0))
        lost = defaulted * lgd * exposure * (1 + rate[i]) ** -(at + 0.5)
        drawn = {
            "pd_12m": defaulted & (first < 12), "pd_lifetime": defaulted, "payoff_lifetime": paid,
            "el_lifetime": lost, "el_12m": lost * (first < 12),
        }  # fmt: skip
        for measure, values in drawn.items():
            error = max(values.std() / np.sqrt(lives), 1e-9)
            assert abs(values.mean() - found.loans[measure][i]) < 4.5 * error, (i, measure)
        for h in (0, 5, life - 1):
            standing = (first >= h) * owed[i, h]
            error = max(standing.std() / np.sqrt(lives), 1e-9)
            assert abs(standing.mean() - found.cells["balance"][i, h]) < 4.5 * error, (i, h)


@pytest.mark.parametrize("name", [TWO, THREE])
@pytest.mark.parametrize("cut", [1, 7, 20])
@pytest.mark.parametrize("moving", [False, True])
def test_a_path_in_two_pieces(name: str, cut: int, moving: bool) -> None:
    """The first piece's survivors, older and with less owed, on the rest of the path: the whole, to 1e-12."""
    portfolio = book(300, seed=9)
    portfolio = replace(portfolio, remaining=np.maximum(portfolio.remaining, cut + 1))
    fits: dict[str, Any] = dict(fitted(name, MONTH))
    path, loss = table(MONTH, START, 60, seed=5, size=0.3), losses()
    owed = balance_path(portfolio.balance, portfolio.rate / 12, portfolio.remaining, cut, "annuity")[:, cut]
    later = replace(
        portfolio, as_of=portfolio.as_of + cut, age=portfolio.age + cut, remaining=portfolio.remaining - cut, balance=owed
    )  # fmt: skip
    more: list[dict[str, Any]] = [{}, {}]
    if moving:
        fits["default"] = Moving(fits["default"], 1.2)
        more = [
            {"contracts": Along(Contracts(b, "annuity", 1.5), s)} for b, s in ((portfolio, 0), (later, cut))
        ]
    whole = run(portfolio, fits, path, loss=loss, **more[0])
    head = run(portfolio, fits, path, loss=loss, cap=cut, **more[0])
    tail = run(later, fits, path, loss=loss, **more[1])
    left = head.cells["on_book"][:, -1]
    factor = (1 + portfolio.rate / 12) ** -float(cut)
    for measure, weight in (
        ("pd_lifetime", left), ("payoff_lifetime", left), ("el_lifetime", left * factor), ("exposed_lifetime", left * factor),
    ):  # fmt: skip
        size = 1e5 if measure.startswith(("el", "exp")) else 1.0
        chained = head.loans[measure] + weight * tail.loans[measure]
        np.testing.assert_allclose(chained, whole.loans[measure], rtol=0, atol=1e-12 * size, err_msg=measure)
    alone = 1 - (1 - head.loans["pd_no_payoff"]) * (1 - tail.loans["pd_no_payoff"])
    np.testing.assert_allclose(alone, whole.loans["pd_no_payoff"], rtol=0, atol=1e-12)
    for measure in ("on_book", "default", "payoff", "balance", "default_amount"):
        ours = whole.cells[measure]
        joined = np.concatenate([head.cells[measure], left[:, None] * tail.cells[measure]], axis=1)
        np.testing.assert_allclose(joined, ours, rtol=0, atol=1e-12 * 1e5, err_msg=measure)


class Along:
    """Contracts whose columns start at a later step of the path."""

    names = ("ltv",)

    def __init__(self, paths: Contracts, start: int) -> None:
        self.paths, self.start, self.afterwards = paths, start, paths.afterwards

    def tile(self, loans: np.ndarray, steps: int) -> Any:
        here, longer = self.paths.tile(loans, steps), self.paths.tile(loans, steps + self.start)

        class Tile:
            balances, rates, exposures = here.balances, here.rates, here.exposures

            @staticmethod
            def columns() -> dict[str, np.ndarray]:
                return {"ltv": longer.columns()["ltv"][:, self.start :]}

        return Tile()


def given_hazard(cause: str, link: str) -> HazardFit:
    """A hazard whose linear predictor is the macro feature named after its cause."""
    risk_set, _ = history(MONTH)
    names = ("eta_default", "eta_payoff")
    values = np.random.default_rng(5).normal(size=(61, 2))
    features = FeatureTable(MONTH, AS_OF[MONTH] - 60, names, values, np.zeros((61, 2), dtype=np.int64))
    terms = [{"macro": f"eta_{cause}"}]
    spec = HazardSpec.model_validate({"link": link, "terms": terms}, strict=False)
    fit = fit_hazard(spec, risk_set, features, cause=cause)
    return replace(
        fit, coefficients=np.array([float(label == f"eta_{cause}") for label in fit.design.labels])
    )


@pytest.mark.parametrize("links", [("cloglog", "cloglog"), ("logit", "cloglog"), ("cloglog", "logit")])
@pytest.mark.parametrize("male", [0, 1])
def test_published_competing_risks(male: int, links: tuple[str, str]) -> None:
    """Progression and death by year (R 4.2.2, survival 3.5-3, data mgus2): hazards in, incidence curves out."""
    want = pd.read_csv(DATA / "mgus2_discrete_cif.csv").query("male == @male and year <= 30")
    want = want[(want["h_pcm"] > 0) & (want["h_death"] > 0) & (want["h_pcm"] + want["h_death"] < 1)]
    steps = int(np.flatnonzero(np.append(want["year"].to_numpy() != np.arange(1, len(want) + 1), True))[0])
    assert steps >= 10
    want = want.iloc[:steps]
    stay = 1 - want["h_pcm"] - want["h_death"]
    etas = []
    for hazard, link in ((want["h_pcm"], links[0]), (want["h_death"], links[1])):
        odds = (hazard / stay).to_numpy()
        etas.append(np.log(odds) if link == "logit" else np.log(np.log1p(odds)))
    path = FeatureTable(
        MONTH,
        START,
        ("eta_default", "eta_payoff"),
        np.stack(etas, axis=1),
        np.zeros((steps, 2), dtype=np.int64),
    )
    fits = {c: given_hazard(c, link) for c, link in zip(("default", "payoff"), links)}
    portfolio = replace(book(100), remaining=np.full(100, steps + 1))
    found = assess(
        portfolio, fits, path, losses(), cells=np.zeros(100, dtype=np.int64), n_cells=1, cap=steps
    ).cells
    for measure, column in (("default", "cif_pcm"), ("payoff", "cif_death")):
        np.testing.assert_allclose(np.cumsum(found[measure][0]) / 100, want[column], rtol=0, atol=1e-13)
    np.testing.assert_allclose(found["on_book"][0] / 100, want["S"], rtol=0, atol=1e-13)


@pytest.mark.parametrize("links", [("cloglog", "logit"), ("logit", "logit")])
def test_a_constant_path_has_a_closed_form(links: tuple[str, str]) -> None:
    """With constant odds o_d and o_p the incidence by h is o_d / o (1 - (1 + o)^-h), o their sum."""
    steps, eta = 240, (-5.0, -3.5)
    path = FeatureTable(
        MONTH,
        START,
        ("eta_default", "eta_payoff"),
        np.tile(eta, (steps, 1)),
        np.zeros((steps, 2), dtype=np.int64),
    )
    fits = {c: given_hazard(c, link) for c, link in zip(("default", "payoff"), links)}
    portfolio = replace(book(30), remaining=np.full(30, steps))
    found = run(portfolio, fits, path)
    o = [np.exp(e) if link == "logit" else np.expm1(np.exp(e)) for e, link in zip(eta, links)]
    left = -np.expm1(-steps * np.log1p(sum(o)))
    np.testing.assert_allclose(found.loans["pd_lifetime"], o[0] / sum(o) * left, rtol=1e-12)
    np.testing.assert_allclose(found.loans["payoff_lifetime"], o[1] / sum(o) * left, rtol=1e-12)
