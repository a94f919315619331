"""Bias reduction: against published figures, direct maximisation, the general formula, and the bias itself."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy import stats
from scipy.optimize import brentq, minimize, root

import stresskit as sk
from stresskit.core.errors import NumericError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard import firth
from stresskit.hazard.fit import Backend, fit_hazard
from stresskit.hazard.link import LINKS
from tests.hazard.hazard_cases import make_spec, simulated_panel

Floats = NDArray[np.float64]
DATA = Path(__file__).parent.parent / "data" / "firth" / "endometrial.csv"
BOTH = pytest.mark.parametrize("link", ["cloglog", "logit"])
COLUMNS = ("NV", "PI", "EH")


def _cases(frame: pd.DataFrame, event: str, static: list[str], weight: str | None = None) -> RiskSet:
    frame = frame.assign(loan=np.arange(len(frame)), age=1)
    return sk.risk_set_from_rows(frame, loan="loan", age="age", event=event, static=static, weight=weight)


@pytest.fixture(scope="module")
def endometrial() -> pd.DataFrame:
    frame = pd.read_csv(DATA)
    assert len(frame) == 79
    assert frame.loc[frame["NV"] == 1, "HG"].all()  # quasi-separation
    return frame


def _fit(frame: pd.DataFrame, link: str, **more: object) -> sk.HazardFit:
    terms = tuple({"loan": name} for name in COLUMNS)
    return fit_hazard(
        make_spec(*terms, **{"link": link, "bias_reduction": "firth", "covariance": "model"} | more),
        _cases(frame, "HG", list(COLUMNS)),
    )


def _matrix(frame: pd.DataFrame) -> tuple[Floats, Floats]:
    return np.column_stack([np.ones(len(frame)), frame[list(COLUMNS)].to_numpy(float)]), frame["HG"].to_numpy(
        float
    )


def test_the_published_example(endometrial: pd.DataFrame) -> None:
    """Heinze and Schemper 2002; the figures are quoted from memory and confirmed by the next test."""
    fit = _fit(endometrial, "logit")
    quoted = {"intercept": 3.775, "NV": 2.929, "PI": -0.0348, "EH": -2.604}
    for name, value in quoted.items():
        assert fit.params[name] == pytest.approx(value, abs=6e-4)


def test_the_logit_maximises_the_likelihood_under_jeffreys_prior(endometrial: pd.DataFrame) -> None:
    x, y = _matrix(endometrial)
    unit = 1.0 / x.std(axis=0).clip(0.3)

    def value(scaled: Floats) -> float:
        eta = x @ (scaled * unit)
        p = 1.0 / (1.0 + np.exp(-eta))
        log_det = np.linalg.slogdet(x.T @ (x * (p * (1 - p))[:, None]))[1]
        return -float(y @ eta - np.logaddexp(0, eta).sum() + 0.5 * log_det)

    peer = minimize(
        value,
        np.zeros(4),
        method="Nelder-Mead",
        options={"xatol": 1e-10, "fatol": 1e-13, "maxiter": 20000, "maxfev": 20000},
    )
    fit = _fit(endometrial, "logit")
    np.testing.assert_allclose(fit.params / unit, peer.x, atol=1e-5)
    assert value(fit.params.to_numpy() / unit) <= peer.fun + 1e-10
    assert fit.llf + fit.estimation.penalty == pytest.approx(-peer.fun, abs=1e-9)
    p = LINKS["logit"].probability(x @ fit.params.to_numpy())
    np.testing.assert_allclose(
        fit.cov_params("model_expected"), np.linalg.inv(x.T @ (x * (p * (1 - p))[:, None])), rtol=1e-7
    )


def _general_adjustment(x: Floats, b: Floats, link: str) -> tuple[Floats, Floats]:
    """(score adjustment, expected information) by Firth's general formula, expectations taken over y = 0, 1.

    A_r = tr(I^-1 (P_r + Q_r)) / 2, P_r = E(U U' U_r), Q_r = -E(J U_r), J the observed information (Firth 1993,
    section 3; Kosmidis and Firth 2009, equation 3). No hat values, no derivative of the mean.
    """
    eta, model = x @ b, LINKS[link]
    p = model.probability(eta)
    third, mixed, info = (np.zeros_like(eta) for _ in range(3))
    for share, (_, u, j) in ((p, model.event(eta, "observed")), (1 - p, model.survive(eta, "observed"))):
        third, mixed, info = third + share * u**3, mixed - share * j * u, info + share * u**2
    inverse = np.linalg.inv(x.T @ (x * info[:, None]))
    both = (third + mixed)[:, None] * x
    return np.array(
        [0.5 * np.trace(inverse @ (x.T @ (x * both[:, [r]]))) for r in range(b.size)]
    ), np.linalg.inv(inverse)


@BOTH
def test_the_root_of_the_general_adjusted_score(endometrial: pd.DataFrame, link: str) -> None:
    x, y = _matrix(endometrial)
    x = x / np.array([1.0, 1.0, 10.0, 1.0])
    model = LINKS[link]

    def adjusted(b: Floats) -> Floats:
        eta = x @ b
        score = np.where(y > 0, model.event(eta, "observed")[1], model.survive(eta, "observed")[1])
        return np.asarray(x.T @ score + _general_adjustment(x, b, link)[0])

    fit = _fit(endometrial, link)
    ours = fit.params.to_numpy() * np.array([1.0, 1.0, 10.0, 1.0])
    np.testing.assert_allclose(adjusted(ours), 0.0, atol=1e-7)
    peer = root(adjusted, ours + 0.05, tol=1e-12)
    np.testing.assert_allclose(ours, peer.x, atol=1e-7)


@BOTH
@pytest.mark.parametrize(("spread", "seed"), [(0.01, 0), (0.05, 1), (0.2, 2)])
def test_a_number_that_parts_the_events_gets_the_finite_root(link: str, spread: float, seed: int) -> None:
    """Complete separation, where the adjusted score grows along the way and every scoring step overshoots."""
    rng = np.random.default_rng(seed)
    y = (rng.random(900) < 0.05).astype(float)
    leak = y + rng.normal(0.0, spread, 900)
    frame = pd.DataFrame({"leak": leak, "event": y.astype(int)})
    spec = make_spec({"loan": "leak"}, link=link, bias_reduction="firth", covariance="model")
    ours = fit_hazard(spec, _cases(frame, "event", ["leak"])).params.to_numpy()
    x, model = np.column_stack([np.ones(900), leak]), LINKS[link]

    def score(b: Floats) -> Floats:
        eta = x @ b
        s = np.where(y > 0, model.event(eta, "observed")[1], model.survive(eta, "observed")[1])
        return np.asarray(x.T @ s + _general_adjustment(x, b, link)[0])

    information = np.linalg.inv(_general_adjustment(x, ours, link)[1])
    assert np.abs(score(ours) / np.sqrt(np.diag(information))).max() < 1e-6
    if link == "logit":

        def value(b: Floats) -> float:
            eta = x @ b
            p = 1.0 / (1.0 + np.exp(-eta))
            log_det = np.linalg.slogdet(x.T @ (x * (p * (1 - p))[:, None]))[1]
            return -float(y @ eta - np.logaddexp(0, eta).sum() + 0.5 * log_det)

        for start in ([-3.0, 3.0], [-8.0, 14.0]):
            options = {"xatol": 1e-8, "fatol": 1e-12, "maxiter": 20000}
            peer = minimize(value, np.array(start), method="Nelder-Mead", options=options)
            np.testing.assert_allclose(ours, peer.x, rtol=1e-4)


def test_cloglog_is_mean_bias_reduction_and_not_the_mode_under_jeffreys_prior(
    endometrial: pd.DataFrame,
) -> None:
    x, y = _matrix(endometrial)
    unit, model = 1.0 / x.std(axis=0).clip(0.3), LINKS["cloglog"]

    def value(scaled: Floats) -> float:
        eta = x @ (scaled * unit)
        loglik = np.where(y > 0, model.event(eta, "expected")[0], model.survive(eta, "expected")[0])
        log_det = np.linalg.slogdet(x.T @ (x * model.survive(eta, "expected")[2][:, None]))[1]
        return -float(loglik.sum() + 0.5 * log_det)

    fit = _fit(endometrial, "cloglog")
    mode = minimize(
        value,
        fit.params.to_numpy() / unit,
        method="Nelder-Mead",
        options={"xatol": 1e-9, "fatol": 1e-12, "maxiter": 20000},
    )
    assert np.abs(mode.x - fit.params.to_numpy() / unit).max() > 0.01
    assert fit.estimation.method == "Firth, mean bias reduction"
    assert fit.estimation.penalty == 0.0


@pytest.mark.parametrize("table", [(7, 5, 3, 9), (0, 12, 6, 6), (4, 0, 0, 11), (0, 20, 0, 5)])
def test_a_two_by_two_table_adds_one_half_to_each_cell(table: tuple[int, int, int, int]) -> None:
    """Saturated logit: the penalised estimate is the log odds with 1/2 added to every cell (Firth 1993, section 4)."""
    a, b, c, d = table
    frame = pd.DataFrame({"x": [0.0] * (a + b) + [1.0] * (c + d), "y": [1] * a + [0] * b + [1] * c + [0] * d})
    if frame["y"].sum() in (0, len(frame)):
        with pytest.raises(NumericError, match="no events"):
            fit_hazard(
                make_spec({"loan": "x"}, link="logit", bias_reduction="firth"), _cases(frame, "y", ["x"])
            )
        return
    fit = fit_hazard(
        make_spec({"loan": "x"}, link="logit", bias_reduction="firth"), _cases(frame, "y", ["x"])
    )
    low, high = np.log((a + 0.5) / (b + 0.5)), np.log((c + 0.5) / (d + 0.5))
    np.testing.assert_allclose(fit.params, [low, high - low], atol=1e-8)


def _constant(events: int, n: int, link: str) -> float:
    """Bias-reduced eta of a single probability, from the scalar equation."""
    model = LINKS[link]

    def equation(eta: float) -> float:
        at = np.array([eta])
        u = events * model.event(at, "observed")[1] + (n - events) * model.survive(at, "observed")[1]
        return float((u + 0.5 * model.bend(at))[0])

    return float(brentq(equation, -12.0, 3.0 if link == "cloglog" else 12.0, xtol=1e-13))


@BOTH
@pytest.mark.parametrize(("events", "n"), [(1, 40), (9, 30), (29, 30)])
def test_one_probability(events: int, n: int, link: str) -> None:
    frame = pd.DataFrame({"y": [1] * events + [0] * (n - events)})
    fit = fit_hazard(make_spec(link=link, bias_reduction="firth"), _cases(frame, "y", []))
    assert fit.params["intercept"] == pytest.approx(_constant(events, n, link), abs=1e-8)


@BOTH
def test_no_bias_of_order_one_over_n(link: str) -> None:
    """Exact bias over all outcomes of n trials: four times smaller when n doubles (two times would be order 1/n)."""
    truth = LINKS[link].linear(0.3)
    bias = []
    for n in (100, 200, 400):
        d = np.arange(n + 1)
        mass = stats.binom.pmf(d, n, 0.3)
        likely = d[mass > 1e-15]
        bias.append(abs(float(mass[likely] @ np.array([_constant(int(e), n, link) for e in likely])) - truth))
    assert bias[0] < 5e-4
    np.testing.assert_allclose([bias[0] / bias[1], bias[1] / bias[2]], 4.0, rtol=0.12)


@BOTH
def test_bend_is_the_second_derivative_over_the_first(link: str) -> None:
    eta, h = np.linspace(-8, 2, 41), 1e-4
    p = [LINKS[link].probability(eta + s * h) for s in (-1, 0, 1)]
    second, first = (p[2] - 2 * p[1] + p[0]) / h**2, (p[2] - p[0]) / (2 * h)
    near = first > 1e-3
    np.testing.assert_allclose(LINKS[link].bend(eta)[near], (second / first)[near], atol=2e-4)


@BOTH
def test_weights_are_rows_repeated(endometrial: pd.DataFrame, link: str) -> None:
    rng = np.random.default_rng(0)
    times = rng.integers(1, 4, len(endometrial))
    terms = tuple({"loan": name} for name in COLUMNS)
    spec = make_spec(*terms, link=link, bias_reduction="firth", covariance="model")
    weighted = fit_hazard(spec, _cases(endometrial.assign(w=times.astype(float)), "HG", list(COLUMNS), "w"))
    repeated = fit_hazard(
        spec,
        _cases(endometrial.loc[endometrial.index.repeat(times)].reset_index(drop=True), "HG", list(COLUMNS)),
    )
    np.testing.assert_allclose(weighted.params, repeated.params, rtol=1e-7)
    np.testing.assert_allclose(weighted.bse, repeated.bse, rtol=1e-7)


@BOTH
def test_blocks_threads_and_backends(link: str) -> None:
    risk_set, features = simulated_panel(loans=200, months=30, seed=3, link=link)
    spec = make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, link=link, bias_reduction="firth")
    ways: tuple[tuple[Backend, int], ...] = (("rows", 1), ("rows", 2), ("factored", 1))
    fits = [fit_hazard(spec, risk_set, features, backend=b, threads=t) for b, t in ways]
    np.testing.assert_array_equal(fits[0].params, fits[1].params)
    np.testing.assert_allclose(fits[0].params, fits[2].params, rtol=1e-9)
    np.testing.assert_allclose(fits[0].bse, fits[2].bse, rtol=1e-7)
    plain = fit_hazard(
        make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, link=link), risk_set, features
    )
    assert (np.abs(fits[0].params - plain.params) < 0.5 * plain.standard_errors("model")).all()
    assert (fits[0].params != plain.params).all()


def test_the_adjusted_score_does_not_depend_on_blocks(
    panel: tuple[RiskSet, FeatureTable], monkeypatch: pytest.MonkeyPatch
) -> None:
    risk_set, features = panel
    spec = make_spec({"age": "linear"}, {"loan": "ltv"}, {"macro": "rate"}, bias_reduction="firth")
    whole = fit_hazard(spec, risk_set, features)
    monkeypatch.setattr(
        "stresskit.hazard.estimate.adjusted_sums", lambda data: firth.AdjustedSums(data, block_rows=100)
    )
    np.testing.assert_allclose(fit_hazard(spec, risk_set, features).params, whole.params, rtol=1e-9)


def test_too_many_rows_are_refused(endometrial: pd.DataFrame, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(firth, "MOST_ROWS", 78)
    with pytest.raises(NumericError, match=r"each of 79 rows at risk; it is offered up to 78"):
        _fit(endometrial, "logit")


@BOTH
def test_chosen_by_separation_only_when_there_is_any(endometrial: pd.DataFrame, link: str) -> None:
    frame = endometrial.assign(NV=np.where(endometrial["NV"] == 1, "present", "absent"))
    terms = ({"loan": "NV", "as": "category", "reference": "absent"}, {"loan": "PI"}, {"loan": "EH"})
    risk_set = _cases(frame, "HG", list(COLUMNS))
    with pytest.raises(NumericError, match=r"NV\[present\]: all of 13 rows at risk are events"):
        fit_hazard(make_spec(*terms, link=link), risk_set)
    fit = fit_hazard(make_spec(*terms, link=link, when_separated="firth"), risk_set)
    direct = _fit(endometrial, link)
    np.testing.assert_allclose(fit.params, direct.params, atol=1e-7)
    assert fit.estimation.separated == ("NV[present]: all of 13 rows at risk are events",)
    assert "estimator:            Firth" in fit.summary()
    assert sk.HazardFit.from_json(fit.to_json()).to_json() == fit.to_json()
    sound = fit_hazard(make_spec(*terms[1:], link=link, when_separated="firth"), risk_set)
    assert sound.estimation.plain
    np.testing.assert_array_equal(sound.params, fit_hazard(make_spec(*terms[1:], link=link), risk_set).params)
