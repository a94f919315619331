"""Tails of the age baseline: curves, fit, join, projection, saved form."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy import integrate, optimize

import stresskit as sk
from stresskit.core.errors import NumericError, TextError
from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, Portfolio, RiskSet, no_features
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.tail import tail_curve
from stresskit.loss.assess import assess
from stresskit.spec.study import Loss
from tests.hazard.hazard_cases import make_spec, simulated_panel

Floats = NDArray[np.float64]
FAMILIES = pytest.mark.parametrize("family", ["weibull", "loglogistic"])
LINKS = pytest.mark.parametrize("link", ["cloglog", "logit"])


def _hazard(family: str, shape: float, scale: float, age: float) -> float:
    """Textbook hazard at a point of time (Lawless 2003, 1.3)."""
    rising: float = (shape / scale) * (age / scale) ** (shape - 1.0)
    return rising if family == "weibull" else rising / (1.0 + (age / scale) ** shape)


@FAMILIES
@pytest.mark.parametrize(("shape", "scale"), [(0.6, 30.0), (1.0, 8.0), (1.7, 25.0), (3.0, 12.0)])
def test_a_period_holds_the_integral_of_the_textbook_hazard(family: str, shape: float, scale: float) -> None:
    ages = np.array([1, 2, 7, 20, 90])
    theta = (float(np.log(shape)), float(np.log(scale)))
    area = [
        integrate.quad(lambda t: _hazard(family, shape, scale, t), a - 1, a, epsabs=1e-12, limit=200)[0]
        for a in ages
    ]
    value, _ = tail_curve(family, "cloglog", ages, *theta)
    np.testing.assert_allclose(np.exp(value), area, rtol=1e-7)
    odds, _ = tail_curve(family, "logit", ages, *theta)
    np.testing.assert_allclose(np.exp(odds), np.expm1(area), rtol=1e-7)


@FAMILIES
@LINKS
def test_derivatives_are_those_of_finite_differences(family: str, link: str) -> None:
    ages, theta = np.array([1, 3, 40, 200]), np.array([0.4, 3.1])
    _, slope = tail_curve(family, link, ages, *theta)
    for j in range(2):
        step = np.eye(2)[j] * 1e-6
        ahead, behind = (tail_curve(family, link, ages, *(theta + s * step))[0] for s in (1.0, -1.0))
        np.testing.assert_allclose(slope[:, j], (ahead - behind) / 2e-6, rtol=1e-6, atol=1e-8)


def test_a_log_logistic_rises_then_falls_as_one_over_age() -> None:
    value, _ = tail_curve(
        "loglogistic", "cloglog", np.arange(1, 5001), float(np.log(2.0)), float(np.log(20.0))
    )
    top = int(np.argmax(value)) + 1
    assert top in (20, 21)  # the hazard of shape 2 peaks at the scale
    assert (np.diff(value[:top]) > 0).all()
    assert (np.diff(value[top:]) < 0).all()
    assert value[3999] - value[1999] == pytest.approx(-np.log(2.0), abs=1e-3)


# ---- simulated lifetimes


def lifetimes(
    family: str,
    shape: float,
    scale: float,
    *,
    n: int,
    end: int,
    rng: np.random.Generator,
    effect: float = 0.0,
    link: str = "cloglog",
) -> RiskSet:
    """Lifetimes of the family in continuous time, seen by the period, a third entering late; x multiplies the hazard (logit: the odds)."""
    x = rng.choice([-1.0, 1.0], n)
    entry = np.where(rng.random(n) < 1 / 3, rng.integers(1, end // 3, n), 0)
    if link == "cloglog":
        cumulative = rng.exponential(size=n) * np.exp(-effect * x)
        # Late entry: those who are gone by then are never seen; conditional on having survived the entry age.
        start = (entry / scale) ** shape if family == "weibull" else np.log1p((entry / scale) ** shape)
        total = start + cumulative
        time = scale * (total if family == "weibull" else np.expm1(total)) ** (1.0 / shape)
        exit_ = np.minimum(np.ceil(time), end).astype(np.int64)
        event = np.asarray(time <= end)
    else:
        tail, _ = tail_curve(
            family, "logit", np.arange(1, end + 1), float(np.log(shape)), float(np.log(scale))
        )
        p = 1.0 / (1.0 + np.exp(-(tail[None, :] + effect * x[:, None])))
        gone = (rng.random(p.shape) < p) & (np.arange(1, end + 1)[None, :] > entry[:, None])
        event = np.asarray(gone.any(axis=1))
        exit_ = np.where(event, gone.argmax(axis=1) + 1, end)
    exit_ = np.maximum(exit_, entry + 1)
    return RiskSet(
        frequency=Frequency.MONTH,
        causes=("default",),
        loan_ids=np.array([f"L{i:06d}" for i in range(n)], dtype=object),
        static={"x": x},
        stay_loan=np.arange(n),
        stay_origin=24_000 + rng.integers(0, 24, n),
        stay_entry=entry.astype(np.int64),
        stay_exit=exit_,
        stay_cause=event.astype(np.int64),
        weight=np.ones(n),
    )


def _tail_spec(family: str, link: str, *, first: int | None = None, **more: Any) -> Any:
    age = {"age": "steps", "bands": (3, 6, 10, 15, 20, 30, 40), "beyond": family, **more}
    return make_spec(age if first is None else age | {"tail_from": first}, {"loan": "x"}, link=link)


@pytest.mark.slow
@pytest.mark.parametrize(
    ("family", "shape", "scale", "first"),
    [
        ("weibull", 1.5, 60.0, 1), ("weibull", 0.7, 80.0, 10),
        ("loglogistic", 1.8, 25.0, 1), ("loglogistic", 1.2, 30.0, 5),
    ],
)  # fmt: skip
def test_the_shape_of_simulated_lifetimes_comes_back(
    family: str, shape: float, scale: float, first: int
) -> None:
    """Mean of ln shape and ln scale within 3.5 Monte Carlo errors; stated errors match the spread.

    The tail is that of the average row. Proportional hazards times a Weibull are a Weibull again, so there a covariate of
    effect 0.3 is added, which moves the scale a little (the risky leave first); times a log-logistic they are not.
    """
    runs, rng = 60, np.random.default_rng([2, int(10 * shape), first])
    effect, moved = (0.3, 0.12 / shape) if family == "weibull" else (0.0, 0.0)
    found, stated = [], []
    for _ in range(runs):
        risk_set = lifetimes(family, shape, scale, n=1500, end=60, rng=rng, effect=effect)
        tail = fit_hazard(_tail_spec(family, "cloglog", first=first), risk_set).tail
        assert tail is not None
        found.append([np.log(tail.shape), np.log(tail.scale)])
        stated.append([tail.log_shape_se, tail.log_scale_se])
    estimates: Floats = np.array(found)
    errors: Floats = np.array(stated)
    spread = estimates.std(axis=0, ddof=1)
    gap = np.abs(estimates.mean(axis=0) - np.log([shape, scale]))
    assert (gap < 3.5 * spread / np.sqrt(runs) + [0.0, moved]).all(), (gap, spread)
    # Relative Monte Carlo error of a standard deviation from 60 runs: 1/sqrt(118) = 0.09.
    np.testing.assert_allclose(errors.mean(axis=0) / spread, 1.0, atol=0.3)


@FAMILIES
@LINKS
def test_one_large_sample_gives_the_shape_back_under_both_links(family: str, link: str) -> None:
    risk_set = lifetimes(family, 1.4, 40.0, n=20_000, end=60, rng=np.random.default_rng(7), link=link)
    tail = fit_hazard(_tail_spec(family, link, first=5), risk_set).tail
    assert tail is not None
    assert abs(np.log(tail.shape / 1.4)) < 3.5 * tail.log_shape_se < 0.1
    assert abs(np.log(tail.scale / 40.0)) < 3.5 * tail.log_scale_se < 0.1
    assert abs(tail.step) < 0.25  # it is the model, so there is little to join


# ---- the same likelihood by another route


def _rows(risk_set: RiskSet, features: FeatureTable) -> pd.DataFrame:
    stay = np.repeat(np.arange(risk_set.stay_loan.size), risk_set.stay_exit - risk_set.stay_entry)
    age = np.concatenate(
        [np.arange(a + 1, b + 1) for a, b in zip(risk_set.stay_entry, risk_set.stay_exit, strict=True)]
    )
    frame = pd.DataFrame(
        {"age": age, "event": (risk_set.stay_cause[stay] == 1) & (age == risk_set.stay_exit[stay])}
    )
    other = (risk_set.stay_cause[stay] > 1) & (age == risk_set.stay_exit[stay])
    for name, column in risk_set.static.items():
        frame[name] = column[risk_set.stay_loan[stay]]
    for name, column in risk_set.moving.items():
        frame[name] = column
    at = risk_set.stay_origin[stay] + age - features.start
    for j, name in enumerate(features.names):
        frame[name] = features.values[at, j]
    frame["weight"] = risk_set.weight[stay]
    kept: pd.DataFrame = frame.loc[~other]
    return kept


@FAMILIES
@LINKS
def test_the_maximum_is_that_of_a_plain_search_over_rows(family: str, link: str) -> None:
    """Every kind of term as offset: loan, macro, category x macro, offset column, moving column, weights."""
    risk_set, features = simulated_panel(loans=900, seed=5, link=link)
    rng = np.random.default_rng(1)
    n = int((risk_set.stay_exit - risk_set.stay_entry).sum())
    risk_set = RiskSet(
        risk_set.frequency, risk_set.causes, risk_set.loan_ids,
        dict(risk_set.static) | {"shift": rng.normal(0.0, 0.3, risk_set.n_loans)},
        risk_set.stay_loan, risk_set.stay_origin, risk_set.stay_entry, risk_set.stay_exit, risk_set.stay_cause,
        rng.choice([1.0, 2.5], risk_set.weight.size), {"late": rng.normal(0.0, 1.0, n)},
    )  # fmt: skip
    spec = make_spec(
        {"age": "spline", "knots": 2, "beyond": family, "tail_from": 4},
        {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"}, {"loan": "late"},
        {"interaction": ("product", "rate")}, {"interaction": ("ltv", "late")}, {"offset": "shift"}, link=link,
    )  # fmt: skip
    fit = fit_hazard(spec, risk_set, features)
    tail = fit.tail
    assert tail is not None
    assert (tail.first, tail.last) == (4, fit.supported_age)
    rows = _rows(risk_set, features)
    rows = rows[(rows["age"] >= 4) & (rows["age"] <= fit.supported_age)]
    p = fit.predict(rows.assign(age=1)).to_numpy()
    rest = (
        np.log(-np.log1p(-p)) if link == "cloglog" else np.log(p / (1.0 - p))
    )  # all ages alike: only the rest varies
    w, y, age = (rows[c].to_numpy() for c in ("weight", "event", "age"))
    assert tail.events == pytest.approx(w[y].sum())
    rest -= np.average(rest, weights=w)

    def minus_llf(theta: np.ndarray[Any, Any]) -> float:
        eta = tail_curve(family, link, age, *theta)[0] + rest
        q = 1.0 - np.exp(-np.exp(eta)) if link == "cloglog" else 1.0 / (1.0 + np.exp(-eta))
        return -float((w * np.where(y, np.log(q), np.log1p(-q))).sum())

    best = optimize.minimize(
        minus_llf,
        [0.2, np.log(200.0)],
        method="Nelder-Mead",
        options={"xatol": 1e-9, "fatol": 1e-11, "maxiter": 2000},
    )
    np.testing.assert_allclose([np.log(tail.shape), np.log(tail.scale)], best.x, atol=2e-6)
    # Errors: expected curvature against the finite-difference Hessian, equal up to the sample's surprise.
    hessian = np.empty((2, 2))
    h = 1e-3
    for i in range(2):
        for j in range(2):
            a, b = np.eye(2)[i] * h, np.eye(2)[j] * h
            x = best.x
            hessian[i, j] = (
                minus_llf(x + a + b) - minus_llf(x + a - b) - minus_llf(x - a + b) + minus_llf(x - a - b)
            ) / (4 * h * h)
    np.testing.assert_allclose(
        [tail.log_shape_se, tail.log_scale_se], np.sqrt(np.diag(np.linalg.inv(hessian))), rtol=0.25
    )


# ---- joining, projecting


@FAMILIES
@LINKS
def test_the_tail_takes_over_at_the_last_supported_age_without_a_step(family: str, link: str) -> None:
    risk_set = lifetimes(family, 1.5, 40.0, n=3000, end=60, rng=np.random.default_rng(3), link=link)
    fit = fit_hazard(_tail_spec(family, link, first=5), risk_set)
    held = fit_hazard(
        make_spec({"age": "steps", "bands": (3, 6, 10, 15, 20, 30, 40)}, {"loan": "x"}, link=link), risk_set
    )
    tail = fit.tail
    assert tail is not None
    np.testing.assert_array_equal(fit.params, held.params)
    ages, none = np.arange(1, 201), np.empty((200, 0))
    z, flat = fit.cell_part(ages, none, ()).z, held.cell_part(ages, none, ()).z
    join = tail.join
    assert join == fit.supported_age
    np.testing.assert_array_equal(z[:join], flat[:join])
    np.testing.assert_array_equal(flat[join:], flat[join - 1])
    own, _ = tail_curve(family, link, ages, float(np.log(tail.shape)), float(np.log(tail.scale)))
    np.testing.assert_allclose(z[join:] - z[join - 1], own[join:] - own[join - 1], rtol=1e-9)
    # From the textbook hazard at mid-period: no more than a period's curvature away.
    ratio = _hazard(family, tail.shape, tail.scale, 199.5) / _hazard(
        family, tail.shape, tail.scale, join - 0.5
    )
    assert np.exp(z[199] - z[join - 1]) == pytest.approx(ratio, rel=0.1 if link == "logit" else 1e-3)
    frame = pd.DataFrame({"age": [join, 200], "x": 1.0})
    part = fit.loan_part({"x": np.array([1.0])}, 1).s[0]
    np.testing.assert_allclose(
        fit.predict(frame), fit.link.probability(part + z[[join - 1, 199]]), rtol=1e-13
    )


def test_the_share_of_lifetime_pd_beyond_the_supported_age_by_hand() -> None:
    """One loan on either side of the last supported age, one far past it; flows multiplied out here."""
    risk_set = lifetimes("loglogistic", 1.6, 25.0, n=400, end=60, rng=np.random.default_rng(11))
    spec = make_spec(
        {"age": "steps", "bands": (5, 10, 20), "support": 100, "beyond": "loglogistic", "tail_from": 1}
    )
    fit = fit_hazard(spec, risk_set)
    at_risk = [int(((risk_set.stay_entry < a) & (risk_set.stay_exit >= a)).sum()) for a in range(1, 61)]
    supported = max(a for a in range(1, 61) if at_risk[a - 1] >= 100)
    assert fit.supported_age == supported < fit.largest_age
    book = Portfolio(
        Frequency.MONTH, 24_100, np.array(["A", "B", "C"], dtype=object), np.array([supported - 3, 0, 80]),
        np.array([6, 4, 2]), np.full(3, 100.0), np.zeros(3), {},
    )  # fmt: skip
    loss = Loss.model_validate(
        {"exposure": {"schedule": "bullet"}, "lgd": {"constant": 0.4}, "discount": "rate"}
    )
    result = assess(
        book,
        {"default": fit},
        no_features(Frequency.MONTH, 24_101, 6),
        loss,
        cells=np.zeros(3, dtype=np.int64),
        n_cells=1,
    )
    # Period hazards: step level of ages 21 to 60, then the log-logistic scaled to it at the last supported age.
    level = 1.0 - np.exp(-np.exp(fit.params["intercept"] + fit.params.get("age[21+]", 0.0)))
    tail = fit.tail
    assert tail is not None

    def grouped(age: int) -> float:
        u, v = ((a / tail.scale) ** tail.shape for a in (age, age - 1))
        return float(np.log((1.0 + u) / (1.0 + v)))

    def p(age: int) -> float:
        return float(1.0 - (1.0 - level) ** (grouped(age) / grouped(supported)) if age > supported else level)

    assert p(supported + 1) < level
    h = [p(supported - 2 + j) for j in range(6)]
    flows = [h[j] * float(np.prod([1.0 - q for q in h[:j]])) for j in range(6)]
    assert result.loans["pd_lifetime"][0] == pytest.approx(sum(flows), rel=1e-12)
    assert result.loans["extrapolated"][0] == pytest.approx(sum(flows[3:]), rel=1e-12)
    assert result.loans["extrapolated"][1] == 0.0
    old = p(81) + (1.0 - p(81)) * p(82)
    assert result.loans["extrapolated"][2] == result.loans["pd_lifetime"][2] == pytest.approx(old, rel=1e-12)


def test_a_saved_tail_comes_back_to_the_same_bits() -> None:
    risk_set = lifetimes("loglogistic", 1.6, 25.0, n=800, end=60, rng=np.random.default_rng(4))
    fit = fit_hazard(_tail_spec("loglogistic", "cloglog", first=1), risk_set)
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.tail == fit.tail
    assert again.supported_age == fit.supported_age
    ages = np.arange(1, 300)
    none = np.empty((ages.size, 0))
    np.testing.assert_array_equal(again.cell_part(ages, none, ()).z, fit.cell_part(ages, none, ()).z)
    document = json.loads(fit.to_json())
    for change, words in (
        ({"tail": None}, "no tail, but the spec says beyond: loglogistic"),
        (
            {"tail": document["tail"] | {"family": "weibull"}},
            "weibull with cloglog, the spec says loglogistic",
        ),
        ({"tail": document["tail"] | {"shape": -1.0}}, "must be above 0"),
        ({"tail": {k: v for k, v in document["tail"].items() if k != "join"}}, "join"),
    ):
        with pytest.raises(TextError, match="saved hazard: tail") as caught:
            sk.HazardFit.from_json(json.dumps(document | change))
        assert words in str(caught.value)


def test_the_summary_tells_the_tail() -> None:
    risk_set = lifetimes("weibull", 0.7, 80.0, n=1500, end=60, rng=np.random.default_rng(5))
    fit = fit_hazard(_tail_spec("weibull", "cloglog", first=5), risk_set)
    assert fit.tail is not None
    text = " ".join(fit.summary().split())
    for words in (
        f"age beyond {fit.supported_age}: weibull tail, shape {fit.tail.shape:.4g} (95 %", f"supported to {fit.supported_age}",
        f"fitted on ages 5 to {fit.supported_age}",
    ):  # fmt: skip
        assert words in text, words


# ---- refusals


@pytest.mark.parametrize(
    ("more", "words"),
    [
        ({"tail_from": 300}, "needs at least two ages"),
        ({"support": 100_000}, "support 100000 asks for more than"),
    ],
)
def test_windows_that_hold_nothing_are_refused(more: dict[str, Any], words: str) -> None:
    risk_set = lifetimes("weibull", 1.0, 80.0, n=500, end=60, rng=np.random.default_rng(6))
    with pytest.raises(NumericError, match=words):
        fit_hazard(_tail_spec("weibull", "cloglog", **more), risk_set)


def test_too_few_events_are_refused() -> None:
    risk_set = lifetimes("weibull", 1.0, 2000.0, n=500, end=60, rng=np.random.default_rng(6))
    with pytest.raises(NumericError, match=r"hold \d+ events, fewer than 20"):
        fit_hazard(make_spec({"age": "linear", "beyond": "weibull"}), risk_set)


@FAMILIES
def test_a_hazard_that_falls_faster_than_either_family_can_is_refused(family: str) -> None:
    rng = np.random.default_rng(8)
    p = 0.3 * np.exp(-0.25 * np.arange(40))
    gone = rng.random((3000, 40)) < p
    event = gone.any(axis=1)
    rows = pd.DataFrame({"exit": np.where(event, gone.argmax(axis=1) + 1, 40), "event": event})
    risk_set = RiskSet(
        Frequency.MONTH, ("default",), np.array([f"L{i:05d}" for i in range(3000)], dtype=object), {}, np.arange(3000),
        np.full(3000, 24_000), np.zeros(3000, dtype=np.int64), rows["exit"].to_numpy(), rows["event"].to_numpy().astype(np.int64), np.ones(3000),
    )  # fmt: skip
    with pytest.raises(NumericError, match="neither family falls faster than 1/age"):
        fit_hazard(make_spec({"age": "linear", "beyond": family, "tail_from": 8}), risk_set)


@pytest.mark.parametrize(
    ("terms", "words"),
    [
        (
            ({"age": "linear", "beyond": "weibull"}, {"loan": "x"}, {"interaction": ("age", "x")}),
            "one baseline for all loans",
        ),
        (({"age": "linear", "tail_from": 3},), "tail_from belongs to beyond"),
        (({"age": "linear", "until": 30},), "until belongs to age: spline"),
        (({"age": "linear", "beyond": "gompertz"},), "beyond"),
    ],
)
def test_specs_that_say_nothing_sensible_about_the_tail(
    terms: tuple[dict[str, Any], ...], words: str
) -> None:
    with pytest.raises(ValueError, match=words):
        make_spec(*terms)
