"""The gates of a finished fit: each one passing and failing, and what is saved of them."""

from __future__ import annotations

import json
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray

import stresskit as sk
from stresskit.core.errors import TextError
from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.fit import Backend, choose_sums, fit_hazard
from stresskit.hazard.link import LINKS
from stresskit.hazard.sums import hazard_data
from stresskit.hazard.usable import HARD, Gate, largest_run
from tests.hazard.hazard_cases import feature_table, make_spec, simulated_panel

Panel = tuple[RiskSet, FeatureTable]
Floats = NDArray[np.float64]
BACKENDS = pytest.mark.parametrize("backend", ["rows", "factored"])
LINK_NAMES = pytest.mark.parametrize("link", ["cloglog", "logit"])
SOFT = ("actual_expected", "levels", "macro_range", "events_per_coefficient", "periods")
BASE: tuple[dict[str, Any], ...] = (
    {"age": "linear"}, {"loan": "ltv"}, {"loan": "product", "as": "category", "reference": "fixed"}, {"macro": "rate"},
)  # fmt: skip


def _gate(fit: sk.HazardFit, name: str) -> Gate:
    return {g.name: g for g in fit.gates}[name]


def _book(n: int = 6000, seed: int = 0, **columns: Any) -> pd.DataFrame:
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame(
        {"loan": np.arange(n), "age": rng.integers(1, 7, n), "period": 24_000 + rng.integers(0, 40, n)}
    )
    frame["region"] = rng.choice(["coast", "north", "valley"], n)
    return frame.assign(**columns)


def _risk_set(frame: pd.DataFrame) -> RiskSet:
    static = [c for c in frame.columns if c not in ("loan", "age", "period", "event", "w")]
    weight = "w" if "w" in frame.columns else None
    return sk.risk_set_from_rows(
        frame, loan="loan", age="age", event="event", period="period", static=static, weight=weight
    )


@BACKENDS
@LINK_NAMES
def test_a_sound_fit_passes_every_gate_and_says_what_was_asked_and_found(
    panel: Panel, link: str, backend: Backend
) -> None:
    fit = fit_hazard(make_spec(*BASE, link=link), *panel, backend=backend)
    assert tuple(g.name for g in fit.gates) == (*HARD, *SOFT)
    assert all(g.passed and g.asked and g.found and not g.remedy for g in fit.gates)
    assert fit.failed_gates == ()
    assert _gate(fit, "events").found == f"{fit.n_events:.0f} events in {fit.nobs:,.0f} rows"
    assert "<= 1e-10 and scaled gradient <= 1e-08" in _gate(fit, "convergence").asked
    assert "gates passed: events, rank, separation, convergence, actual_expected" in fit.summary()
    assert "FAILED" not in fit.summary()


# ---- expected events of loans


@LINK_NAMES
@pytest.mark.parametrize("shift", [0.0, 4.0])
def test_expected_events_of_loans_are_those_of_their_rows(panel: Panel, link: str, shift: float) -> None:
    """Both backends against predict, row by row; with +4 on the intercept hazards exceed 1, where the power series ends."""
    risk_set, features = panel
    fit = fit_hazard(make_spec(*BASE, link=link), risk_set, features)
    params = fit.coefficients.copy()
    params[0] += shift
    from_rows, rows = _loan_sums(fit, panel, params, "rows")
    factored, _ = _loan_sums(fit, panel, params, "factored")
    np.testing.assert_allclose(factored[0], from_rows[0], rtol=1e-11)
    np.testing.assert_allclose(factored[1], from_rows[1], rtol=1e-11, atol=1e-15)
    stay = np.repeat(np.arange(rows.loan.size), rows.exit - rows.entry)
    age = np.concatenate([np.arange(a + 1, b + 1) for a, b in zip(rows.entry, rows.exit, strict=True)])
    period = rows.origin[stay] + age
    frame = pd.DataFrame({k: v[rows.loan[stay]] for k, v in rows.static.items()} | {"age": age})
    frame["rate"] = features.column("rate")[period - features.start]
    p = fit.link.probability(_eta(frame, params))
    loan = rows.loan[stay]
    np.testing.assert_allclose(from_rows[0], np.bincount(loan, p), rtol=1e-11)
    np.testing.assert_allclose(from_rows[1], np.bincount(loan, p * (1 - p)), rtol=1e-9, atol=1e-12)


