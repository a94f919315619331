"""A start from a sample of loans: fewer passes over all rows, the same answer."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from stresskit.core.values import FeatureTable, RiskSet
from stresskit.hazard import warm_start
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import Backend, fit_hazard
from tests.hazard.hazard_cases import make_spec, simulated_panel

TERMS: tuple[dict[str, Any], ...] = (
    {"age": "linear"}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"},
)  # fmt: skip


@pytest.fixture(scope="module")
def panel() -> tuple[RiskSet, FeatureTable]:
    return simulated_panel(loans=6000)


@pytest.fixture
def eager(monkeypatch: pytest.MonkeyPatch) -> None:
    """Samples of every third loan for books of any size."""
    for name, value in (("LEAST_ROWS", 0), ("LEAST_STAYS", 0), ("LEAST_EVENTS", 1), ("STEP", 3)):
        monkeypatch.setattr(warm_start, name, value)


@pytest.mark.parametrize("backend", ["rows", "factored"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_the_start_changes_the_number_of_steps_and_nothing_else(
    panel: tuple[RiskSet, FeatureTable], link: str, backend: Backend, request: pytest.FixtureRequest
) -> None:
    spec = make_spec(*TERMS, link=link)
    cold = fit_hazard(spec, *panel, backend=backend)
    request.getfixturevalue("eager")
    warm = fit_hazard(spec, *panel, backend=backend)
    assert warm.facts.iterations <= cold.facts.iterations
    error = np.sqrt(np.diag(cold.covariances.matrix("model_expected")))
    assert (np.abs(warm.coefficients - cold.coefficients) <= 2e-8 * error).all()
    assert warm.facts.llf == pytest.approx(cold.facts.llf, rel=1e-13)
    assert [g.passed for g in warm.gates] == [g.passed for g in cold.gates]


@pytest.mark.usefixtures("eager")
def test_from_the_maximum_itself_two_steps_do(
    panel: tuple[RiskSet, FeatureTable], monkeypatch: pytest.MonkeyPatch
) -> None:
    """A sample of all loans: the last decimals are all that is left."""
    monkeypatch.setattr(warm_start, "STEP", 1)
    assert fit_hazard(make_spec(*TERMS), *panel).facts.iterations <= 2


@pytest.mark.usefixtures("eager")
def test_two_threads_and_a_sample_give_the_same_bits(panel: tuple[RiskSet, FeatureTable]) -> None:
    spec = make_spec(*TERMS)
    assert fit_hazard(spec, *panel).to_json() == fit_hazard(spec, *panel, threads=2).to_json()


def test_a_sample_that_cannot_be_fitted_leaves_the_start_as_it_was(
    panel: tuple[RiskSet, FeatureTable], request: pytest.FixtureRequest
) -> None:
    """All of the loans of a level stand where the sample does not look, so there the column is 0 throughout."""
    risk_set, features = panel
    used = cause_rows(risk_set, "default", features, ("rate",)).loan_ids[1::3]
    static = {**risk_set.static, "odd": np.isin(risk_set.loan_ids, used).astype(float)}
    risk_set = dataclasses.replace(risk_set, static=static)
    spec = make_spec(*TERMS, {"loan": "odd"})
    cold = fit_hazard(spec, risk_set, features)
    request.getfixturevalue("eager")
    assert fit_hazard(spec, risk_set, features).to_json() == cold.to_json()


def test_small_books_are_fitted_at_once(
    panel: tuple[RiskSet, FeatureTable], monkeypatch: pytest.MonkeyPatch
) -> None:
    def never(*_: Any, **__: Any) -> None:
        raise AssertionError("a sample was drawn")

    monkeypatch.setattr(warm_start, "sample", never)
    fit_hazard(make_spec(*TERMS), *panel)
