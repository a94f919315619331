"""Fits of published person-period data against R 4.2.2 (see tests/data/person_period/README.md)."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from tests.hazard.hazard_cases import PERSON_PERIOD, expand, make_spec

R = pd.read_csv(PERSON_PERIOD / "glm_R.csv")
LOG, LINEAR, QUADRATIC, STEPS = ({"age": kind} for kind in ("log", "linear", "quadratic", "steps"))
LUNG = ({"loan": "years"}, {"loan": "sex"}, {"loan": "ph.ecog"})
R_NAMES = {
    "(Intercept)": "intercept",
    "log(period)": "age[log]",
    "period": "age[linear]",
    "I(period^2)": "age[square]",
}


def _gehan() -> pd.DataFrame:
    return expand(pd.read_csv(PERSON_PERIOD / "gehan.csv"))


def _lung(width: int) -> pd.DataFrame:
    people = pd.read_csv(PERSON_PERIOD / "lung227.csv").rename(columns={"age": "years"})
    people["first_age"], people["last_age"] = 1, np.ceil(people["time"] / width).astype(int)
    return expand(people)


def _mgus2(cause: int) -> pd.DataFrame:
    people = pd.read_csv(PERSON_PERIOD / "mgus2_years.csv").rename(columns={"age": "years"})
    people["event"] = (people["event"] == cause).astype(int)
    return expand(people)


def _with_events_only(rows: pd.DataFrame) -> pd.DataFrame:
    """R's dummy fits leave out periods without an event."""
    return rows[rows.groupby("period")["event"].transform("sum") > 0]


CASES = {
    "gehan_cloglog_logt": (_gehan, ({"loan": "trt"}, LOG)),
    "gehan_logit_logt": (_gehan, ({"loan": "trt"}, LOG)),
    "gehan_cloglog_const": (_gehan, ({"loan": "trt"},)),
    "gehan_cloglog_dummies": (lambda: _with_events_only(_gehan()), (STEPS, {"loan": "trt"})),
    "gehan_logit_dummies": (lambda: _with_events_only(_gehan()), (STEPS, {"loan": "trt"})),
    "lung30_cloglog_logt": (lambda: _lung(30), (*LUNG, LOG)),
    "lung30_cloglog_quad": (lambda: _lung(30), (*LUNG, QUADRATIC)),
    "lung30_logit_logt": (lambda: _lung(30), (*LUNG, LOG)),
    "lung30_cloglog_dummies": (lambda: _with_events_only(_lung(30)), (STEPS, *LUNG)),
    "channing_py_cloglog_lin_age": (
        lambda: expand(pd.read_csv(PERSON_PERIOD / "channing_years.csv")), ({"loan": "male"}, LINEAR)
    ),
    "channing_py_cloglog_log_age": (
        lambda: expand(pd.read_csv(PERSON_PERIOD / "channing_years.csv")), ({"loan": "male"}, LOG)
    ),
    "mgus2_cs_cloglog_pcm": (lambda: _mgus2(1), ({"loan": "years"}, {"loan": "male"}, LOG)),
    "mgus2_cs_cloglog_death": (lambda: _mgus2(2), ({"loan": "years"}, {"loan": "male"}, LOG)),
} | {
    f"lung_group{w}d_{link}_dummies": (lambda w=w: _with_events_only(_lung(w)), (STEPS, *LUNG))
    for w in (7, 30, 60, 90, 180)
    for link in ("cloglog", "logit")
}  # fmt: skip


def test_every_model_whose_data_is_here_is_fitted() -> None:
    assert set(CASES) | {"mgus2_multinomial_ev1", "mgus2_multinomial_ev2"} == set(R["model"])


def _ours(name: str, model: str) -> str:
    if name.startswith("factor(period)"):
        return f"age[{name.removeprefix('factor(period)')}]"
    if name == "age":
        return "age[linear]" if model.endswith("lin_age") else "years"
    return {"log(age)": "age[log]"}.get(name) or R_NAMES.get(name, name)


@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("model", sorted(CASES))
def test_coefficients_errors_and_likelihood_are_those_of_r(model: str, backend: str) -> None:
    make_rows, terms = CASES[model]
    rows = make_rows()
    reference = R[R["model"] == model]
    static = [t["loan"] for t in terms if "loan" in t]
    risk_set = sk.risk_set_from_rows(rows, loan="id", age="period", event="event", static=static)
    link = "logit" if "logit" in model else "cloglog"
    fit = sk.fit_hazard(
        make_spec(*terms, link=link, intercept="dummies" not in model), risk_set, backend=backend
    )

    assert len(rows) == int(reference["n"].iloc[0]) == fit.nobs
    assert fit.llf == pytest.approx(float(reference["loglik"].iloc[0]), rel=1e-9)
    names = [_ours(name, model) for name in reference["term"]]
    if "lung_group" not in model:
        assert sorted(names) == sorted(fit.params.index)
    np.testing.assert_allclose(fit.params[names], reference["coef"], rtol=1e-6, atol=1e-7)
    np.testing.assert_allclose(fit.standard_errors("model_expected")[names], reference["se"], rtol=1e-6)


def test_separate_logits_come_close_to_the_multinomial_fit() -> None:
    """Begg and Gray 1984: logits on "cause or survive" estimate the multinomial coefficients, with slightly larger errors."""
    people = pd.read_csv(PERSON_PERIOD / "mgus2_years.csv").rename(columns={"age": "years"})
    risk_set = sk.risk_set_from_rows(
        expand(people),
        loan="id",
        age="period",
        event="event",
        causes=("pcm", "death"),
        static=["years", "male"],
    )
    spec = make_spec({"loan": "years"}, {"loan": "male"}, LOG, link="logit")
    for cause, model in (("pcm", "mgus2_multinomial_ev1"), ("death", "mgus2_multinomial_ev2")):
        fit = sk.fit_hazard(spec, risk_set, cause=cause)
        reference = R[R["model"] == model]
        names = [_ours(name, model) for name in reference["term"]]
        gap = (fit.params[names].to_numpy() - reference["coef"].to_numpy()) / reference["se"].to_numpy()
        assert np.abs(gap).max() < 0.1
        np.testing.assert_allclose(fit.standard_errors("model_expected")[names], reference["se"], rtol=0.02)
        assert fit.nobs == len(expand(people)) - (people["event"] == {"pcm": 2, "death": 1}[cause]).sum()