def _eta(frame: pd.DataFrame, params: Floats) -> Floats:
    return np.asarray(
        params[0] + params[1] * frame["age"].to_numpy() + params[2] * frame["ltv"].to_numpy(dtype=float)
        + params[3] * (frame["product"] == "floating").to_numpy() + params[4] * (frame["product"] == "other").to_numpy()
        + params[5] * frame["rate"].to_numpy()
    )  # fmt: skip


def _loan_sums(
    fit: sk.HazardFit, panel: Panel, params: Floats, backend: Backend
) -> tuple[tuple[Floats, Floats], CauseRows]:
    rows = cause_rows(panel[0], "default", panel[1], ("rate",))
    data = hazard_data(fit.design, rows, panel[1], LINKS[fit.spec.link])
    return choose_sums(data, backend=backend).expected_by_loan(params), rows


# ---- actual = expected


@LINK_NAMES
def test_actual_is_expected_under_an_intercept_and_not_under_a_wrong_level(link: str) -> None:
    rng = np.random.default_rng(4)
    frame = _book(event=rng.random(6000) < 0.1)
    frame["x"] = rng.normal(0.5, 1.0, 6000)
    kept = _gate(fit_hazard(make_spec({"loan": "x"}, link=link), _risk_set(frame)), "actual_expected")
    assert kept.passed
    assert ("<= 1e-06" if link == "logit" else "<= 0.01") in kept.asked
    lost = _gate(
        fit_hazard(make_spec({"loan": "x"}, link=link, intercept=False), _risk_set(frame)), "actual_expected"
    )
    assert not lost.passed
    assert f"{frame['event'].sum()} events" in lost.found
    assert "intercept" in lost.remedy


def test_bias_reduction_with_few_events_is_seen_by_the_gate() -> None:
    """Firth's logit expects half an event more per coefficient or so: 8 events, 2 coefficients (Puhr and others 2017)."""
    frame = _book(400, event=False)
    frame.loc[:7, "event"] = True
    frame["x"] = np.arange(400) % 7 - 3.0
    fit = fit_hazard(make_spec({"loan": "x"}, link="logit", bias_reduction="firth"), _risk_set(frame))
    gate = _gate(fit, "actual_expected")
    assert not gate.passed
    assert float(gate.found.split()[2]) == pytest.approx(9.0, abs=0.2)


# ---- levels


def _by_region(lift: float, n: int = 6000, seed: int = 2) -> pd.DataFrame:
    frame = _book(n)
    p = 0.08 * np.where(frame["region"] == "coast", lift, 1.0)
    return frame.assign(event=np.random.default_rng(seed).random(n) < p)


def test_a_segment_that_the_hazard_leaves_out_is_named_when_it_is_off() -> None:
    frame = _by_region(1.8)
    gate = _gate(fit_hazard(make_spec({"age": "linear"}), _risk_set(frame)), "levels")
    assert not gate.passed
    actual = int(frame.loc[frame["region"] == "coast", "event"].sum())
    assert f"region[coast] {actual} events" in gate.found
    assert "3 comparisons" in gate.found
    assert " on 2;" in gate.found
    with_it = fit_hazard(make_spec({"age": "linear"}, {"loan": "region", "as": "category"}), _risk_set(frame))
    mended = _gate(with_it, "levels")
    assert mended.passed
    assert " on 0;" in mended.found


def test_the_statistic_of_a_level_by_hand() -> None:
    """Intercept only: every row has the same probability, so A, E and V are counts."""
    frame = _by_region(1.8, 600)
    fit = fit_hazard(make_spec(link="logit"), _risk_set(frame))
    p = frame["event"].mean()
    by = frame.groupby("region")["event"].agg(["sum", "size"])
    chi = ((by["sum"] - by["size"] * p) ** 2 / (by["size"] * p * (1 - p))).sum()
    assert f"3 comparisons, chi-square {chi:.1f} on 2" in _gate(fit, "levels").found


@pytest.mark.parametrize(("lift", "n"), [(1.05, 400_000), (1.35, 600)])
def test_a_level_off_by_little_or_by_chance_passes(lift: float, n: int) -> None:
    """5 % off is plain to see in 400,000 rows and small; 35 % off in 600 rows is what chance does."""
    assert _gate(fit_hazard(make_spec(), _risk_set(_by_region(lift, n))), "levels").passed


def test_small_levels_are_joined_and_identifiers_are_no_breakdown() -> None:
    frame = _by_region(1.0, 2000)
    frame.loc[:30, "region"] = "isle"
    frame.loc[31:60, "region"] = "moor"
    frame["name"] = [f"borrower {i}" for i in range(2000)]
    frame["score"] = np.linspace(0.0, 1.0, 2000)
    gate = _gate(fit_hazard(make_spec(), _risk_set(frame)), "levels")
    assert "2 small levels joined" in gate.found
    assert "3 comparisons" in gate.found
    assert "borrower" not in gate.found


