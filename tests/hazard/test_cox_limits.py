"""Periods that shrink: the grouped fits go to the continuous-time ones they group (Cox, Weibull)."""

from __future__ import annotations

import warnings
from collections.abc import Callable

import numpy as np
import pandas as pd
import pytest
from lifelines import CoxPHFitter

import stresskit as sk
from stresskit.core.period import Frequency
from stresskit.core.values import RiskSet
from tests.hazard.hazard_cases import PERSON_PERIOD, make_spec

SURVREG = pd.read_csv(PERSON_PERIOD / "survreg_R.csv")
LUNG = ("years", "sex", "ph.ecog")


def _lung() -> pd.DataFrame:
    return pd.read_csv(PERSON_PERIOD / "lung227.csv").rename(columns={"age": "years"})


def _gehan() -> pd.DataFrame:
    return pd.read_csv(PERSON_PERIOD / "gehan.csv").rename(columns={"last_age": "time"})


def _risk_set(people: pd.DataFrame, columns: tuple[str, ...], width: float) -> RiskSet:
    n = len(people)
    ids = np.array([f"P{i:04d}" for i in range(n)], dtype=object)
    return RiskSet(
        Frequency.MONTH, ("default",), ids, {c: people[c].to_numpy(dtype=float) for c in columns}, np.arange(n),
        np.zeros(n, dtype=np.int64), np.zeros(n, dtype=np.int64), np.ceil(people["time"].to_numpy() / width).astype(np.int64),
        people["event"].to_numpy(dtype=np.int64), np.ones(n),
    )  # fmt: skip


def _without_empty_periods(risk_set: RiskSet) -> RiskSet:
    """Periods without an event taken out and the others numbered 1, 2, ...: their own level would be minus infinity."""
    full = np.unique(risk_set.stay_exit[risk_set.stay_cause == 1])
    exits = np.searchsorted(full, risk_set.stay_exit, side="right")
    kept = exits > 0
    return RiskSet(
        risk_set.frequency, risk_set.causes, risk_set.loan_ids[kept], {k: v[kept] for k, v in risk_set.static.items()},
        np.arange(int(kept.sum())), risk_set.stay_origin[kept], risk_set.stay_entry[kept], exits[kept], risk_set.stay_cause[kept], risk_set.weight[kept],
    )  # fmt: skip


def _cox(people: pd.DataFrame, columns: tuple[str, ...]) -> pd.DataFrame:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", category=DeprecationWarning)  # from inside lifelines
        warnings.simplefilter("ignore", category=FutureWarning)
        fitter = CoxPHFitter().fit(people[["time", "event", *columns]], "time", "event")
    table: pd.DataFrame = fitter.summary[["coef", "se(coef)"]]
    return table


def test_cloglog_with_a_level_per_period_goes_to_cox_as_periods_shrink() -> None:
    """Prentice and Gloeckler 1978: the grouped model has Cox's coefficients, whatever the width; less is lost the finer it is.

    Largest gap to lifelines' Cox fit (Efron's ties), in its standard errors: 0.45 at half years (165 deaths in 6 periods), 0.20 at
    quarters, 0.11 at months, 0.04 at a week. At a day 0.03 is left and stays: deaths on the same day, which Efron's formula and a
    grouped likelihood treat differently. Standard errors come to 0.1 %.
    """
    cox = _cox(_lung(), LUNG)
    gaps, errors = [], []
    for width in (180, 90, 30, 7, 1):
        risk_set = _without_empty_periods(_risk_set(_lung(), LUNG, width))
        fit = sk.fit_hazard(
            make_spec({"age": "steps"}, *({"loan": c} for c in LUNG), intercept=False), risk_set
        )
        gaps.append(float((np.abs(fit.params[list(LUNG)] - cox["coef"]) / cox["se(coef)"]).max()))
        errors.append(
            float(np.abs(fit.standard_errors("model_observed")[list(LUNG)] / cox["se(coef)"] - 1.0).max())
        )
    assert gaps == sorted(gaps, reverse=True)
    assert (np.array(gaps) < [0.5, 0.25, 0.15, 0.05, 0.04]).all()
    assert errors[-1] < 2e-3 < 0.03 < errors[0]


