"""Actual against expected: sums by a plain loop, total tests by statsmodels, shocks by simulation."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
from scipy import stats

from stresskit.core.errors import UsageError
from stresskit.evidence import actual
from stresskit.evidence.actual import compare, comparison, period_tally
from stresskit.evidence.groups import Grouped, pooled, shock_variance
from stresskit.evidence.rows import fit_rows
from tests.evidence.world import World, simulate


def test_sums_match_a_plain_loop(sound: World, sound_rows: pd.DataFrame) -> None:
    fit = sound.fit()
    table = compare(fit, sound.risk_set, sound.features, columns=["region"]).table
    p = fit.predict(sound_rows).to_numpy()
    groups = {
        "period": [f"{t // 12}-{t % 12 + 1:02d}" for t in sound_rows["period"]],
        "cohort": [str((o + 1) // 12) for o in sound_rows["origin"]],
        "region": list(sound_rows["region"]),
    }
    for by, labels in groups.items():
        want: dict[str, list[float]] = {}
        for label, y, q in zip(labels, sound_rows["y"], p, strict=True):
            one = want.setdefault(label, [0.0, 0.0, 0.0, 0.0])
            for i, v in enumerate((1.0, y, q, q * (1 - q))):
                one[i] += v
        got = table[table["by"] == by].set_index("group")
        assert sorted(got.index) == sorted(want)
        for label, (n, d, e, v) in want.items():
            row = got.loc[label]
            assert (row["at_risk"], row["events"]) == (n, d)
            assert row["expected"] == pytest.approx(e, rel=1e-10)
            assert row["z_binomial"] == pytest.approx((d - e) / np.sqrt(v), rel=1e-8)
            assert row["lower"] == pytest.approx(stats.beta.ppf(0.025, d + 0.5, n - d + 0.5) if d else 0.0)
    ages = table[table["by"] == "age"]
    assert ages["events"].sum() == sound_rows["y"].sum()
    assert ages["expected"].max() < 1.6 * ages["expected"].min()
    tenth = table[table["by"] == "predicted"]
    assert tenth["at_risk"].max() < 1.02 * tenth["at_risk"].min()
    assert (tenth["fitted_rate"].diff().dropna() > 0).all()


@pytest.mark.parametrize("link", ["logit", "cloglog"])
def test_total_is_the_score_test_of_a_level_per_group(
    sound: World, sound_rows: pd.DataFrame, link: str
) -> None:
    """statsmodels GLM.score_test of group dummies added to the fitted model, expected information.

    Equal for the logit. The cloglog's score weighs a residual by 1 + O(hazard), ours does not: hazards of 1 %.
    """
    fit = sound.fit(link=link)
    totals = compare(fit, sound.risk_set, sound.features, columns=["region"]).totals.set_index("by")
    base = pd.DataFrame(
        {"intercept": 1.0, "age": np.log(sound_rows["age"]), "x": sound_rows["x"],
         "floating": (sound_rows["product"] == "floating").astype(float), "m": sound_rows["m"]}
    )  # fmt: skip
    family = sm.families.Binomial(
        sm.families.links.Logit() if link == "logit" else sm.families.links.CLogLog()
    )
    model = sm.GLM(sound_rows["y"].to_numpy(float), base.to_numpy(), family=family)
    result = model.fit(tol=1e-12, maxiter=100)
    extra = pd.get_dummies(sound_rows["region"]).to_numpy(float)[:, 1:]
    chi2, p, df = model.score_test(result.params, exog_extra=extra, observed=False)
    tolerance = 1e-5 if link == "logit" else 0.01
    assert totals.loc["region", "df"] == df == 2
    assert totals.loc["region", "chi2"] == pytest.approx(float(np.squeeze(chi2)), rel=tolerance)
    assert totals.loc["region", "p_value"] == pytest.approx(float(np.squeeze(p)), rel=2 * tolerance)


def test_groups_that_the_fit_has_leave_nothing_to_test(sound: World) -> None:
    for link in ("logit", "cloglog"):
        totals = compare(sound.fit(link=link), sound.risk_set, sound.features, columns=["product"]).totals
        row = totals.set_index("by").loc["product"]
        assert row["df"] == 0
        assert np.isnan(row["p_value"])


def test_unknown_column_names_those_there_are(sound: World) -> None:
    with pytest.raises(UsageError, match=r"regoin.*region"):
        compare(sound.fit(), sound.risk_set, sound.features, columns=["regoin"])


def test_clustered_total_is_hotelling_on_period_sums(sound: World, sound_rows: pd.DataFrame) -> None:
    """By rows and periods one at a time, logit, where D_t = sum of residuals less their regression on the design."""
    fit = sound.fit(link="logit")
    row = (
        compare(fit, sound.risk_set, sound.features, columns=["region"]).totals.set_index("by").loc["region"]
    )
    p = fit.predict(sound_rows).to_numpy()
    x = np.column_stack(
        [
            np.ones(p.size),
            np.log(sound_rows["age"]),
            sound_rows["x"],
            sound_rows["product"] == "floating",
            sound_rows["m"],
        ]
    ).astype(float)
    z = pd.get_dummies(sound_rows["region"]).to_numpy(float)[:, 1:]
    w = p * (1 - p)
    beta = np.linalg.solve(x.T @ (x * w[:, None]), x.T @ (z * w[:, None]))
    rest = (z - x @ beta) * (sound_rows["y"].to_numpy() - p)[:, None]
    d = pd.DataFrame(rest).groupby(sound_rows["period"].to_numpy()).sum().to_numpy()
    t, q = d.shape
    mean, cov = d.mean(axis=0), np.cov(d.T)
    hotelling = t * mean @ np.linalg.solve(cov, mean)
    f = (t - q) / (q * (t - 1)) * hotelling
    assert (row["f_df1"], row["f_df2"]) == (q, t - q)
    assert row["f"] == pytest.approx(f, rel=1e-6)
    assert row["p_clustered"] == pytest.approx(stats.f.sf(f, q, t - q), rel=1e-6)


@pytest.mark.slow
def test_shock_of_a_period_is_recovered() -> None:
    """sd 0.3: mean of 8 books within 4 Monte Carlo errors; 0 or little where there is none."""
    found = [_shock(seed, 0.3) for seed in range(8)]
    error = np.std(found, ddof=1) / np.sqrt(8)
    assert error < 0.03
    # log-normal shocks of sd 0.3: relative sd sqrt(exp(0.09) - 1) = 0.307; the fit absorbs a little of them
    assert abs(np.mean(found) - 0.307) < 4 * error
    assert np.mean([_shock(seed, 0.0) for seed in range(4)]) < 0.1


def _shock(seed: int, sd: float) -> float:
    world = simulate(100 + seed, loans=4000, shock_sd=sd, level=-5.4)
    return compare(world.fit(), world.risk_set, world.features).shock_sd


def test_bands_with_shocks_hold_where_binomial_ones_do_not() -> None:
    """Share of months whose events lie in the 95 % band, sd of the shock 0.3."""
    inside, naive = [], []
    for seed in range(6):
        world = simulate(200 + seed, loans=4000, shock_sd=0.3, level=-5.4)
        table = compare(world.fit(), world.risk_set, world.features).table
        months = table[(table["by"] == "period") & (table["expected"] > 5)]
        inside += list(months["events"].between(months["low_events"], months["high_events"]))
        naive += list(months["z_binomial"].abs() < 1.96)
    tolerance = 4 * np.sqrt(0.05 * 0.95 / len(inside))
    assert abs(np.mean(inside) - 0.95) < tolerance
    assert np.mean(naive) < 0.95 - 2 * tolerance


def test_thin_groups_are_pooled_with_neighbours_or_together() -> None:
    def grouped(expected: list[float], ordered: bool) -> Grouped:
        e = np.array(expected)
        n = e.size
        return Grouped(
            "g", tuple("abcdefgh"[:n]), ordered, np.full(n, 100.0), e, e, e, np.eye(n), np.diag(e), np.diag(e)
        )

    a = pooled(grouped([1, 2, 3, 9, 1, 1], True), 5.0)
    assert a.labels == ("a + ... + c", "d + ... + f")
    assert list(a.expected) == [6.0, 11.0]
    assert a.expected.sum() == 17
    b = pooled(grouped([8, 1, 2, 9, 3], False), 5.0)
    assert sorted(b.expected) == [6.0, 8.0, 9.0]
    c = pooled(grouped([8, 1, 9], False), 5.0)
    assert sorted(c.expected) == [9.0, 9.0]


def test_no_shock_is_read_into_binomial_noise(rng: np.random.Generator) -> None:
    e = np.full(60, 400.0)
    d = rng.binomial(40_000, 0.01, 60).astype(float)
    one = Grouped(
        "period",
        tuple(map(str, range(60))),
        True,
        np.full(60, 4e4),
        d,
        e,
        e * 0.99,
        np.zeros((60, 1)),
        np.diag(d - e),
        np.diag(e),
    )
    assert np.sqrt(shock_variance(one, 1)) < 0.04
    shaken = rng.binomial(40_000, 0.01 * rng.lognormal(0, 0.2, 60)).astype(float)
    two = Grouped(
        "period",
        one.labels,
        True,
        one.at_risk,
        shaken,
        e,
        e * 0.99,
        one.jacobian,
        np.diag(shaken - e),
        np.diag(e),
    )
    # sd of a standard deviation from 60 values: 0.2 / sqrt(120)
    assert abs(np.sqrt(shock_variance(two, 1)) - 0.2) < 4 * 0.2 / np.sqrt(120)


@pytest.mark.slow
def test_tests_hold_their_size_under_shocks() -> None:
    """Regions do not matter in truth; product is left out of the fit and does."""
    p_clustered, p_found = [], []
    for seed in range(16):
        world = simulate(300 + seed, loans=1200, shock_sd=0.4, level=-5.0)
        fit = world.fit(({"age": "log", "support": 1}, {"loan": "x"}, {"macro": "m"}))
        rows = fit_rows(fit, world.risk_set, world.features)
        totals = comparison(rows, period_tally(rows, ["region", "product"])).totals.set_index("by")
        p_clustered.append(totals.loc["region", "p_clustered"])
        p_found.append(totals.loc["product", "p_clustered"])
    # Uniform p-values of 16 books: mean 0.5, sd 0.2887 / sqrt(16)
    assert abs(np.mean(p_clustered) - 0.5) < 4 * 0.2887 / np.sqrt(16)
    assert np.median(p_found) < 0.01
    assert actual.MINIMUM_EXPECTED == 5.0


@pytest.mark.parametrize("name", ["age", "cohort", "period", "predicted"])
def test_a_loan_column_named_like_a_grouping_of_ours_stands_beside_it(sound: World, name: str) -> None:
    region = sound.risk_set.static["region"]
    risk_set = replace(sound.risk_set, static={**sound.risk_set.static, name: region})
    table = compare(sound.fit(), risk_set, sound.features, columns=["region", name]).table
    plain = compare(sound.fit(), sound.risk_set, sound.features, columns=["region"]).table
    pd.testing.assert_frame_equal(table[table["by"] == name], plain[plain["by"] == name])
    mine, same = (table[table["by"] == by].drop(columns="by") for by in (f"{name} (loan column)", "region"))
    assert len(mine) == len(np.unique(region))
    pd.testing.assert_frame_equal(mine.reset_index(drop=True), same.reset_index(drop=True))
