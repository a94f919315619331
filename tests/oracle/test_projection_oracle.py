"""Projection and loss against the plain loop, loan by loan and step by step, to 1e-12.

Several links, causes, age baselines, interactions and an offset; loans older than any observed, short
remaining terms, zero rates, caps.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.period import Frequency
from stresskit.core.values import AFTERWARDS, Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.assess import assess
from stresskit.projection.project import project
from stresskit.spec.study import Loss
from tests.oracle import plain
from tests.oracle.coefficients import predictor
from tests.oracle.worlds import AS_OF, HAZARDS, Case, by_plain_loop, fitted, history, table, worlds


def close(ours: Any, theirs: Any, what: str, *, size: float = 1.0) -> None:
    np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-12 * size, err_msg=what)


def compare(case: Case, name: str) -> None:
    fits = fitted(name, case.portfolio.frequency)
    want, n = by_plain_loop(case, fits), case.portfolio.n_loans
    ours = project(case.portfolio, fits, case.path, cap=case.cap)
    horizon = max(len(steps) for steps in want)
    assert ours.survival.shape == (n, horizon)
    for i, steps in enumerate(want):
        life = len(steps)
        assert ours.life[i] == life
        close(ours.survival[i, :life], [s["survival"] for s in steps], "survival")
        close(ours.default_alone[i, :life], [s["alone"] for s in steps], "default alone")
        assert (ours.survival[i, life:] == ours.survival[i, life - 1]).all()
        for cause, flow in ours.flows.items():
            close(flow[i, :life], [s["flows"][cause] for s in steps], cause)
            assert (flow[i, life:] == 0).all()
    compare_money(case, fits, want, horizon)


def compare_money(
    case: Case, fits: Mapping[str, HazardFit], want: list[list[dict[str, Any]]], horizon: int
) -> None:
    book, year = case.portfolio, case.portfolio.frequency.per_year
    cells = np.arange(book.n_loans) % 2
    result = assess(book, fits, case.path, case.loss, cells=cells, n_cells=2, cap=case.cap)
    first = book.as_of + 1 - case.path.start
    after = [
        bool(case.path.flags[first + h, 0] == AFTERWARDS) and "u" in fits["default"].feature_names
        for h in range(horizon)
    ]
    for i, steps in enumerate(want):
        facts = plain.measures(
            steps, int(book.age[i]), per_year=year, largest_age=fits["default"].supported_age
        )
        facts["beyond_path"] = sum(s["flows"]["default"] for s in steps if after[s["step"] - 1])
        money = max(1.0, float(book.balance[i]))
        for measure, values in result.loans.items():
            amount = measure.startswith(("el_", "exposed"))
            close(values[i], facts[measure], f"{measure} of loan {i}", size=money if amount else 1.0)
    whole = max(1.0, float(book.balance.sum()))
    for cell in range(2):
        totals = plain.cell_totals([s for i, s in enumerate(want) if i % 2 == cell], horizon)
        for measure, values in result.cells.items():
            amount = measure in ("balance", "default_amount", "exposed", "el")
            close(values[cell], [t[measure] for t in totals], measure, size=whole if amount else 10.0)


@pytest.mark.parametrize("frequency", list(Frequency), ids=lambda f: f.value)
@pytest.mark.parametrize("name", HAZARDS)
@given(data=st.data())
@settings(max_examples=15, deadline=None)
def test_projection_and_loss_are_the_plain_loop(name: str, frequency: Frequency, data: st.DataObject) -> None:
    compare(data.draw(worlds(frequency)), name)


@pytest.mark.parametrize("name", HAZARDS)
def test_log_likelihood_is_the_plain_loop(name: str) -> None:
    risk_set, features = history(Frequency.MONTH)
    for cause, fit in fitted(name, Frequency.MONTH).items():
        rows = []
        for j in range(risk_set.stay_loan.size):
            columns = {c: v[risk_set.stay_loan[j]] for c, v in risk_set.static.items()}
            for age in range(int(risk_set.stay_entry[j]) + 1, int(risk_set.stay_exit[j]) + 1):
                last = age == risk_set.stay_exit[j] and risk_set.stay_cause[j] > 0
                at = int(risk_set.stay_origin[j]) + age - features.start
                macro = dict(zip(features.names, features.values[at], strict=True))
                event = risk_set.causes[risk_set.stay_cause[j] - 1] if last else None
                rows.append({"event": event, "age": age, "columns": columns, "macro": macro})
        eta = predictor(fit, held=False)
        want = plain.log_likelihood(
            rows, cause, lambda r, eta=eta: eta(r["age"], r["columns"], r["macro"]), fit.spec.link
        )
        assert fit.llf == pytest.approx(want, rel=1e-12)
        assert fit.nobs == sum(r["event"] in (None, cause) for r in rows)
        assert fit.n_events == sum(r["event"] == cause for r in rows)


def test_many_loans_fill_more_than_one_tile() -> None:
    """More loans of one age than a tile holds, lives mixed: each loan as if it were alone."""
    fits = fitted("two causes, two links, interactions", Frequency.MONTH)
    rng, n = np.random.default_rng(4), 9_000
    book = Portfolio(
        Frequency.MONTH, AS_OF[Frequency.MONTH], np.array([f"P{i:05d}" for i in range(n)], dtype=object),
        np.where(rng.random(n) < 0.7, 12, rng.integers(0, 60, n)), rng.integers(1, 20, n), rng.uniform(0, 1e5, n),
        np.full(n, 0.05),
        {
            "x": rng.normal(size=n), "w": rng.uniform(0.5, 2, n), "push": np.zeros(n),
            "product": rng.choice(np.array(["fixed", "floating", "stepped"], dtype=object), n),
        },
    )  # fmt: skip
    path = table(Frequency.MONTH, AS_OF[Frequency.MONTH] + 1, 20, seed=3)
    whole = project(book, fits, path)
    for i in rng.choice(n, 40, replace=False):
        columns = {name: values[[i]] for name, values in book.static.items()}
        alone = replace(
            book, loan_ids=book.loan_ids[[i]], age=book.age[[i]], remaining=book.remaining[[i]],
            balance=book.balance[[i]], rate=book.rate[[i]], static=columns,
        )  # fmt: skip
        steps = by_plain_loop(Case(alone, path, Loss.model_validate({"lgd": {"constant": 1.0}}), None), fits)[
            0
        ]
        close(whole.survival[i, : len(steps)], [s["survival"] for s in steps], "survival")
        close(whole.flows["default"][i, : len(steps)], [s["flows"]["default"] for s in steps], "default")
