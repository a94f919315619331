"""A whole study through the public calls, against plain loops from the raw rows to the summary table.

Panel with late entry, gaps and rows after default; quarters placed on months in both ways, with lags;
two weighted scenarios that end before the loans do.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.period import Frequency, format_period
from tests.oracle import plain
from tests.oracle.coefficients import predictor

FIRST, AS_OF = 2021 * 12, 2024 * 12 + 11
FIRST_QUARTER, GIVEN = 2015 * 4, 14
STUDY = """
study: oracle
frequency: month
as_of: 2024-12
loans:
  file: loans.csv
  layout: panel
  columns: {loan: loan_id, period: month, origination: opened, maturity: matures, balance: balance, rate: annual_rate}
  outcome: {column: status, default: [D], payoff: [X]}
  segments: [product, region]
macro:
  file: macro.csv
  variables:
    u: {unit: percent, place: step}
    hpi: {unit: index, place: linear}
  features:
    u_change: {of: u, transform: difference, over: 4, lag: 1}
    hpi_growth: {of: hpi, transform: log_growth, over: 2, lag: 1}
hazards:
  default:
    link: cloglog
    terms: [{age: spline, knots: 2}, {loan: x}, {loan: product, as: category, reference: fixed}, {macro: u_change}, {interaction: [product, u_change]}]
  payoff:
    link: logit
    terms: [{age: log}, {macro: hpi_growth, transform: standardise}]
loss:
  exposure: {schedule: annuity, accrued: 1}
  lgd: {by: region, values: {north: 0.3, south: 0.55}}
  discount: rate
  timing: mid
