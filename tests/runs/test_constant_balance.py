"""Run-off and constant balance sheet of whole studies: what the year view holds, and what it is by hand."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.core.errors import TextError
from stresskit.runs.api import StudyFile
from stresskit.runs.records import StudyResult
from stresskit.spec.study import Study
from tests.cli.small_study import write_small_study
from tests.contract.world import macro_frame, monthly, write_world

BOTH = ["run_off", "constant"]
SHARES = ("pd", "lgd", "default_share")
AMOUNTS = ("balance_start", "balance_end", "default_amount", "el", "loss")
COUNTS = ("loans_start", "loans_end", "default_loans", "payoff_loans", "matured_loans")


def asked(file: StudyFile, **sections: Any) -> StudyFile:
    plain = file.study.model_dump(by_alias=True, exclude_unset=True)
    return replace(file, study=Study.model_validate_json(json.dumps(plain | sections)))


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory):
    file = asked(
        sk.load_study(write_small_study(tmp_path_factory.mktemp("small"))),
        breakdowns=[["product"], ["product", "place"]], years={"first": 7, "balance_sheet": BOTH}, staging={"ratio": 1.2},
    )  # fmt: skip
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    return file, data, fits, sk.project(file, data, fits)


def rows(result: StudyResult, sheet: str, by: str | None = None) -> pd.DataFrame:
    assert result.years is not None
    found = result.years[result.years["balance_sheet"] == sheet]
    return (found if by is None else found[found["by"] == by]).reset_index(drop=True)


def test_run_off_keeps_its_figures(small) -> None:
    """Beside a constant balance sheet, and without one, run-off has the same bits; so has everything else."""
    file, _, fits, both = small
    alone = asked(file, years={"first": 7})
    data = sk.prepare(alone)
    result = sk.project(alone, data, fits)
    assert result.years is not None
    assert "balance_sheet" not in result.years
    pd.testing.assert_frame_equal(
        rows(both, "run_off").drop(columns="balance_sheet"), result.years, check_exact=True
    )
    pd.testing.assert_frame_equal(result.summary, both.summary, check_exact=True)
    pd.testing.assert_frame_equal(result.segments, both.segments, check_exact=True)
    pd.testing.assert_frame_equal(result.loans, both.loans, check_exact=True)
    assert not any("constant balance sheet" in c for c in result.cautions)
    assert sum("constant balance sheet" in c for c in both.cautions) == 1


def test_the_balance_stands_and_the_years_outlive_the_book(small) -> None:
    _, data, _, result = small
    book = data.loans.portfolio
    assert book.remaining.max() < 7 * 12
    held = rows(result, "constant", "")
    assert (held["balance_end"] == book.balance.sum()).all()
    assert (held["loans_end"] == book.n_loans).all()
    assert held["until"].nunique() == 8
    assert rows(result, "run_off", "")["until"].nunique() < 8
    flows = held[held["periods"] > 0]
    assert (flows[["default_amount", "el", "matured_loans"]] > 0).all().all()
    assert flows["pd"].isna().all()
    assert held.filter(regex="stage|impairment").isna().all().all()
    run = rows(result, "run_off", "").set_index(["scenario", "until"])
    same = held.set_index(["scenario", "until"]).loc[run.index]
    later = run["periods"] > 0
    assert (same["default_amount"][later] > run["default_amount"][later]).all()


def test_segments_and_weights_add_up(small) -> None:
    _, _, _, result = small
    keys, columns = ["scenario", "until"], [*AMOUNTS, *COUNTS]
    whole = rows(result, "constant", "").set_index(keys)[columns]
    for by in ("product", "product+place"):
        parts = rows(result, "constant", by).groupby(keys, sort=False)[columns].sum(min_count=1)
        pd.testing.assert_frame_equal(parts.loc[whole.index], whole, rtol=1e-12)
    mean = 0.7 * whole.loc["baseline"] + 0.3 * whole.loc["slump"]
    pd.testing.assert_frame_equal(whole.loc["weighted"], mean, rtol=1e-12)


def test_doubled_balances_double_amounts(small) -> None:
    file, data, fits, result = small
    book = data.loans.portfolio
    double = replace(data, loans=replace(data.loans, portfolio=replace(book, balance=2 * book.balance)))
    one, two = rows(result, "constant"), rows(sk.project(file, double, fits), "constant")
    for c in AMOUNTS:
        np.testing.assert_array_equal(two[c], 2 * one[c], err_msg=c)
    for c in (*COUNTS, *SHARES):
        np.testing.assert_array_equal(two[c], one[c], err_msg=c)


def test_a_cap_ends_both(small) -> None:
    file, data, fits, _ = small
    result = sk.project(asked(file, horizon=30), data, fits)
    assert rows(result, "constant")["until"].max() == "2022-12"
    assert rows(result, "run_off")["until"].max() == "2022-12"


def test_floating_rates_current_ltv_and_collateral_by_hand(tmp_path: Path) -> None:
    """Every position of a book of mortgages, month by month from the files' numbers."""
    file = asked(sk.load_study(write_world(tmp_path, loans=150)), years={"first": 3, "balance_sheet": BOTH})
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    result = sk.project(file, data, fits)
    book = data.loans.portfolio
    slump = next(p for p in data.paths if p.name == "slump")
    ahead = {v: slump.values[v] for v in ("house_north", "house_south", "policy_rate")}
    quarters = pd.period_range("2021Q1", periods=slump.horizon, freq="Q").astype(str)
    frame = pd.concat([macro_frame(), pd.DataFrame({"period": quarters} | ahead)])
    default, payoff = fits["default"].params, fits["payoff"].params
    wanted = np.zeros((3, 3))
    for i in range(book.n_loans):
        kind, place, price, margin = (book.static[n][i] for n in ("kind", "place", "price", "margin"))
        age, owed, rate, factor = int(book.age[i]), float(book.balance[i]), float(book.rate[i]), 1.0
        start = str(pd.Period("2020-12", "M") - (age - 1))
        house = monthly(frame, f"house_{place}", start, age + 36)
        policy = monthly(frame, "policy_rate", start, age + 36, place="step")
        for h in range(1, 37):
            if kind == "floating" and (age + h - 1) % 3 == 0:
                rate = min(max(policy[age + h - 2] / 100 + margin, 0.015), 0.09)
            ltv = owed / (price * house[age + h - 2] / house[0])
            odds = (
                np.expm1(np.exp(default["intercept"] + default["current_ltv"] * ltv)),
                np.expm1(np.exp(payoff["intercept"])),
            )
            p = odds[0] / (1 + sum(odds))
            ead = owed * (1 + rate / 12)
            lgd = max(0.05, 1 - price * house[age + h - 1] / house[0] * 0.8 * 0.95 / ead)
            year = (h - 1) // 12
            wanted[year] += ead * p, ead * p * lgd, ead * p * lgd * factor / np.sqrt(1 + rate / 12)
            factor /= 1 + rate / 12
    held = rows(result, "constant", "")
    found = held[(held["scenario"] == "slump") & (held["periods"] > 0)][["default_amount", "loss", "el"]]
    np.testing.assert_allclose(found, wanted, rtol=1e-11)


def test_what_cannot_be_is_refused(tmp_path: Path) -> None:
    study = write_small_study(tmp_path)
    text = study.read_text()
    study.write_text(text + "years: {balance_sheet: [constant]}\n")
    with pytest.raises(TextError, match=r"expected \[run_off\], or \[run_off, constant\]"):
        sk.load_study(study)
    study.write_text(
        text.replace("      - {age: log}\n", "      - {age: log}\n      - {loan: burden}\n")
        + "moving: {burden: {payment_over: {income: pay}}}\nyears: {balance_sheet: [run_off, constant]}\n"
    )
    with pytest.raises(TextError, match=r"'burden', a payment over income.*no payment is defined"):
        sk.load_study(study)
