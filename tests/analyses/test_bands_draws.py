"""Draws against closed forms, other estimators and simulations with a known truth."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from scipy import stats

from stresskit.analyses.bands.coefficients import _factor, coefficient_spread
from stresskit.analyses.bands.predictive import predictive_draws, predictive_quantiles
from stresskit.analyses.bands.quantiles import monte_carlo_error, order_interval, quantile
from stresskit.analyses.bands.shocks import PeriodShocks, log_likelihood, period_shocks
from stresskit.analyses.bands.tallies import PeriodTally, period_slopes, period_tally, tallies
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.evidence.groups import by_period, relative_variance, shock_variance, tally
from stresskit.evidence.groups import period_columns as columns_of_periods
from stresskit.evidence.rows import fit_rows
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.runs.setting import Setting
from stresskit.spec.terms import HazardSpec
from tests.analyses.world import small_setting

START = 24_000


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory) -> Setting:
    return small_setting(tmp_path_factory.mktemp("small"))


def shocks_of(sd: float, memory: float) -> PeriodShocks:
    return PeriodShocks(("default",), np.array([sd]), np.array([memory]), np.eye(1), {"default": 60})


# ---- tallies and coefficients


def test_tallies_are_those_of_the_evidence_made_row_by_row(setting: Setting) -> None:
    data = setting.data
    for cause, fit in setting.fits.items():
        found = period_tally(fit, data.loans.risk_set, data.features)
        rows = fit_rows(fit, data.loans.risk_set, data.features)
        slow = tally(rows, [by_period(rows)])
        period = slow.groups["period"]
        at = found.at_risk > 0
        np.testing.assert_allclose(found.events[at], period.events)
        np.testing.assert_allclose(found.expected[at], period.expected, rtol=1e-9)
        np.testing.assert_allclose(found.scores, slow.scores, rtol=1e-6, atol=1e-6)
        # alike rows have the larger binomial variance
        assert (found.variance[at] >= period.variance * (1 - 1e-9)).all()
        assert found.used == columns_of_periods(rows)
        moment = relative_variance(found.events[at], found.expected[at], found.variance[at], found.used)
        theirs = shock_variance(period, columns_of_periods(rows))
        assert np.sqrt(np.log1p(moment)) == pytest.approx(np.sqrt(np.log1p(theirs)), abs=0.02), cause


def test_the_joint_factor_has_each_fits_own_covariance_on_its_diagonal(setting: Setting) -> None:
    found = tallies(setting.fits, setting.data.loans.risk_set, setting.data.features)
    spread = coefficient_spread(setting.fits, found)
    assert spread.joint
    assert spread.df == setting.fits["default"].n_periods - 1
    whole, place = spread.covariance(), 0
    for fit in setting.fits.values():
        k = fit.coefficients.size
        np.testing.assert_allclose(
            whole[place : place + k, place : place + k], fit.cov_params("period"), rtol=1e-6, atol=1e-12
        )
        place += k
    k = setting.fits["default"].coefficients.size
    assert np.abs(whole[:k, k:]).max() > 0.0


def test_the_serially_robust_factor_is_the_newey_west_matrix_of_the_fit(setting: Setting) -> None:
    found = tallies(setting.fits, setting.data.loans.risk_set, setting.data.features)
    for cause, fit in setting.fits.items():
        spread = coefficient_spread({cause: fit}, found, "period_hac")
        np.testing.assert_allclose(spread.covariance(), fit.cov_params("period_hac"), rtol=1e-6, atol=1e-12)


def test_model_based_draws_are_apart_and_normal(setting: Setting) -> None:
    spread = coefficient_spread(setting.fits, {}, "model")
    k = setting.fits["default"].coefficients.size
    np.testing.assert_allclose(
        spread.covariance()[:k, :k], setting.fits["default"].cov_params("model"), rtol=1e-8
    )
    assert not spread.covariance()[:k, k:].any()
    assert np.isinf(spread.df)


def test_draws_have_the_moments_of_the_t_distribution(setting: Setting) -> None:
    found = tallies(setting.fits, setting.data.loans.risk_set, setting.data.features)
    spread = coefficient_spread(setting.fits, found)
    rng = np.random.default_rng(1)
    chi2 = rng.chisquare(spread.df, 6000)
    drawn = np.array(
        [
            spread.at(z, c)["default"]
            for z, c in zip(rng.standard_normal((6000, spread.normals)), chi2, strict=True)
        ]
    )
    want = np.diag(spread.covariance())[: drawn.shape[1]] * spread.df / (spread.df - 2)
    np.testing.assert_allclose(drawn.var(axis=0), want, rtol=5 * np.sqrt(2 / 6000))


def test_slopes_are_the_derivatives_of_expected_events(setting: Setting) -> None:
    data, fit = setting.data, setting.fits["default"]
    rows = fit_rows(fit, data.loans.risk_set, data.features)
    slow = tally(rows, [by_period(rows)]).groups["period"].jacobian
    found = period_tally(fit, data.loans.risk_set, data.features)
    slopes = period_slopes(fit, data.loans.risk_set, data.features)[found.at_risk > 0]
    np.testing.assert_allclose(slopes, slow, rtol=1e-5, atol=1e-6)


def test_memory_of_shocks_widens_coefficients_as_the_mean_of_an_autoregression(setting: Setting) -> None:
    """A fitted constant of T periods has the variance of a mean: sd^2 / T times (1 + p) / (1 - p), nearly."""
    periods, sd, memory = 400, 0.1, 0.7
    rng = np.random.default_rng(12)
    spec = HazardSpec.model_validate({"link": "cloglog", "terms": []}, strict=False)
    n = np.full(periods, 200_000.0)
    d = n * 0.01 * np.exp(shocks_of(sd, 0.0).paths(rng.standard_normal((1, periods, 1)))[0, 0])
    risk_set, features = (
        of_months(d, n),
        FeatureTable(Frequency.MONTH, START, (), np.empty((periods, 0)), np.empty((periods, 0), np.int64)),
    )
    fit = fit_hazard(spec, risk_set, features)
    found, fits = {"default": period_tally(fit, risk_set, features)}, {"default": fit}
    slopes = {"default": period_slopes(fit, risk_set, features)}
    plain = coefficient_spread(fits, found).covariance()[0, 0]
    assert plain == pytest.approx(sd**2 / periods, rel=0.25)
    shocks = shocks_of(sd, memory)
    wide = coefficient_spread(fits, found, shocks=shocks, slopes=slopes).covariance()[0, 0]
    assert wide - plain == pytest.approx(sd**2 / periods * 2 * memory / (1 - memory), rel=0.03)
    assert (
        coefficient_spread(fits, found, shocks=shocks_of(sd, 0.0), slopes=slopes).covariance()[0, 0] == plain
    )


def test_where_memory_takes_away_from_an_error_it_leaves_what_chance_adds() -> None:
    """A coefficient of month against next month hardly feels shocks that last; the truth is its spread over histories."""
    periods, n, sd, memory, count = 60, 20_000, 0.3, 0.9, 80
    rng, shocks = np.random.default_rng(5), shocks_of(sd, memory)
    x = np.where(np.arange(periods) % 2 == 0, 0.5, -0.5)
    features = FeatureTable(Frequency.MONTH, START, ("x",), x[:, None], np.zeros((periods, 1), np.int64))
    spec = HazardSpec.model_validate({"link": "cloglog", "terms": [{"macro": "x"}]}, strict=False)
    found = []
    for _ in range(count):
        u = shocks.paths(rng.standard_normal((1, periods, 1)))[0, 0]
        d = rng.binomial(n, -np.expm1(-np.exp(-5.0 + 0.3 * x + u)))
        risk_set = of_months(d, np.full(periods, n))
        fit = fit_hazard(spec, risk_set, features)
        at = list(fit.design.labels).index("x")
        seen = {"default": period_tally(fit, risk_set, features)}
        slopes = {"default": period_slopes(fit, risk_set, features)}
        plain = coefficient_spread({"default": fit}, seen).covariance()
        whole = coefficient_spread({"default": fit}, seen, shocks=shocks, slopes=slopes).covariance()
        chance = np.asarray(fit.covariances.matrices["model_observed"])
        assert np.linalg.eigvalsh(whole)[0] > 0
        assert whole[at, at] >= min(chance[at, at], plain[at, at]) * (1 - 1e-9)
        found.append((fit.coefficients[at], whole[at, at], plain[at, at]))
    estimate, whole, plain = np.array(found).T
    assert 0.6 < whole.mean() / estimate.var() < 1.7  # the variance itself is known to within 16 %
    assert plain.mean() / estimate.var() > 4.0


def test_a_matrix_with_a_negative_variance_has_no_factor() -> None:
    with pytest.raises(NumericError, match="negative variances in some direction"):
        _factor(np.diag([1.0, -1e-3]))
    with pytest.raises(NumericError, match="negative variances in some direction"):
        _factor(np.diag([1.0, np.nan]))


# ---- shocks


def test_shocks_have_mean_one_their_spread_their_memory_and_their_correlation() -> None:
    sd, memory = np.array([0.3, 0.2]), np.array([0.8, 0.3])
    correlation = np.array([[1.0, 0.5], [0.5, 1.0]])
    shocks = PeriodShocks(("default", "payoff"), sd, memory, correlation, {"default": 60, "payoff": 60})
    n = 40_000
    u = shocks.paths(np.random.default_rng(2).standard_normal((n, 6, 2)))
    assert u.shape == (n, 2, 6)
    error = 4 / np.sqrt(n)
    for h in (0, 5):
        np.testing.assert_allclose(np.exp(u[:, :, h]).mean(axis=0), 1.0, atol=error * 0.4)
        np.testing.assert_allclose(u[:, :, h].std(axis=0), sd, rtol=error)
        assert np.corrcoef(u[:, 0, h], u[:, 1, h])[0, 1] == pytest.approx(0.5, abs=error)
    for c in (0, 1):
        assert np.corrcoef(u[:, c, 2], u[:, c, 4])[0, 1] == pytest.approx(memory[c] ** 2, abs=error)


def tally_of(rng: np.random.Generator, sd: float, memory: float, periods: int, level: float) -> PeriodTally:
    u = shocks_of(sd, memory).paths(rng.standard_normal((1, periods, 1)))[0, 0]
    expected = np.full(periods, level)
    events = rng.poisson(expected * np.exp(u)).astype(float)
    expected *= events.sum() / expected.sum()
    return PeriodTally(
        "default", START, 1000 * expected, events, expected, np.zeros((periods, 1)), 1, np.ones((periods, 1))
    )


def test_spread_and_memory_of_simulated_shocks_are_recovered() -> None:
    """Persistent shocks leave a part of themselves in the fitted mean; the restricted likelihood gives it back."""
    rng = np.random.default_rng(3)
    found = [period_shocks({"default": tally_of(rng, 0.25, 0.7, 120, 200.0)}) for _ in range(60)]
    sd, memory = np.array([f.sd[0] for f in found]), np.array([f.memory[0] for f in found])
    assert abs(sd.mean() - 0.25) < 0.01 + 2.5 * sd.std() / np.sqrt(60)
    assert abs(memory.mean() - 0.7) < 0.02 + 2.5 * memory.std() / np.sqrt(60)
    plain = [period_shocks({"default": tally_of(rng, 0.25, 0.0, 120, 200.0)}) for _ in range(60)]
    assert np.mean([f.sd[0] for f in plain]) == pytest.approx(0.25, abs=0.015)
    assert np.mean([f.memory[0] for f in plain]) < 0.15
    none = [period_shocks({"default": tally_of(rng, 0.0, 0.0, 120, 200.0)}) for _ in range(60)]
    assert np.mean([f.sd[0] for f in none]) < 0.04


def test_the_restricted_likelihood_is_the_density_of_what_levels_cannot_absorb() -> None:
    """Another route: residuals projected on the complement of the levels, as a multivariate normal (Harville 1974)."""
    rng = np.random.default_rng(4)
    periods = np.array([0, 1, 3, 4, 5, 6, 9])
    r, noise = rng.normal(size=7) * 0.3, rng.uniform(0.01, 0.1, 7)
    levels = np.linalg.qr(np.column_stack([np.ones(7), rng.normal(size=7)]))[0]
    rest = np.linalg.svd(levels, full_matrices=True)[0][:, 2:]
    lag = np.abs(np.subtract.outer(periods, periods))
    for p in (0.0, 0.4, 0.9):
        covariance = 0.05 * p**lag
        ours = log_likelihood(r, noise, levels, covariance)
        inner = rest.T @ (covariance + np.diag(noise)) @ rest
        want = stats.multivariate_normal(np.zeros(5), inner).logpdf(rest.T @ r) + 2.5 * np.log(2 * np.pi)
        assert ours == pytest.approx(want, rel=1e-9)
        moved = log_likelihood(r + levels @ [0.3, -2.0], noise, levels, covariance)
        assert moved == pytest.approx(ours, rel=1e-9)


def test_few_periods_are_refused_in_words() -> None:
    with pytest.raises(
        NumericError, match=r"^10 calendar periods with 1 coefficients fitted to their levels tell too little"
    ):
        period_shocks({"default": tally_of(np.random.default_rng(5), 0.1, 0.0, 10, 50.0)})


# ---- quantiles


def test_order_statistics_hold_the_quantile_as_often_as_they_say() -> None:
    rng = np.random.default_rng(6)
    low, high = order_interval(200, 0.95)
    x = np.sort(rng.standard_normal((4000, 200)), axis=1)
    inside = ((x[:, low - 1] <= stats.norm.ppf(0.95)) & (stats.norm.ppf(0.95) <= x[:, high - 1])).mean()
    assert inside + 2 * np.sqrt(0.95 * 0.05 / 4000) >= 0.95
    assert inside < 0.99


def test_the_monte_carlo_error_is_the_spread_of_the_quantile() -> None:
    x = np.random.default_rng(7).standard_normal((1000, 500))
    spread = quantile(x, 0.95).std()
    assert monte_carlo_error(x, 0.95).mean() == pytest.approx(spread, rel=0.12)
    # asymptotically sqrt(p (1 - p) / n) / density
    assert spread == pytest.approx(
        np.sqrt(0.95 * 0.05 / 1000) / stats.norm.pdf(stats.norm.ppf(0.95)), rel=0.1
    )


# ---- counts


def test_counts_without_shocks_are_poisson_and_with_them_negative_binomial_wide() -> None:
    expected = np.full(24, 50.0)
    plain = predictive_quantiles(expected, (0.05, 0.95), draws=20_000, seed=1)
    np.testing.assert_allclose(plain[0], stats.poisson.ppf(0.05, 50), atol=1)
    np.testing.assert_allclose(plain[1], stats.poisson.ppf(0.95, 50), atol=1)
    wide = predictive_draws(expected, shocks=shocks_of(0.3, 0.6), draws=20_000, seed=1)
    want = 50 + 50**2 * np.expm1(0.3**2)
    np.testing.assert_allclose(wide.var(axis=0), want, rtol=0.08)
    np.testing.assert_allclose(wide.mean(axis=0), 50, rtol=0.015)
    # what periods share does not average out over a year
    year = wide[:, :12].sum(axis=1)
    assert year.std() > 1.8 * np.sqrt(12 * want) * 0.9


def test_counts_need_slopes_with_a_factor_and_known_causes() -> None:
    with pytest.raises(UsageError, match="slopes and factor belong together"):
        predictive_draws(np.ones(3), slopes=np.ones((3, 1)))
    with pytest.raises(UsageError, match="no shocks of 'payoff'; there are those of default"):
        predictive_draws(np.ones(3), shocks=shocks_of(0.1, 0.0), cause="payoff")
    with pytest.raises(UsageError, match="finite and not negative"):
        predictive_draws(np.array([-1.0]))


# ---- coverage, with a known truth


def of_months(d: np.ndarray, n: np.ndarray) -> RiskSet:
    """A stay of one period for those who default in a month, and one for those who do not."""
    periods = d.size
    return RiskSet(
        Frequency.MONTH, ("default",), np.array([f"L{i:04d}" for i in range(2 * periods)], dtype=object), {},
        np.arange(2 * periods), START - 1 + np.repeat(np.arange(periods), 2), np.zeros(2 * periods, np.int64),
        np.ones(2 * periods, np.int64), np.tile([1, 0], periods), np.column_stack([d, n - d]).ravel().astype(float).clip(min=1e-9),
    )  # fmt: skip


def simulated(rng: np.random.Generator, sd: float, memory: float) -> tuple[RiskSet, FeatureTable, np.ndarray]:
    """Five years of months of a homogeneous book, and the shocks of the year that follows."""
    periods, ahead, n = 60, 12, 20_000
    x = np.sin(np.arange(periods + ahead) / 5.0)
    u = shocks_of(sd, memory).paths(rng.standard_normal((1, periods + ahead, 1)))[0, 0]
    p = -np.expm1(-np.exp(-5.0 + 0.5 * x + u))
    d = rng.binomial(n, p[:periods])
    risk_set = of_months(d, np.full(periods, n))
    features = FeatureTable(
        Frequency.MONTH, START, ("x",), x[:, None], np.zeros((periods + ahead, 1), np.int64)
    )
    return risk_set, features, np.exp(-5.0 + 0.5 * x[periods:] + u[periods:])


@dataclasses.dataclass(frozen=True)
class History:
    """What a simulated history lets one learn, and the hazards of the year that came after it."""

    fit: HazardFit
    found: dict[str, PeriodTally]
    shocks: PeriodShocks
    slopes: dict[str, np.ndarray]
    features: FeatureTable
    true: np.ndarray


def history(rng: np.random.Generator, spec: HazardSpec, sd: float, memory: float) -> History:
    risk_set, features, true = simulated(rng, sd, memory)
    fit = fit_hazard(spec, risk_set, features)
    found = {"default": period_tally(fit, risk_set, features)}
    slopes = {"default": period_slopes(fit, risk_set, features)}
    return History(fit, found, period_shocks(found), slopes, features, true)


def covered(past: History, *, naive: bool) -> bool:
    """Whether the 90 % band of the year's PD holds the one that came; projected in plain numpy."""
    rng, n = np.random.default_rng(9), 600
    fit, shocks, true = past.fit, past.shocks, past.true
    spread = coefficient_spread(
        {"default": fit}, past.found, "model" if naive else "period", shocks=shocks, slopes=past.slopes
    )
    chi2 = np.ones(n) if np.isinf(spread.df) else rng.chisquare(spread.df, n) / spread.df
    b = (
        fit.coefficients
        + (rng.standard_normal((n, spread.normals)) @ spread.factor.T) / np.sqrt(chi2)[:, None]
    )
    x = past.features.values[-true.size :, 0]
    u = np.zeros((n, true.size))
    if not naive:
        u = shocks.paths(rng.standard_normal((n, true.size, 1)))[:, 0]
    labels = list(fit.design.labels)
    eta = b[:, [labels.index("intercept")]] + b[:, [labels.index("x")]] * x + u
    pd = -np.expm1(-np.exp(eta).sum(axis=1))
    low, high = np.quantile(pd, [0.05, 0.95])
    return bool(low <= -np.expm1(-true.sum()) <= high)


@pytest.mark.slow
@pytest.mark.parametrize(("sd", "memory"), [(0.0, 0.0), (0.2, 0.0), (0.2, 0.6)])
def test_bands_of_90_percent_hold_what_came_in_90_percent_of_histories(sd: float, memory: float) -> None:
    """Naive bands (model-based covariance, no shocks) do as well only where months carry no shocks."""
    spec = HazardSpec.model_validate({"link": "cloglog", "terms": [{"macro": "x"}]}, strict=False)
    rng, count = np.random.default_rng(11), 160
    ours, naive = 0, 0
    for _ in range(count):
        past = history(rng, spec, sd, memory)
        ours += covered(past, naive=False)
        naive += covered(past, naive=True)
    error = np.sqrt(0.9 * 0.1 / count)
    assert 0.9 - 2.5 * error <= ours / count <= 0.9 + 2.5 * error + 0.02, (ours, naive)
    if sd:
        assert naive / count < 0.6, (ours, naive)
    else:
        assert abs(naive / count - 0.9) <= 2.5 * error
