"""What is judged of a scenario, the ranking among episodes, and how real history compares with chi-square."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from stresskit.core.period import format_period, parse_period
from stresskit.core.values import AFTERWARDS, FILLED, GIVEN, ScenarioPath
from stresskit.macro.var import VarModel, forecast, forecast_sd, levels, standard_residuals, working
from stresskit.macro.var_fit import fit_var
from stresskit.scenario.gaussian import condition
from stresskit.scenario.plausibility import assess_paths, given_levels
from tests.macro.var_world import MIXED, QUARTER, US, fitted, make_history, make_var, sample, us_history


@pytest.fixture(scope="module")
def model() -> VarModel:
    return fitted(sample(), variables=MIXED, lags=2)


def path(
    model: VarModel, values: dict[str, np.ndarray], flags: dict[str, list[int]] | None = None
) -> ScenarioPath:
    marks = {v: np.array((flags or {}).get(v, [GIVEN] * x.size)) for v, x in values.items()}
    return ScenarioPath("s", None, QUARTER, model.last + 1, values, marks)


def shocked(model: VarModel, periods: int, scale: float, seed: int = 0) -> dict[str, np.ndarray]:
    found = forecast(model, periods)
    u = np.random.default_rng(seed).standard_normal(found.factor.shape[0]) * scale
    y = found.mean + (found.factor @ u).reshape(periods, -1)
    return {v: levels(y[:, i], t) for i, (v, t) in enumerate(zip(model.names, model.transforms, strict=True))}


def test_only_given_values_are_judged(model: VarModel) -> None:
    values = shocked(model, 8, 1.5)
    flags = {"x": [GIVEN] * 8, "y": [GIVEN] * 3 + [AFTERWARDS] * 5, "w": [FILLED] * 8}
    assert {v: x.size for v, x in given_levels(path(model, values, flags), model).items()} == {"x": 8, "y": 3}
    (found,) = assess_paths(model, [path(model, values, flags)])
    assert found.whole.distance.dof == 11
    stated = np.full((8, 3), np.nan)
    stated[:, 0], stated[:3, 1] = values["x"], values["y"][:3]
    assert found.whole.distance.d2 == pytest.approx(condition(forecast(model, 8), stated).d2, rel=1e-12)
    assert found.first_year.distance.dof == 4 + 3
    assert [(m.name, m.distance is None) for m in found.moves] == [("x", False), ("y", False), ("w", True)]
    assert set(found.filled) == {"w"}


def test_a_scenario_without_a_variable_of_the_var_is_not_assessed(model: VarModel) -> None:
    other = ScenarioPath(
        "s", None, QUARTER, model.last + 1, {"oil": np.ones(4)}, {"oil": np.zeros(4, dtype=np.int64)}
    )
    assert assess_paths(model, [other]) == ()


def test_each_variable_by_itself(model: VarModel) -> None:
    found = forecast(model, 8)
    sd = forecast_sd(model, 8)
    y = found.mean.copy()
    y[5, 0] -= 3.0 * sd[5, 0]
    values = {
        v: levels(y[:, i], t) for i, (v, t) in enumerate(zip(model.names, model.transforms, strict=True))
    }
    (judged,) = assess_paths(model, [path(model, values)])
    x = judged.moves[0]
    assert x.z == pytest.approx(-3.0, rel=1e-9)
    assert x.period == model.last + 6
    for m in judged.moves[1:]:
        assert m.z == pytest.approx(0.0, abs=1e-9)
    # the variable's own path: its covariance and nothing else
    v = (found.factor @ found.factor.T)[0::3, 0::3]
    gap = y[:, 0] - found.mean[:, 0]
    assert x.distance is not None
    assert x.distance.d2 == pytest.approx(gap @ np.linalg.solve(v, gap), rel=1e-9)


def test_the_pair_is_the_one_that_moves_against_the_ties() -> None:
    """a and b move together in history, c by itself; the scenario sends a up and b down as far as each is used to."""
    rng = np.random.default_rng(2)
    e = (
        rng.standard_normal((200, 3))
        @ np.linalg.cholesky(np.array([[1, 0.9, 0], [0.9, 1, 0], [0, 0, 1.0]])).T
    )
    history = make_history(dict(zip("abc", e.T, strict=True)))
    model = fitted(history, variables=dict.fromkeys("abc", "level"), lags=1)
    mean = forecast(model, 4).mean
    apart = {"a": mean[:, 0] + 0.8, "b": mean[:, 1] - 0.8, "c": mean[:, 2] + 0.8}
    (found,) = assess_paths(model, [path(model, apart)])
    assert found.pair is not None
    assert found.pair.names == ("a", "b")
    assert found.pair.excess > 20
    assert found.pair.apart[0].tail > 0.3
    together = {"a": mean[:, 0] + 0.8, "b": mean[:, 1] + 0.8}
    (tied,) = assess_paths(model, [path(model, together)])
    assert tied.pair is not None
    assert tied.pair.excess < 0
    (single,) = assess_paths(model, [path(model, {"a": mean[:, 0]})])
    assert single.pair is None


def test_windows_of_history_are_judged_from_their_own_forecast(model: VarModel) -> None:
    """By another route: cut history before the window, keep the parameters, forecast, and measure."""
    history = sample()
    given = {"x": np.full(6, 1.0), "w": np.full(3, 1.2)}
    (found,) = assess_paths(model, [path(model, given)])
    d2 = {}
    for first in range(model.first, model.last - 4):
        row = first - history.start
        y = np.column_stack([working(history.values[v], t) for v, t in MIXED.items()])
        z = np.where([False, True, True], np.diff(y, axis=0, prepend=np.nan), y)
        begun = VarModel(
            names=model.names, transforms=model.transforms, frequency=QUARTER, last=first - 1, criterion="fixed",
            intercept=model.intercept, coefs=model.coefs, sigma=model.sigma, recent=z[row - 2 : row], anchor=y[row - 1],
            residuals=np.zeros((0, 3)), root=model.root, floors={},
        )  # fmt: skip
        stated = np.full((6, 3), np.nan)
        stated[:, 0], stated[:3, 2] = y[row : row + 6, 0], y[row : row + 3, 2]
        d2[first] = condition(forecast(begun, 6), stated).d2
    assert found.whole.windows == len(d2) == model.nobs - 5
    ranked = sorted(d2, key=lambda f: -d2[f])
    assert found.whole.episodes[0].first == ranked[0]
    assert found.whole.episodes[0].last == ranked[0] + 5
    for e in found.whole.episodes:
        assert e.distance.d2 == pytest.approx(d2[e.first], rel=1e-8)
    assert found.whole.rank == 1 + sum(x > found.whole.distance.d2 for x in d2.values())
    assert found.whole.beyond == sum(stats.chi2.sf(x, 9) < 0.05 for x in d2.values())
    firsts = [e.first for e in found.whole.episodes]
    assert len(firsts) == 3
    assert min(abs(a - b) for i, a in enumerate(firsts) for b in firsts[:i]) >= 6


def test_history_shorter_than_the_path_has_no_windows() -> None:
    model = fitted(sample(60), variables=MIXED, lags=1)
    (found,) = assess_paths(model, [path(model, {"x": np.zeros(80)})])
    assert found.whole.windows == 0
    assert found.whole.episodes == ()
    assert found.first_year.windows == model.nobs - 3


def windows_of_history(model: VarModel, periods: int) -> np.ndarray:
    """d2 of windows side by side, without overlap, from the first period of estimation."""
    u = standard_residuals(model)
    n = u.shape[0] // periods
    return (u[: n * periods].reshape(n, -1) ** 2).sum(axis=1)


def test_eight_quarters_of_a_stable_era_are_chi_square() -> None:
    """US 1985Q1 to 2007Q4, output, unemployment and the bill rate: 11 paths side by side, within sampling error.

    The parameters were estimated on the same quarters: the mean falls short by the factor (n - k p - 1) / n.
    """
    history = us_history()
    spec = make_var(**{"variables": US, "lags": 1, "from": "1985Q1"})
    model = fit_var(spec, history, end=parse_period("2007Q4", QUARTER))
    d2 = windows_of_history(model, 8)
    assert d2.size == 11
    assert stats.kstest(d2, stats.chi2(24).cdf).pvalue > 0.1
    expected = 24 * (model.nobs - 4) / model.nobs
    assert d2.mean() == pytest.approx(expected, abs=3 * np.sqrt(2 * 24 / d2.size))


def test_paths_out_of_sample_in_that_era_are_chi_square() -> None:
    """Estimated up to each origin from 1993Q4 on, then eight quarters ahead, six paths side by side."""
    history = us_history()
    tails = []
    for origin in range(parse_period("1993Q4", QUARTER), history.end - 8, 8):
        model = fit_var(make_var(**{"variables": US, "lags": 1, "from": "1984Q1"}), history, end=origin)
        rows = slice(origin + 1 - history.start, origin + 9 - history.start)
        actual = np.column_stack([working(history.values[v][rows], t) for v, t in US.items()])
        tails.append(stats.chi2.sf(condition(forecast(model, 8), actual).d2, 24))
    assert len(tails) == 6 or len(tails) == 7
    assert stats.kstest(tails, "uniform").pvalue > 0.05


def test_eras_of_other_volatility_are_not_chi_square() -> None:
    """1959 to 2009 in one VAR: too calm after 1984, too wild before. The tool shows it as the share beyond 5%.

    This is a finding on the data, kept so that the page on limits stays true: d2 of the years 1974 to 1982 is far above
    its degrees of freedom, that of 1985 to 2007 far below, and a test rejects chi-square for both together.
    """
    model = fitted(us_history(), variables=US, lags=1)
    d2 = windows_of_history(model, 8)
    assert d2.size == 25
    assert stats.kstest(d2, stats.chi2(24).cdf).pvalue < 1e-3
    first = [format_period(model.first + 8 * i, QUARTER) for i in range(25)]
    wild = [x for x, f in zip(d2, first, strict=True) if "1973" < f[:4] < "1983"]
    calm = [x for x, f in zip(d2, first, strict=True) if "1984" < f[:4] < "2007"]
    assert np.mean(wild) > 40
    assert np.mean(calm) < 14
