"""Year flows, stages and capital of random books against the plain loop, loan by loan, to 1e-12 (risk-weighted amounts 1e-9)."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.core.period import Frequency
from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.loss.assess import assess
from stresskit.loss.capital import OTHER_RETAIL, Inputs
from stresskit.loss.reference import Conditions, reference_pds
from stresskit.loss.yearly import CapitalInputs, Plan, StageInputs, YearCells, YearSums
from stresskit.loss.years import year_edges
from stresskit.projection.project import life_steps
from stresskit.spec.provisions import Staging
from stresskit.spec.study import Loss
from tests.loss import plain_years as slow
from tests.oracle import plain
from tests.oracle.coefficients import predictor
from tests.oracle.worlds import AS_OF, HAZARDS, Case, by_plain_loop, fitted, table, worlds

YEARS = 3
RULES: tuple[dict[str, Any], ...] = (
    {"ratio": 1.13, "increase": 0.00137},
    {"ratio": 1.31, "increase": 0.0213, "combine": "either", "low_risk": 0.0017},
    {"increase": 0.00037, "backstop_pd": 0.0931},
)
FLOOR, WEIGHT = 0.37, 0.4


def moved(case: Case, by: int) -> Case:
    """The same book ``by`` periods later, and its path with it: as_of falls within a year."""
    book = replace(case.portfolio, as_of=case.portfolio.as_of + by)
    return Case(book, replace(case.path, start=case.path.start + by), case.loss, case.cap)


def standing(case: Case, by_age: bool) -> Conditions:
    """The path's mean, or ten of its rows by age."""
    values = case.path.values[5:15] if by_age else case.path.values.mean(axis=0, keepdims=True)
    return Conditions(case.path.names, values)


def ours(
    case: Case, fits: dict[str, HazardFit], rule: dict[str, Any], late: np.ndarray, by_age: bool
) -> YearCells:
    """One cell per loan."""
    book = case.portfolio
    life = life_steps(book, case.cap)
    edges = year_edges(book.as_of, book.frequency, int(life.max()))
    points = np.concatenate([[0], edges[:YEARS]])
    known = reference_pds(book, fits, standing(case, by_age), life, points, place="test")
    n = book.n_loans
    inputs = Inputs(np.full(n, OTHER_RETAIL), np.full(n, 0.0005), np.full(n, FLOOR), np.full(n, np.nan))
    plan = Plan(
        book, np.arange(n), n, points,
        StageInputs(Staging.model_validate(rule), known.lifetime, late),
        CapitalInputs(inputs, known.year, WEIGHT, 2.5),
    )  # fmt: skip
    sums = YearSums(plan)
    result = assess(
        book,
        fits,
        case.path,
        case.loss,
        cells=np.zeros(n, dtype=np.int64),
        n_cells=1,
        cap=case.cap,
        years=edges.tolist(),
        on_years=sums.add,
    )
    return sums.finish(result.loans)


def wanted(
    case: Case, fits: dict[str, HazardFit], rule: dict[str, Any], late: np.ndarray, by_age: bool
) -> list[list[dict[str, float]]]:
    """Loan by loan, point by point."""
    book, year = case.portfolio, case.portfolio.frequency.per_year
    lives = by_plain_loop(case, fits)
    horizon = max(len(steps) for steps in lives)
    ends = [e for e in slow.bucket_ends(book.as_of, year, 200) if e - year < horizon][:YEARS]
    etas = {cause: predictor(fit) for cause, fit in fits.items()}
    links = {c: f.spec.link for c, f in fits.items()}
    rows = standing(case, by_age).values

    def macro(age: int) -> dict[str, float]:
        return dict(zip(case.path.names, rows[min(age, len(rows)) - 1], strict=True))

    out = []
    for i, steps in enumerate(lives):
        columns = {name: values[i] for name, values in book.static.items()}
        loan = {
            "remaining": int(book.remaining[i]), "balance": float(book.balance[i]), "per_year": year,
        }  # fmt: skip
        rate, discount = float(book.rate[i]) / year, case.loss.discount
        per_period = (
            rate if discount == "rate" else 0.0 if discount == "none" else (1 + discount) ** (1 / year) - 1
        )
        lgd = (
            case.loss.lgd.constant
            if hasattr(case.loss.lgd, "constant")
            else case.loss.lgd.values[columns["product"]]
        )
        etas_then = {
            c: (lambda a, h, eta=eta, columns=columns: eta(a, columns, macro(a))) for c, eta in etas.items()
        }

        def project(age: int, life: int, then=etas_then) -> Any:
            return plain.project_loan(
                {"age": age, "remaining": life, "balance": 1.0, "rate": 0.0}, then, links, per_year=year
            )

        points = slow.loan_years(loan, steps, ends, lgd=lgd, period_rate=per_period)
        # with a cap the balance after the last projected step is still on schedule
        schedule = [
            *plain.balances(loan["balance"], rate, loan["remaining"], case.loss.exposure.schedule),
            0.0,
        ]
        for end, p in zip([0, *ends], points, strict=True):
            p["balance"] = p["on_book"] * schedule[min(end, loan["remaining"])]
        known = slow.reference(project, int(book.age[i]), len(steps), ends, year)
        for j, (p, (origin, long_run)) in enumerate(zip(points, known, strict=True)):
            two = slow.second(rule, p["pd_rest"], origin, p["pd_year"], bool(late[i]) and j == 0)
            for stage, here in ((1, not two), (2, two)):
                p[f"loans_stage_{stage}"] = p["on_book"] * here
                p[f"balance_stage_{stage}"] = p["balance"] * here
            p["impairment_stage_1"], p["impairment_stage_2"] = p["el_year"] * (not two), p["el_rest"] * two
            pd = max(0.0005, WEIGHT * p["pd_year"] + (1 - WEIGHT) * long_run)
            severity = max(lgd, FLOOR)
            p["rwa_performing"] = slow.other_retail_weight(pd, severity) * p["balance"]
            p["regulatory_el_performing"] = pd * severity * p["balance"]
            p["defaulted_k"] = p["default_amount"] * max(0.0, FLOOR - lgd)
            p["stage"] = 2.0 if two else 1.0
        out.append(points)
    return out


