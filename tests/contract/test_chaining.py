"""A path cut in two, with the book rolled to the cut in between, gives what the whole path gives."""

from __future__ import annotations

import dataclasses
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.contract.collateral import collateral_shortfall
from stresskit.contract.paths import contract_paths
from stresskit.core.period import Frequency
from stresskit.core.values import no_features
from stresskit.hazard.fit import fit_hazard
from stresskit.panel.rows import risk_set_from_rows
from stresskit.projection.project import project
from stresskit.spec.terms import HazardSpec
from tests.contract.books import STUDY, book, later, macro, own_schedule, study_of

H, K = 120, 37


@pytest.mark.parametrize("cut", [1, 36, K])
def test_contracts_chain(tmp_path: Path, cut: int) -> None:
    rng = np.random.default_rng(3)
    history, path = macro(rng)
    whole = book(rng, 400)
    own = own_schedule(rng, whole)
    study = study_of(tmp_path)
    assert study.collateral is not None
    first = contract_paths(study, whole, history=history, path=path, horizon=H, frames={"own.csv": own})
    assert first is not None
    stay = np.flatnonzero(whole.remaining > cut)
    there = dataclasses.replace(
        whole,
        as_of=whole.as_of + cut,
        loan_ids=whole.loan_ids[stay],
        age=whole.age[stay] + cut,
        remaining=whole.remaining[stay] - cut,
        balance=first.balances(stay, cut)[:, cut],
        rate=first.rates(stay, cut)[:, cut - 1],
        static={name: column[stay] for name, column in whole.static.items()},
    )
    history_2, path_2 = later(history, path, cut)
    # supplied balances are written on: what lies before the new as_of is not read again
    second = contract_paths(
        study, there, history=history_2, path=path_2, horizon=H - cut, frames={"own.csv": own}
    )
    assert second is not None
    rows, steps = np.arange(stay.size), H - cut

    def same(after: np.ndarray, before: np.ndarray) -> None:
        np.testing.assert_allclose(after, before, rtol=1e-12, atol=1e-300)

    same(second.rates(rows, steps), first.rates(stay, H)[:, cut:])
    same(second.balances(rows, steps), first.balances(stay, H)[:, cut:])
    same(second.exposures(rows, steps), first.exposures(stay, H)[:, cut:])
    columns = first.columns(stay, H)
    for name, column in second.columns(rows, steps).items():
        # a step of the kept rate: the book's rate is the one in force at its as_of, as in any step of the path
        np.testing.assert_allclose(column, columns[name][:, cut:], rtol=1e-12, atol=1e-14, err_msg=name)
    lgd = collateral_shortfall(study.collateral, whole, history=history, path=path, horizon=H)
    lgd_2 = collateral_shortfall(study.collateral, there, history=history_2, path=path_2, horizon=H - cut)
    np.testing.assert_allclose(
        lgd_2.tile(rows, steps, second.exposures(rows, steps)),
        lgd.tile(stay, H, first.exposures(stay, H))[:, cut:],
        rtol=1e-12, atol=1e-12,
    )  # fmt: skip


def test_survival_chains(tmp_path: Path) -> None:
    """S and q of the second piece, seen from the cut, are those of the whole path over S at the cut."""
    rng = np.random.default_rng(4)
    text = STUDY
    for name in ("use", "interest_now", "real_rate", "burden", "since"):
        text = text.replace(f"      - {{loan: {name}}}\n", "")
    study = study_of(tmp_path, text)
    history, path = macro(rng)
    whole = book(rng, 200)
    own = own_schedule(rng, whole)
    first = contract_paths(study, whole, history=history, path=path, horizon=H, frames={"own.csv": own})
    stay = np.flatnonzero(whole.remaining > K)
    assert first is not None
    assert first.names == ("current_ltv",)
    there = dataclasses.replace(
        whole,
        as_of=whole.as_of + K,
        loan_ids=whole.loan_ids[stay],
        age=whole.age[stay] + K,
        remaining=whole.remaining[stay] - K,
        balance=first.balances(stay, K)[:, K],
        rate=first.rates(stay, K)[:, K - 1],
        static={name: column[stay] for name, column in whole.static.items()},
    )
    history_2, path_2 = later(history, path, K)
    second = contract_paths(
        study, there, history=history_2, path=path_2, horizon=H - K, frames={"own.csv": own}
    )
    fit = _fit()
    one = project(
        whole, {"default": fit}, no_features(Frequency.MONTH, whole.as_of + 1, H), cap=H, contracts=first
    )
    two = project(
        there,
        {"default": fit},
        no_features(Frequency.MONTH, there.as_of + 1, H - K),
        cap=H - K,
        contracts=second,
    )
    at_cut = one.survival[stay, K - 1 : K]
    steps = two.survival.shape[1]
    np.testing.assert_allclose(two.survival, one.survival[stay, K : K + steps] / at_cut, rtol=1e-12)
    np.testing.assert_allclose(
        two.flows["default"], one.flows["default"][stay, K : K + steps] / at_cut, rtol=1e-11, atol=1e-16
    )


def _fit():
    rng = np.random.default_rng(5)
    n = 6000
    frame = pd.DataFrame({"loan": np.arange(n), "age": 1, "current_ltv": rng.uniform(0.2, 1.4, n)})
    frame["event"] = (rng.random(n) < -np.expm1(-np.exp(-4 + 1.5 * frame["current_ltv"]))).astype(int)
    rows = risk_set_from_rows(frame, loan="loan", age="age", event="event", moving=["current_ltv"])
    spec = HazardSpec.model_validate({"terms": ({"loan": "current_ltv"},), "covariance": "model"})
    return fit_hazard(spec, rows)
