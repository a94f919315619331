"""A start from a few blocks: fewer passes over all rows, the same answer."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard import warm_start
from stresskit.hazard.at_risk import CauseRows, cause_rows
from stresskit.hazard.factored import FactoredSums
from stresskit.hazard.fit import Backend, fit_hazard
from stresskit.hazard.gates import RunawayWatch
from stresskit.hazard.learn import learn_design
from stresskit.hazard.link import LINKS
from stresskit.hazard.newton import maximise
from stresskit.hazard.sums import hazard_data
from tests.hazard.hazard_cases import make_spec, simulated_panel

TERMS: tuple[dict[str, Any], ...] = (
    {"age": "linear"}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"},
)  # fmt: skip


@pytest.fixture(scope="module")
def panel() -> tuple[RiskSet, FeatureTable]:
    return simulated_panel(loans=6000)


@pytest.fixture
def eager(monkeypatch: pytest.MonkeyPatch) -> None:
    """Every third of many blocks for books of any size."""
    for name, value in (
        ("LEAST_ROWS", 0),
        ("LEAST_EVENTS", 1),
        ("STEP", 3),
        ("FEWEST", 2),
        ("LEAST_STEP", 2),
    ):
        monkeypatch.setattr(warm_start, name, value)
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 256)


@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_the_start_changes_the_number_of_steps_and_nothing_else(
    panel: tuple[RiskSet, FeatureTable], link: str, backend: Backend, request: pytest.FixtureRequest
) -> None:
    spec = make_spec(*TERMS, link=link)
    cold = fit_hazard(spec, *panel, backend=backend, block_rows=2000)
    request.getfixturevalue("eager")
    warm = fit_hazard(spec, *panel, backend=backend, block_rows=2000)
    assert warm.facts.iterations <= cold.facts.iterations
    error = np.sqrt(np.diag(cold.covariances.matrix("model_expected")))
    assert (np.abs(warm.coefficients - cold.coefficients) <= 2e-8 * error).all()
    assert warm.facts.llf == pytest.approx(cold.facts.llf, rel=1e-13)
    assert [g.passed for g in warm.gates] == [g.passed for g in cold.gates]


def test_from_the_maximum_itself_two_steps_do(panel: tuple[RiskSet, FeatureTable]) -> None:
    """All blocks are looked at: the last decimals are all that is left."""
    sums, rows, start = _sums(panel)
    part = warm_start.Part(sums, range(sums.blocks))
    watch = RunawayWatch(sums._design, np.ones(sums.k), rows.event_weight)
    near = maximise(part, start, part.evaluate(start), watch=watch, near=warm_start.NEAR)
    assert near.scaled_gradient <= warm_start.NEAR
    assert maximise(sums, near.params, sums.evaluate(near.params), watch=watch).iterations <= 2


def test_blocks_add_up_and_are_chosen_by_their_number(
    panel: tuple[RiskSet, FeatureTable], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 256)
    sums, rows, start = _sums(panel)
    params = start + 0.01
    whole = sums.evaluate(params)
    odd, even = (sums.evaluate_blocks(params, range(a, sums.blocks, 2)) for a in (1, 0))
    assert odd.llf + even.llf == pytest.approx(whole.llf, rel=1e-12)
    np.testing.assert_allclose(odd.score + even.score, whole.score, rtol=1e-9, atol=1e-6)
    assert sums.events_in(range(sums.blocks)) == pytest.approx(rows.event_weight, rel=1e-12)


def _sums(panel: tuple[RiskSet, FeatureTable]) -> tuple[FactoredSums, CauseRows, np.ndarray[Any, Any]]:
    spec = make_spec(*TERMS)
    rows = cause_rows(panel[0], "default", panel[1], spec.macro_features())
    design = learn_design(spec, rows, panel[1])
    start = np.zeros(design.k)
    start[0] = -3.0
    return FactoredSums(hazard_data(design, rows, panel[1], LINKS["cloglog"])), rows, start


@pytest.mark.usefixtures("eager")
def test_two_threads_and_a_sample_give_the_same_bits(panel: tuple[RiskSet, FeatureTable]) -> None:
    spec = make_spec(*TERMS)
    assert fit_hazard(spec, *panel).to_json() == fit_hazard(spec, *panel, threads=2).to_json()


def test_blocks_that_cannot_be_fitted_leave_the_start_as_it_was(
    panel: tuple[RiskSet, FeatureTable], request: pytest.FixtureRequest, monkeypatch: pytest.MonkeyPatch
) -> None:
    """All of the loans of a level stand where nobody looks, so there the column is 0 throughout."""
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 256)
    risk_set, features = panel
    sums, rows, _ = _sums(panel)
    seen = {int(i) for b in range(1, sums.blocks, 3) for i in sums._loan[sums._block(b).part]}
    unseen = [rows.loan_ids[i] for i in range(rows.n_loans) if i not in seen]
    static = {**risk_set.static, "odd": np.isin(risk_set.loan_ids, unseen[::2]).astype(float)}
    risk_set = dataclasses.replace(risk_set, static=static)
    spec = make_spec(*TERMS, {"loan": "odd"})
    cold = fit_hazard(spec, risk_set, features)
    request.getfixturevalue("eager")
    assert fit_hazard(spec, risk_set, features).to_json() == cold.to_json()


def test_small_books_are_fitted_at_once(
    panel: tuple[RiskSet, FeatureTable], monkeypatch: pytest.MonkeyPatch
) -> None:
    def never(*_: Any, **__: Any) -> None:
        raise AssertionError("a few blocks were fitted")

    monkeypatch.setattr(warm_start, "Part", never)
    fit_hazard(make_spec(*TERMS), *panel)
