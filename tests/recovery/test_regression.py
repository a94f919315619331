"""Recovery through the hazard engine: against a GLM on expanded rows, a plain loop, and a known truth."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

from stresskit.core.errors import DataError, NumericError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.recovery.cases import Workouts
from stresskit.recovery.curves import recovery_curve
from stresskit.recovery.lgd import HazardLgd
from stresskit.recovery.regression import risk_set_of
from stresskit.spec.terms import HazardSpec
from tests.recovery.world import UNTIL, draw

END = 12


def spec(**more: object) -> HazardSpec:
    terms = (
        {"age": "steps", "bands": (3, 6)},
        {"macro": "slump"},
        {"loan": "secured", "as": "category", "reference": "no"},
    )
    return HazardSpec.model_validate({"terms": terms, **more})


def features(rng: np.random.Generator, periods: int, start: int) -> FeatureTable:
    values = rng.normal(size=(periods, 1))
    return FeatureTable(Frequency.MONTH, start, ("slump",), values, np.zeros((periods, 1), dtype=np.int64))


def drawn(rng: np.random.Generator, n: int, table: FeatureTable, *, window: int = 60) -> Workouts:
    """Amounts recovered in whole payments of 20 % shares with a cloglog hazard in slump and security."""
    default = UNTIL - rng.integers(1, window + 1, n)
    secured = rng.random(n) < 0.5
    amount = rng.lognormal(8.0, 0.5, n)
    recovered, left = np.zeros((n, END)), amount.copy()
    for u in range(1, END + 1):
        macro = table.column("slump")[default + u - table.start]
        eta = -2.6 + 0.3 * (u <= 3) - 0.35 * macro + 0.7 * secured
        paid = left * (rng.random(n) < 2.0 * -np.expm1(-np.exp(eta))) * 0.5
        recovered[:, u - 1], left = paid, left - paid
    observed = np.minimum(UNTIL - default, END)
    seen = np.arange(1, END + 1)[None, :] <= observed[:, None]
    return Workouts(
        frequency=Frequency.MONTH, until=UNTIL, end=END, case_ids=np.array([f"c{i:06d}" for i in range(n)], dtype=object),
        default=default, entered=np.zeros(n, dtype=np.int64), amount=amount, closed=np.zeros(n, dtype=np.int64),
        kind=np.zeros(n, dtype=np.int64), recovered=np.where(seen, recovered, 0.0), costs=np.zeros((n, END)),
        static={"secured": np.where(secured, "yes", "no").astype(object)},
    )  # fmt: skip


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_it_is_the_fractional_regression_of_expanded_rows(link: str) -> None:
    """statsmodels 0.15.0 GLM on a row per case and workout period, response d/n, weight n: same coefficients."""
    rng = np.random.default_rng(1)
    table = features(rng, 90, UNTIL - 70)
    w = drawn(rng, 400, table)
    fit = fit_hazard(spec(link=link), risk_set_of(w), table, cause="recovered")
    case, column = np.nonzero(np.arange(1, END + 1)[None, :] <= w.observed[:, None])
    left, u = w.unrecovered()[case, column], column + 1
    x = np.column_stack(
        [
            np.ones(case.size), (u > 3) & (u <= 6), u > 6,
            table.column("slump")[w.default[case] + u - table.start], w.static["secured"][case] == "yes",
        ]
    ).astype(float)  # fmt: skip
    family = sm.families.Binomial(
        link=sm.families.links.CLogLog() if link == "cloglog" else sm.families.links.Logit()
    )
    glm = sm.GLM(w.recovered[case, column] / left, x, family=family, var_weights=left / w.amount.mean()).fit(
        tol=1e-12
    )
    ours = fit.params[["intercept", "age[4-6]", "age[7+]", "slump", "secured[yes]"]].to_numpy()
    np.testing.assert_allclose(ours, glm.params, atol=1e-7)


@pytest.mark.slow
def test_the_truth_comes_back_and_its_error_counts_cases_not_money() -> None:
    """60 draws: mean within 4 Monte Carlo errors of the truth; the error clustered by period tells the spread, the one that
    takes every unit of money for an individual does not."""
    found = []
    for k in range(60):
        rng = np.random.default_rng([3, k])
        table = features(rng, 90, UNTIL - 70)
        fit = fit_hazard(spec(), risk_set_of(drawn(rng, 800, table)), table, cause="recovered")
        loan = np.sqrt(np.diag(fit.cov_params("loan")))[list(fit.params.index).index("secured[yes]")]
        found.append((fit.params["slump"], fit.params["secured[yes]"], fit.bse["slump"], loan))
    slump, secured, by_period, by_case = np.array(found).T
    assert abs(slump.mean() + 0.35) < 4.0 * slump.std() / np.sqrt(60)
    assert abs(secured.mean() - 0.7) < 4.0 * secured.std() / np.sqrt(60)
    assert 0.7 < by_period.mean() / slump.std() < 1.4
    assert 0.7 < by_case.mean() / secured.std() < 1.4


def book(n: int, secured: list[str], **more: np.ndarray) -> Portfolio:
    ones = np.ones(n)
    return Portfolio(
        Frequency.MONTH, UNTIL, np.array([f"l{i:03d}" for i in range(n)], dtype=object), np.ones(n, dtype=np.int64),
        np.full(n, 24, dtype=np.int64), 1000.0 * ones, 0.05 * ones, {"secured": np.array(secured, dtype=object), **more},
    )  # fmt: skip


def fitted(link: str = "cloglog") -> tuple[HazardFit, FeatureTable]:
    rng = np.random.default_rng(4)
    table = features(rng, 140, UNTIL - 70)
    return fit_hazard(spec(link=link), risk_set_of(drawn(rng, 500, table)), table, cause="recovered"), table


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_lgd_of_a_default_in_step_h_reads_the_path_after_h(link: str) -> None:
    """Against a plain loop over loans, steps and workout periods, to 1e-12."""
    fit, table = fitted(link)
    portfolio = book(3, ["yes", "no", "yes"])
    source = HazardLgd({"recovered": fit}, portfolio, table, end=END, horizon=24)
    got = source.tile(np.arange(3), 24, np.ones((3, 24)))
    p = fit.params
    for i in range(3):
        for h in range(1, 25):
            left = 1.0
            for u in range(1, END + 1):
                macro = table.column("slump")[UNTIL + h + u - table.start]
                eta = (
                    p["intercept"]
                    + p["slump"] * macro
                    + p["secured[yes]"] * (portfolio.static["secured"][i] == "yes")
                )
                eta += p["age[4-6]"] * (3 < u <= 6) + p["age[7+]"] * (u > 6)
                left *= np.exp(-np.exp(eta)) if link == "cloglog" else 1.0 / (1.0 + np.exp(eta))
            assert got[i, h - 1] == pytest.approx(left, rel=1e-12)
    part = HazardLgd({"recovered": fit}, portfolio, table, end=END, horizon=24).tile(np.array([1]), 5)
    np.testing.assert_array_equal(part, got[1:2, :5])


def test_cures_compete_with_recovery() -> None:
    fit, table = fitted()
    portfolio = book(2, ["yes", "no"])
    alone = HazardLgd({"recovered": fit}, portfolio, table, end=END, horizon=6).tile(np.arange(2), 6)
    # the same hazard again as the hazard of cure: odds add up, half of the exits are cures
    both = HazardLgd(
        {"recovered": fit, "cured": fit}, portfolio, table, end=END, horizon=6, cure_loss=1.0
    ).tile(np.arange(2), 6)
    none = HazardLgd({"recovered": fit, "cured": fit}, portfolio, table, end=END, horizon=6).tile(
        np.arange(2), 6
    )
    assert (none < alone).all()
    np.testing.assert_allclose(both, none + (1.0 - none) / 2.0, rtol=1e-12)


def test_a_path_too_short_and_a_book_without_the_columns_are_named() -> None:
    fit, table = fitted()
    with pytest.raises(NumericError, match="recovery after the last step needs 72 from as_of on"):
        HazardLgd({"recovered": fit}, book(1, ["yes"]), table, end=END, horizon=60)
    bare = Portfolio(
        Frequency.MONTH, UNTIL, np.array(["a"], dtype=object), np.ones(1, dtype=np.int64), np.full(1, 24, dtype=np.int64),
        np.ones(1), np.zeros(1), {},
    )  # fmt: skip
    with pytest.raises(DataError, match=r"case columns that the book lacks: secured"):
        HazardLgd({"recovered": fit}, bare, table, end=END, horizon=6)


def test_without_covariates_the_regression_is_the_curve() -> None:
    """A level per workout period and nothing else: the product limit to 1e-9, cures as the competing exit."""
    w = draw(np.random.default_rng(8), 600, end=12, window=30).known
    plain = HazardSpec.model_validate({"terms": ({"age": "steps"},)})
    fit = fit_hazard(plain, risk_set_of(w), cause="recovered")
    none = FeatureTable(Frequency.MONTH, UNTIL + 1, (), np.empty((20, 0)), np.empty((20, 0), dtype=np.int64))
    lgd = HazardLgd({"recovered": fit}, book(1, ["no"]), none, end=12, horizon=3).tile(np.array([0]), 3)
    np.testing.assert_allclose(lgd, recovery_curve(w).lgd, rtol=1e-9)


def test_expanded_money_is_what_the_risk_set_says() -> None:
    """Amounts at risk and recovered by workout period, from the stays and from the curve."""
    w = draw(np.random.default_rng(9), 200, end=10, window=15).known
    stays, curve = risk_set_of(w), recovery_curve(w)
    rows = pd.DataFrame(
        {"exit": stays.stay_exit, "recovered": stays.stay_cause == 1, "money": stays.weight * w.amount.mean()}
    )
    for u in range(1, 11):
        assert rows.loc[rows["exit"] >= u, "money"].sum() == pytest.approx(curve.at_risk[u - 1], rel=1e-12)
        here = (rows["exit"] == u) & rows["recovered"]
        assert rows.loc[here, "money"].sum() == pytest.approx(curve.recovered[u - 1], rel=1e-12)