@pytest.mark.parametrize("frequency", list(Frequency), ids=lambda f: f.value)
@pytest.mark.parametrize("name", HAZARDS)
@given(data=st.data())
@settings(max_examples=12, deadline=None)
def test_years_stages_and_capital_are_the_plain_loop(
    name: str, frequency: Frequency, data: st.DataObject
) -> None:
    case = moved(data.draw(worlds(frequency)), data.draw(st.integers(0, frequency.per_year - 1)))
    fits, rule = fitted(name, frequency), data.draw(st.sampled_from(RULES))
    late = np.array([i % 3 == 1 for i in range(case.portfolio.n_loans)])
    by_age = data.draw(st.booleans())
    found, want = ours(case, fits, rule, late, by_age), wanted(case, fits, rule, late, by_age)
    book = case.portfolio
    lgd_known = [[p["default_amount"] > 0 for p in points] for points in want]
    for i, points in enumerate(want):
        size = max(1.0, float(book.balance[i]))
        assert found.stage is not None
        assert found.stage[i] == points[0]["stage"]
        for measure, values in found.measures.items():
            if measure.endswith("_x_balance"):
                continue
            for j, p in enumerate(points):
                if case.cap is not None and year_ends(case)[j] > case.cap:
                    continue  # past the cap nothing is projected; the run shows no such year
                if measure in ("rwa_performing", "regulatory_el_performing") and not any(
                    lgd_known[i][j + 1 :]
                ):
                    continue  # no default follows: the LGD of the formula is that of the last bucket or the floor
                amount = 12.5 * size if measure != "on_book" else 1.0
                # a far year end undoes a long discounting: relative to what is undone
                undo = (
                    (1 + max(0.0, 0.3)) ** (year_ends(case)[j] / book.frequency.per_year)
                    if "impairment" in measure
                    else 1.0
                )
                # the LGD of the formula is a ratio of what follows: of next to nothing, once nearly nobody is left
                exact = 1e-9 if measure in ("rwa_performing", "regulatory_el_performing") else 1e-12
                np.testing.assert_allclose(
                    values[i, j],
                    p[measure],
                    rtol=0,
                    atol=exact * amount * undo,
                    err_msg=f"{measure} of loan {i} at {j}",
                )


def year_ends(case: Case) -> list[int]:
    horizon = int(life_steps(case.portfolio, case.cap).max())
    edges = year_edges(case.portfolio.as_of, case.portfolio.frequency, horizon)[:YEARS]
    return [0, *map(int, edges)]


@pytest.mark.parametrize("frequency", list(Frequency), ids=lambda f: f.value)
@pytest.mark.parametrize("part", range(12))
def test_edges_are_calendar_year_ends(frequency: Frequency, part: int) -> None:
    as_of = 2025 * frequency.per_year + part % frequency.per_year
    for horizon in (1, 3, 4, 11, 12, 13, 40):
        edges = year_edges(as_of, frequency, horizon).tolist()
        assert (
            edges
            == [
                e for e in slow.bucket_ends(as_of, frequency.per_year, 30) if e - frequency.per_year < horizon
            ][: len(edges)]
        )
        assert edges[-1] >= horizon
        assert len(edges) == 1 or edges[-2] < horizon


def test_order_and_number_of_loans_change_nothing() -> None:
    """More loans of one age than a block holds, in two orders: the same cells, stages and loans."""
    frequency, rng, n = Frequency.MONTH, np.random.default_rng(8), 9_500
    fits = fitted("two causes, two links, interactions", frequency)
    book = Portfolio(
        frequency, AS_OF[frequency] + 5, np.array([f"P{i:05d}" for i in range(n)], dtype=object),
        np.where(rng.random(n) < 0.9, 12, rng.integers(0, 40, n)), rng.integers(1, 50, n), rng.uniform(0, 1e5, n),
        np.full(n, 0.05),
        {
            "x": rng.normal(size=n), "w": rng.uniform(0.5, 2, n), "push": np.zeros(n),
            "product": rng.choice(np.array(["fixed", "floating", "stepped"], dtype=object), n),
        },
    )  # fmt: skip
    path = table(frequency, book.as_of + 1, 50, seed=3)
    loss = Loss.model_validate({"lgd": {"constant": 0.3}})
    order = rng.permutation(n)
    other = replace(
        book, age=book.age[order], remaining=book.remaining[order], balance=book.balance[order], rate=book.rate[order],
        static={k: v[order] for k, v in book.static.items()},
    )  # fmt: skip
    late = np.arange(n) % 7 == 0
    one = ours(Case(book, path, loss, None), fits, RULES[0], late, False)
    two = ours(Case(other, path, loss, None), fits, RULES[0], late[order], False)
    assert one.stage is not None
    assert two.stage is not None
    assert (one.stage[order] == two.stage).all()
    assert set(one.stage.tolist()) == {1, 2}
    for measure, values in one.measures.items():
        # a loan's row of a block is added up in pieces that depend on the block's longest life: the last bits
        np.testing.assert_allclose(
            two.measures[measure], values[order], rtol=1e-12, atol=1e-12, err_msg=measure
        )