scenarios: [calm.yaml, storm.yaml]
"""
WEIGHTS = {"calm": 0.7, "storm": 0.3}


def month(p: int) -> str:
    return format_period(p, Frequency.MONTH)


def macro_values() -> dict[str, list[float]]:
    t = np.arange((AS_OF // 3) - FIRST_QUARTER + 1)
    return {
        "u": list(np.round(6 + 1.4 * np.sin(t / 3.1) + 0.3 * np.cos(t), 6)),
        "hpi": list(np.round(100 * np.exp(0.006 * t + 0.05 * np.sin(t / 2.3)), 6)),
    }


def path_values() -> dict[str, dict[str, list[float]]]:
    h, last = np.arange(1, GIVEN + 1), {k: v[-1] for k, v in macro_values().items()}
    storm_u = last["u"] + np.interp(h, [1, 5, GIVEN], [0.8, 4.0, 1.0])
    storm_h = last["hpi"] * np.interp(h, [1, 6, GIVEN], [0.98, 0.8, 0.9])
    return {
        "calm": {"u": [last["u"]] * GIVEN, "hpi": [last["hpi"] * 1.004 ** int(k) for k in h]},
        "storm": {"u": list(map(float, storm_u)), "hpi": list(map(float, storm_h))},
    }


def panel() -> list[dict[str, Any]]:
    """Rows as a bank reports them; status P performing, D default, X repaid early."""
    rng = np.random.default_rng(404)
    rows = []
    for i in range(420):
        opened = FIRST + int(rng.integers(-30, 40))
        loan = {
            "loan_id": f"{i:04d}", "opened": opened, "matures": AS_OF + int(rng.integers(1, 60)), "x": round(float(rng.normal()), 4),
            "product": str(rng.choice(["fixed", "floating"])), "region": str(rng.choice(["north", "south"])),
            "annual_rate": round(float(rng.choice([0.0, 0.03, 0.07])), 4), "amount": float(rng.integers(50, 400)) * 1000,
        }  # fmt: skip
        status = "P"
        for period in range(opened, AS_OF + 1):
            if status != "P":
                break
            p = {
                "D": 0.008 * math.exp(0.6 * loan["x"]) * (1.6 if loan["product"] == "floating" else 1.0),
                "X": 0.012,
            }
            draw = rng.random()
            status = "D" if draw < p["D"] else "X" if draw < p["D"] + p["X"] else "P"
            lost = rng.random() < 0.01  # a month that was never delivered
            if period >= FIRST and not lost:
                left = (loan["matures"] - period) / (loan["matures"] - opened + 1)
                rows.append(
                    {**loan, "period": period, "status": status, "balance": round(loan["amount"] * left, 2)}
                )
        if status == "D" and period < AS_OF and period >= FIRST:
            rows.append({**loan, "period": period + 1, "status": "D", "balance": 0.0})
    return rows


def write(folder: Path) -> Path:
    rows = panel()
    frame = pd.DataFrame(rows)
    for source, target in (("period", "month"), ("opened", "opened"), ("matures", "matures")):
        frame[target] = [month(int(p)) for p in frame[source]]
    frame.drop(columns=["period", "amount"]).to_csv(folder / "loans.csv", index=False)
    values = macro_values()
    quarters = [format_period(FIRST_QUARTER + i, Frequency.QUARTER) for i in range(len(values["u"]))]
    pd.DataFrame({"period": quarters, **values}).to_csv(folder / "macro.csv", index=False)
    for name, paths in path_values().items():
        lines = [f"scenario: {name}", f"weight: {WEIGHTS[name]}", "starts: 2025Q1", "paths:"]
        lines += [
            f"  {variable}: {{values: [{', '.join(repr(float(x)) for x in v)}]}}"
            for variable, v in paths.items()
        ]
        (folder / f"{name}.yaml").write_text("\n".join([*lines, "afterwards: hold", ""]), encoding="utf-8")
    (folder / "study.yaml").write_text(STUDY, encoding="utf-8")
    return folder / "study.yaml"


def features_at(period: int, path: dict[str, list[float]] | None) -> tuple[dict[str, float], bool]:
    """Both features in a month, and whether the default hazard's rests on a value after the last given."""
    series, last_given = {}, AS_OF // 3 + GIVEN
    for name, observed in macro_values().items():
        whole = observed + (path[name] if path else [])
        series[name] = lambda q, whole=whole: whole[min(q - FIRST_QUARTER, len(whole) - 1)]
    q, part = period // 3, (period % 3 + 1) / 3

    def growth(quarter: int) -> float:
        return math.log(series["hpi"](quarter) / series["hpi"](quarter - 2))

    u_change = series["u"](q - 1) - series["u"](q - 5)
    hpi_growth = growth(q - 2) + part * (growth(q - 1) - growth(q - 2))
    return {"u_change": u_change, "hpi_growth": hpi_growth}, q - 1 > last_given


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> tuple[Any, Any, Any, Any]:
    file = sk.load_study(write(tmp_path_factory.mktemp("study")))
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    return file, data, fits, sk.project(file, data, fits)


def at_risk() -> list[dict[str, Any]]:
    kinds = {"P": None, "D": "default", "X": "payoff"}
    return plain.risk_rows(
        {**r, "loan": r["loan_id"], "origin": r["opened"] - 1, "event": kinds[r["status"]]} for r in panel()
    )


def test_the_risk_set_is_that_of_the_rows(study: tuple[Any, ...]) -> None:
    risk_set = study[1].loans.risk_set
    rows = at_risk()
    ours = set()
    for j, i in enumerate(risk_set.stay_loan):
        for age in range(risk_set.stay_entry[j] + 1, risk_set.stay_exit[j] + 1):
            cause = risk_set.stay_cause[j] if age == risk_set.stay_exit[j] else 0
            event = risk_set.causes[cause - 1] if cause else None
            ours.add((str(risk_set.loan_ids[i]), int(age), int(risk_set.stay_origin[j] + age), event))
    assert ours == {(r["loan"], r["age"], r["period"], r["event"]) for r in rows}
    assert len(rows) > 5_000
    account = study[1].loans.reconciliation
    total = account.groupby("what")["rows"].sum()
    assert total["in"] == len(panel()) == total["used"] + total["left out"]
    assert total["used"] == len(rows)


