"""Features that go by a loan column, through sums with moving columns and through a start from a few blocks."""

from __future__ import annotations

import dataclasses
from typing import Any

import numpy as np
import pytest

from stresskit.core.values import RiskSet
from stresskit.hazard import warm_start
from stresskit.hazard.at_risk import cause_rows
from stresskit.hazard.fit import choose_sums, fit_hazard
from stresskit.hazard.learn import learn_design
from stresskit.hazard.link import LINKS
from stresskit.hazard.moving_sums import MovingSums
from stresskit.hazard.sums import HazardData, LoanSums, RowBlockSums, hazard_data
from tests.hazard.hazard_cases import make_spec
from tests.hazard.keyed_cases import Panel, regional_panel

TERMS: tuple[dict[str, Any], ...] = (
    {"age": "quadratic"}, {"loan": "ltv"}, {"loan": "product", "as": "category"}, {"macro": "rate"}, {"macro": "prices"},
)  # fmt: skip
WITH_ROWS: dict[str, tuple[dict[str, Any], ...]] = {
    "a moving column": (*TERMS, {"loan": "use"}),
    "moving x keyed": (*TERMS, {"loan": "use"}, {"interaction": ("use", "prices")}),
    "number x keyed": (*TERMS, {"interaction": ("ltv", "prices")}),
}


@pytest.fixture(scope="module", params=["cloglog", "logit"])
def link(request: pytest.FixtureRequest) -> str:
    return str(request.param)


def _panel(link: str) -> Panel:
    """With a loan column that has a value of its own in every month."""
    risk_set, features = regional_panel(link)
    use = np.random.default_rng(23).normal(0.3, 1.0, risk_set.n_rows)
    return dataclasses.replace(risk_set, moving={"use": use}), features


def _data(terms: tuple[dict[str, Any], ...], link: str, panel: Panel) -> HazardData:
    spec = make_spec(*terms, link=link)
    rows = cause_rows(panel[0], "default", panel[1], spec.macro_features())
    return hazard_data(learn_design(spec, rows, panel[1]), rows, panel[1], LINKS[link])


def _same_sums(found: LoanSums, plain: LoanSums) -> None:
    params = np.random.default_rng(1).normal(0.0, 0.1, found.k)
    params[0] -= 3.0
    a, b = found.evaluate(params), plain.evaluate(params)
    assert a.llf == pytest.approx(b.llf, rel=1e-12)
    pairs = [(a.score, b.score), (a.information, b.information)]
    pairs.append((found.expected_information(params), plain.expected_information(params)))
    c, d = found.score_products(params), plain.score_products(params)
    pairs += [(c.by_loan, d.by_loan), (c.period_scores, d.period_scores)]
    pairs.append((found.tally(params).by_period, plain.tally(params).by_period))
    pairs += zip(found.expected_by_loan(params), plain.expected_by_loan(params), strict=True)
    for x, y in pairs:
        np.testing.assert_allclose(x, y, rtol=1e-9, atol=1e-9 * float(np.abs(y).max()))


@pytest.mark.parametrize("name", sorted(WITH_ROWS))
def test_sums_with_moving_columns_read_the_loans_own_series(
    name: str, link: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("stresskit.hazard.moving_sums.BLOCK_ROWS", 900)
    # Tracks of cohorts and regions alone, as a book has them whose cells would be too many.
    monkeypatch.setattr("stresskit.hazard.fit.worthwhile", lambda tracks, rows: len(tracks.group_values) <= 3)
    data = _data(WITH_ROWS[name], link, _panel(link))
    sums = choose_sums(data, threads=2)
    assert isinstance(sums, MovingSums)
    _same_sums(sums, RowBlockSums(data, block_rows=1000))


def _of_loans(risk_set: RiskSet, ids: np.ndarray[Any, Any]) -> RiskSet:
    """The risk set without the other loans."""
    keep = np.isin(risk_set.loan_ids, ids)
    stays = keep[risk_set.stay_loan]
    rows = np.repeat(stays, risk_set.stay_exit - risk_set.stay_entry)
    columns = ("stay_origin", "stay_entry", "stay_exit", "stay_cause", "weight")
    return dataclasses.replace(
        risk_set,
        loan_ids=risk_set.loan_ids[keep],
        static={k: v[keep] for k, v in risk_set.static.items()},
        moving={k: v[rows] for k, v in risk_set.moving.items()},
        stay_loan=(np.cumsum(keep) - 1)[risk_set.stay_loan[stays]],
        **{name: getattr(risk_set, name)[stays] for name in columns},
    )


def test_blocks_of_rows_add_up(link: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("stresskit.hazard.moving_sums.BLOCK_ROWS", 2000)
    data = _data(WITH_ROWS["a moving column"], link, _panel(link))
    params = np.full(data.design.k, 0.01)
    for sums in (choose_sums(data), RowBlockSums(data, block_rows=2000)):
        assert sums.blocks > 2
        parts = [sums.evaluate_blocks(params, range(a, sums.blocks, 2)) for a in (0, 1)]
        whole = sums.evaluate(params)
        np.testing.assert_allclose(parts[0].score + parts[1].score, whole.score, rtol=1e-9, atol=1e-7)
        np.testing.assert_allclose(parts[0].llf + parts[1].llf, whole.llf, rtol=1e-12)
        assert sums.events_in(range(sums.blocks)) == data.rows.event_weight


@pytest.mark.parametrize("name", [None, *sorted(WITH_ROWS)])
def test_a_start_from_a_sample_leads_to_the_same_fit(
    name: str | None, link: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    panel = _panel(link)
    spec = make_spec(*(TERMS if name is None else WITH_ROWS[name]), link=link)
    cold = fit_hazard(spec, *panel)
    looked_at: list[range] = []
    part = warm_start.Part

    def counted(sums: warm_start.BlockwiseSums, blocks: range) -> warm_start.Part:
        looked_at.append(blocks)
        return part(sums, blocks)

    monkeypatch.setattr(warm_start, "Part", counted)
    monkeypatch.setattr("stresskit.hazard.stay_sums.BLOCK_STAYS", 64)
    monkeypatch.setattr("stresskit.hazard.moving_sums.BLOCK_ROWS", 1000)
    for limit, value in (
        ("LEAST_ROWS", 0),
        ("LEAST_EVENTS", 1),
        ("STEP", 3),
        ("FEWEST", 2),
        ("LEAST_STEP", 2),
    ):
        monkeypatch.setattr(warm_start, limit, value)
    warm = fit_hazard(spec, *panel)
    assert len(looked_at) == 1
    assert warm.facts.iterations <= cold.facts.iterations
    error = np.sqrt(np.diag(cold.covariances.matrix("model_expected")))
    assert (np.abs(warm.coefficients - cold.coefficients) <= 2e-8 * error).all()
    assert warm.facts.llf == pytest.approx(cold.facts.llf, rel=1e-13)