@pytest.mark.parametrize(
    ("model", "people", "columns", "widths"),
    [("gehan_weibull", _gehan, ("trt",), (1.0, 1 / 4, 1 / 16)), ("lung227_weibull", _lung, LUNG, (7.0, 1.0, 1 / 4))],
)  # fmt: skip
def test_cloglog_in_log_age_and_the_weibull_tail_go_to_rs_survreg(
    model: str, people: Callable[[], pd.DataFrame], columns: tuple[str, ...], widths: tuple[float, ...]
) -> None:
    """survreg: ln T = mu + x b + scale * Gumbel, so shape = 1/scale and proportional-hazards effects are -b/scale.

    R takes a recorded time as the exact moment, a period only knows that it lies within: an error of order width/time, the largest
    for the earliest deaths, that falls as the width does (here: to a quarter as the width is quartered). Gehan's weeks run from 1
    to 35, so a week is coarse: shapes 6 and 10 % off, at a sixteenth 0.2 and 0.5 %. Relative tolerances at the finest width: 0.5 %
    for the shape from ``age: log``, 1 % from the tail; effects within 0.005 of R's standard errors.
    """
    frame = people()
    reference = SURVREG[SURVREG["model"] == model].replace({"term": {"age": "years"}}).set_index("term")
    scale = float(reference["scale"].iloc[0])
    effects = -reference.loc[list(columns), "coef"].to_numpy() / scale
    errors = reference.loc[list(columns), "se"].to_numpy() / scale
    from_log, from_tail, fits = [], [], []
    for width in widths:
        age = {"age": "log", "support": 1, "beyond": "weibull", "tail_from": 1}
        fit = sk.fit_hazard(make_spec(age, *({"loan": c} for c in columns)), _risk_set(frame, columns, width))
        assert fit.tail is not None
        from_log.append(abs((1.0 + fit.params["age[log]"]) * scale - 1.0))
        from_tail.append(abs(fit.tail.shape * scale - 1.0))
        fits.append(fit)
    assert from_log[2] < from_log[1] < from_log[0]
    assert from_tail[2] < 0.5 * from_tail[1] < from_tail[0]
    assert from_log[2] < 0.005
    assert from_tail[2] < 0.01
    finest = fits[-1]
    assert (np.abs(finest.params[list(columns)].to_numpy() - effects) < 0.005 * errors).all()
    # Density against probability of a period: log-likelihoods differ by ln(width) per event.
    events = float(frame["event"].sum())
    assert finest.llf - events * np.log(widths[-1]) == pytest.approx(
        float(reference["loglik"].iloc[0]), abs=0.05
    )


def test_the_whole_lung_sample_gives_rs_log_logistic_without_covariates() -> None:
    """survreg log-logistic: shape = 1/scale, scale = e^mu, in days; one level for everyone, so nothing is an offset.

    Times in quarters of a day, for the reason above: whole days leave 0.5 % on the shape, quarters 0.13 %.
    """
    reference = SURVREG[SURVREG["model"] == "lung227_loglogistic_null"].set_index("term")
    middle, spread = (
        reference.loc[name, ["coef", "se"]].astype(float) for name in ("(Intercept)", "Log(scale)")
    )
    age = {"age": "log", "support": 1, "beyond": "loglogistic", "tail_from": 1}
    tail = sk.fit_hazard(make_spec(age), _risk_set(_lung(), (), 0.25)).tail
    assert tail is not None
    assert tail.shape == pytest.approx(1.0 / float(reference["scale"].iloc[0]), rel=2e-3)
    assert 0.25 * tail.scale == pytest.approx(float(np.exp(middle["coef"])), rel=2e-3)
    assert tail.log_shape_se == pytest.approx(spread["se"], rel=0.05)
    assert tail.log_scale_se == pytest.approx(middle["se"], rel=0.05)