def test_a_number_of_few_values_is_a_breakdown_too() -> None:
    frame = _by_region(1.8).rename(columns={"region": "name"})
    frame["grade"] = (frame.pop("name") == "coast").astype(int)
    frame["score"] = np.linspace(0.0, 1.0, len(frame))
    found = _gate(fit_hazard(make_spec(), _risk_set(frame)), "levels").found
    assert "2 comparisons" in found
    assert "grade[1] " in found


@BACKENDS
def test_weights_count_as_rows(backend: Backend) -> None:
    frame = _by_region(1.8, 900)
    doubled = pd.concat([frame, frame.assign(loan=frame["loan"] + 10_000)])
    a = fit_hazard(make_spec(), _risk_set(frame.assign(w=2.0)), backend=backend)
    b = fit_hazard(make_spec(), _risk_set(doubled), backend=backend)
    assert [g.found.split(";")[0] for g in a.gates if g.name in SOFT] == [
        g.found.split(";")[0] for g in b.gates if g.name in SOFT
    ]


# ---- macro features


def test_a_feature_whose_variation_is_one_episode_fails() -> None:
    rng = np.random.default_rng(0)
    frame = _book(event=rng.random(6000) < 0.1)
    spike = np.where((np.arange(40) >= 20) & (np.arange(40) < 24), 3.0, 0.0) + rng.normal(0, 0.05, 40)
    gate = _gate(
        fit_hazard(make_spec({"macro": "m"}), _risk_set(frame), feature_table(24_000, m=spike)), "macro_range"
    )
    assert not gate.passed
    share, (first, last) = largest_run(spike)
    assert (first, last) == (20, 23)
    # 4 of 40 at 3, mean 0.3: 4 * 2.7^2 of 4 * 2.7^2 + 36 * 0.3^2
    assert share == pytest.approx(29.16 / 32.4, abs=0.02)
    assert f"largest run {share:.0%} (2001-09 to 2001-12)" in gate.found
    twice = spike.copy()
    twice[30:34] = 3.0
    again = fit_hazard(make_spec({"macro": "m"}), _risk_set(frame), feature_table(24_000, m=twice))
    assert _gate(again, "macro_range").passed


def test_a_feature_with_next_to_no_variation_fails() -> None:
    rng = np.random.default_rng(0)
    frame = _book(event=rng.random(6000) < 0.1)
    wobble = rng.normal(size=40)
    flat = fit_hazard(
        make_spec({"macro": "m"}), _risk_set(frame), feature_table(24_000, m=5.0 + 1e-3 * wobble)
    )
    gate = _gate(flat, "macro_range")
    assert not gate.passed
    assert "next to no variation" in gate.found
    assert _gate(
        fit_hazard(make_spec({"macro": "m"}), _risk_set(frame), feature_table(24_000, m=5.0 + wobble)),
        "macro_range",
    ).passed


def test_the_largest_run_by_hand() -> None:
    # mean 2: deviations -2, -2 | 1, 3 | -1 | 1; squares 8 | 10 | 1 | 1
    assert largest_run(np.array([0.0, 0.0, 3.0, 5.0, 1.0, 3.0])) == (0.5, (2, 3))
    assert largest_run(np.ones(4)) == (0.0, (0, 3))


# ---- how much there is


def test_events_per_coefficient_counts_the_fewer_of_events_and_survivors() -> None:
    frame = _book(300, event=False)
    frame.loc[:11, "event"] = True
    frame["x"] = np.random.default_rng(0).normal(size=300)
    terms = ({"age": "linear"}, {"loan": "x"})
    gate = _gate(fit_hazard(make_spec(*terms), _risk_set(frame)), "events_per_coefficient")
    assert not gate.passed
    assert gate.found == "12 events for 3 coefficients: 4.0"
    many = fit_hazard(make_spec(*terms), _risk_set(frame.assign(event=~frame["event"])))
    assert _gate(many, "events_per_coefficient").found == gate.found
    fewer = fit_hazard(make_spec({"loan": "x"}), _risk_set(frame))
    assert _gate(fewer, "events_per_coefficient").passed