def test_the_likelihood_is_that_of_the_rows(study: tuple[Any, ...]) -> None:
    rows = at_risk()
    observed = {period: features_at(period, None)[0] for period in range(FIRST, AS_OF + 1)}
    for cause, fit in study[2].items():
        eta = predictor(fit, held=False)
        want = plain.log_likelihood(
            rows, cause, lambda r, eta=eta: eta(r["age"], r, observed[r["period"]]), fit.spec.link
        )
        assert fit.llf == pytest.approx(want, rel=1e-11)


def test_the_summary_is_that_of_the_loans(study: tuple[Any, ...]) -> None:
    _, data, fits, result = study
    seen = {r["loan_id"]: r for r in panel() if r["period"] == AS_OF and r["status"] == "P"}
    defaulted = {r["loan_id"] for r in panel() if r["status"] == "D"}
    book = [r for r in seen.values() if r["loan_id"] not in defaulted]
    assert [r["loan_id"] for r in book] == list(data.loans.portfolio.loan_ids)
    assert len(book) > 80
    predictors = {cause: predictor(fit) for cause, fit in fits.items()}
    facts: dict[tuple[str, str], dict[str, float]] = {}
    for name, path in path_values().items():
        ahead = [features_at(AS_OF + h, path) for h in range(1, 61)]
        for loan in book:
            etas = {
                c: (lambda age, h, eta=eta, loan=loan, ahead=ahead: eta(age, loan, ahead[h - 1][0]))
                for c, eta in predictors.items()
            }
            age = AS_OF - loan["opened"] + 1
            steps = plain.project_loan(
                {"age": age, "remaining": loan["matures"] - AS_OF, "balance": loan["balance"], "rate": loan["annual_rate"]},
                etas, {c: f.spec.link for c, f in fits.items()}, accrued=1.0, lgd={"north": 0.3, "south": 0.55}[loan["region"]],
            )  # fmt: skip
            one = plain.measures(steps, age, largest_age=fits["default"].supported_age)
            one["beyond_path"] = math.fsum(s["flows"]["default"] for s in steps if ahead[s["step"] - 1][1])
            facts[name, loan["loan_id"]] = one
    for loan in book:
        calm, storm = facts["calm", loan["loan_id"]], facts["storm", loan["loan_id"]]
        facts["weighted", loan["loan_id"]] = {k: 0.7 * calm[k] + 0.3 * storm[k] for k in calm}
    assert any(f["beyond_path"] > 0 for f in facts.values())
    compared = 0
    for row in result.summary.itertuples():
        by = row.by.split("+") if row.by else []
        mine = [r for r in book if not by or " / ".join(r[b] for b in by) == row.segment]
        these = [facts[row.scenario, r["loan_id"]] for r in mine]

        def total(key: str, these: list[dict[str, float]] = these) -> float:
            return math.fsum(f[key] for f in these)

        assert row.loans == len(mine)
        want = {
            "exposure": math.fsum(r["balance"] for r in mine),
            **{k: total(k) / len(mine) for k in ("pd_12m", "pd_lifetime", "pd_no_payoff", "payoff_lifetime")},
            "lgd": total("el_lifetime") / total("exposed_lifetime"),
            "el_12m": total("el_12m"), "el_lifetime": total("el_lifetime"),
            "from_extrapolated_age": total("extrapolated") / total("pd_lifetime"),
            "beyond_path": total("beyond_path") / total("pd_lifetime"),
        }  # fmt: skip
        for name, value in want.items():
            assert getattr(row, name) == pytest.approx(value, rel=1e-11, abs=1e-14), (
                row.scenario,
                row.segment,
                name,
            )
        compared += 1
    assert compared == 3 * (1 + 2 + 2 + 4)