@pytest.mark.parametrize(
    ("months", "macros", "passed"), [(19, 1, False), (20, 1, True), (20, 2, True), (29, 3, False)]
)
def test_periods_for_macro_terms(months: int, macros: int, passed: bool) -> None:
    risk_set, features = simulated_panel(months=months)
    third = feature_table(
        features.start, rate=features.column("rate"), gap=features.column("gap"),
        more=np.random.default_rng(0).normal(size=features.n_periods),
    )  # fmt: skip
    spec = make_spec({"loan": "ltv"}, *({"macro": name} for name in ("rate", "gap", "more")[:macros]))
    gate = _gate(fit_hazard(spec, risk_set, third), "periods")
    assert gate.passed is passed
    assert gate.found == f"{months} periods, {macros} macro coefficients"
    assert _gate(fit_hazard(make_spec({"loan": "ltv"}), risk_set, third), "periods").passed


def test_nearly_all_events_in_one_period_fail_the_gate_of_periods() -> None:
    risk_set, features = simulated_panel(months=30)
    period = risk_set.stay_origin + risk_set.stay_exit
    worst = np.bincount(period[risk_set.stay_cause > 0]).argmax()
    alone = np.where(period == worst, risk_set.stay_cause, 0)
    spec = make_spec({"macro": "rate"})
    assert _gate(fit_hazard(spec, risk_set, features), "periods").passed
    gate = _gate(fit_hazard(spec, replace(risk_set, stay_cause=alone), features), "periods")
    assert not gate.passed
    assert gate.found.endswith(", 1 macro coefficients, 100% of the events in one period")


def test_the_rank_gate_says_how_near_it_was(panel: Panel) -> None:
    risk_set, features = panel
    near = features.column("rate") + 1e-3 * features.column("gap")
    table = feature_table(features.start, rate=features.column("rate"), near=near)
    fit = fit_hazard(make_spec({"macro": "rate"}, {"macro": "near"}), risk_set, table)
    found = _gate(fit, "rank").found
    assert "rate" in found or "near" in found
    assert 1e-8 < float(found.split(": ")[1]) < 1e-4


def test_settled_separation_is_told() -> None:
    frame = _by_region(1.0, 900)
    frame.loc[frame["region"] == "valley", "event"] = False
    spec = make_spec({"loan": "region", "as": "category", "reference": "north"}, when_separated="pool")
    assert "settled as the study says: " in _gate(fit_hazard(spec, _risk_set(frame)), "separation").found


# ---- shown and saved


def _failing() -> sk.HazardFit:
    return fit_hazard(make_spec({"age": "linear"}), _risk_set(_by_region(1.8)))


def test_a_failed_gate_is_in_the_summary_with_its_remedy_or_its_reason() -> None:
    text = " ".join(_failing().summary().split())
    assert "GATE levels FAILED: asked no level with" in text
    assert "until then the fit is not projected" in text
    spec = make_spec({"age": "linear"}, accept={"levels": "the coast is modelled apart"})
    accepted = fit_hazard(spec, _risk_set(_by_region(1.8)))
    assert [g.name for g in accepted.failed_gates] == ["levels"]
    assert "Accepted: the coast is modelled apart" in " ".join(accepted.summary().split())
    assert max(len(line) for line in accepted.summary().splitlines()) <= 100


def test_gates_are_saved_with_the_model() -> None:
    fit = _failing()
    again = sk.HazardFit.from_json(fit.to_json())
    assert again.gates == fit.gates
    assert again.to_json() == fit.to_json()
    document = json.loads(fit.to_json())
    assert document["version"] == 2
    assert [g["name"] for g in document["gates"] if not g["passed"]] == ["levels"]
    del document["gates"][0]["found"]
    with pytest.raises(TextError, match="gates: Gate has keys"):
        sk.HazardFit.from_json(json.dumps(document))
    del document["gates"]
    with pytest.raises(TextError, match="gates: no key 'gates'"):
        sk.HazardFit.from_json(json.dumps(document))


def test_gates_do_not_depend_on_order_threads_or_backend(panel: Panel) -> None:
    risk_set, features = panel
    spec = make_spec(*BASE, {"interaction": ("product", "rate")})
    ways: tuple[tuple[Backend, int], ...] = (("factored", 1), ("factored", 2), ("rows", 1))
    fits = [
        fit_hazard(spec, risk_set, features, backend=backend, threads=threads) for backend, threads in ways
    ]
    assert fits[0].gates == fits[1].gates
    for a, b in zip(fits[0].gates, fits[2].gates, strict=True):
        assert (a.name, a.passed, a.asked) == (b.name, b.passed, b.asked)
