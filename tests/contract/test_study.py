"""Whole studies: floating rates, current loan-to-value and collateral from the command to the loss; refusals; nothing for nothing."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.cli import main
from stresskit.contract.paths import contract_paths
from stresskit.core.errors import DataError, TextError
from tests.cli.small_study import write_small_study
from tests.contract.world import SLUMP, STUDY, macro_frame, monthly, write_world


@pytest.fixture(scope="module")
def done(tmp_path_factory: pytest.TempPathFactory):
    folder = tmp_path_factory.mktemp("study")
    file = sk.load_study(write_world(folder, loans=400))
    data = sk.prepare(file)
    fits = sk.fit(file, data)
    return file, data, fits, sk.project(file, data, fits)


def test_el_of_one_loan_is_that_of_a_loop_over_its_months(done) -> None:
    """Rates, balances, LTV, hazards, LGD and discounting of floating loans, step by step from the files' numbers."""
    _, data, fits, result = done
    book = data.loans.portfolio
    table = result.loans[result.loans["scenario"] == "slump"].set_index("loan")
    slump = next(p for p in data.paths if p.name == "slump")
    frame = pd.concat(
        [
            macro_frame(),
            pd.DataFrame(
                {"period": pd.period_range("2021Q1", periods=slump.horizon, freq="Q").astype(str)}
                | {v: slump.values[v] for v in ("house_north", "house_south", "policy_rate")}
            ),
        ]
    )
    default, payoff = fits["default"].params, fits["payoff"].params
    checked = 0
    for i in np.flatnonzero(book.static["kind"] == "floating")[:12]:
        place, price, margin = (book.static[n][i] for n in ("place", "price", "margin"))
        age, life = int(book.age[i]), int(book.remaining[i])
        # column 0 is the month of origination, column age - 1 is as_of
        start = str(pd.Period("2020-12", "M") - (age - 1))
        house = monthly(frame, f"house_{place}", start, age + life)
        policy = monthly(frame, "policy_rate", start, age + life, place="step")
        owed, rate, alive, el, lifetime, factor = (
            float(book.balance[i]),
            float(book.rate[i]),
            1.0,
            0.0,
            0.0,
            1.0,
        )
        for h in range(1, life + 1):
            now = age - 1 + h
            if now % 3 == 0:
                rate = min(max(policy[now - 1] / 100 + margin, 0.015), 0.09)
            r, left = rate / 12, life - h + 1
            ltv = owed / (price * house[now - 1] / house[0])
            odds = np.expm1(np.exp(default["intercept"] + default["current_ltv"] * ltv))
            leaving = np.expm1(np.exp(payoff["intercept"]))
            q = alive * odds / (1 + odds + leaving)
            alive /= 1 + odds + leaving
            ead = owed * (1 + r)
            lgd = max(0.05, 1 - price * house[now] / house[0] * 0.8 * 0.95 / ead)
            el += q * lgd * ead * factor / np.sqrt(1 + r)
            factor /= 1 + r
            lifetime += q
            payment = owed * r / (1 - (1 + r) ** -left) if r else owed / left
            owed = owed * (1 + r) - payment
        np.testing.assert_allclose(table.loc[book.loan_ids[i], "pd_lifetime"], lifetime, rtol=1e-9)
        np.testing.assert_allclose(table.loc[book.loan_ids[i], "el_lifetime"], el, rtol=1e-9)
        checked += lgd == 0.05
    assert checked > 0


@pytest.mark.slow
def test_the_command_line_runs_such_a_study(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study = write_world(tmp_path, loans=300)
    with pytest.raises(SystemExit) as end:
        main(["run", str(study), "--out", str(tmp_path / "run"), "--json"])
    assert end.value.code == 0
    out = json.loads(capsys.readouterr().out)
    book = {row["scenario"]: row for row in out["summary"] if row["by"] == ""}
    assert book["slump"]["el_lifetime"] > book["baseline"]["el_lifetime"] > 0
    assert book["slump"]["lgd"] > book["baseline"]["lgd"] > 0.05
    assert book["slump"]["pd_lifetime"] > book["baseline"]["pd_lifetime"]
    page = (tmp_path / "run" / "report.html").read_text()
    assert "collateral shortfall along the path" in page
    assert "scenarios act through house_north, house_south, policy_rate" in page


def test_higher_rates_slow_repayment_and_a_cap_stops_them(done, tmp_path: Path) -> None:
    file, data, fits, _ = done
    text = STUDY.replace("cap: 0.09", "cap: 0.02")
    capped = sk.load_study(write_world(tmp_path, loans=400, study=text))
    other = sk.prepare(capped)
    found = [
        sk.project(f, d, fits).segments.query("scenario == 'slump' and step == 60 and segment == 'floating'")
        for f, d in ((file, data), (capped, other))
    ]
    assert float(found[0]["balance"].iloc[0]) > float(found[1]["balance"].iloc[0])


def test_a_plain_study_keeps_its_bits(tmp_path: Path) -> None:
    """What a study does not use changes nothing: fixed for all is no rates section, plain values are the plain schedule."""
    study = write_small_study(tmp_path, loans=150)
    text = study.read_text()
    file = sk.load_study(study)
    data = sk.prepare(file)
    assert data.loans.contracts is None
    fits = sk.fit(file, data)
    plain = sk.project(file, data, fits)
    study.write_text(
        text.replace("loss:\n", "rates: {by: product, values: {fixed: fixed, floating: fixed}}\nloss:\n")
    )
    other = sk.load_study(study)
    through = sk.project(other, sk.prepare(other), fits)
    pd.testing.assert_frame_equal(plain.loans, through.loans, rtol=1e-13, atol=0)


def test_a_book_without_its_terms_is_reported_not_projected(tmp_path: Path) -> None:
    study = write_world(tmp_path, loans=80)
    rows = pd.read_csv(tmp_path / "loans.csv")
    there = rows[(rows["month"] == "2020-12") & (rows["state"] == "C") & (rows["matures"] > "2020-12")]
    floating, fixed = (list(there[there["kind"] == k]["id"][:2]) for k in ("floating", "fixed"))
    rows.loc[rows["id"].isin([floating[0], fixed[0]]), "margin"] = np.nan
    rows.to_csv(tmp_path / "loans.csv", index=False)
    data = sk.prepare(sk.load_study(study)).loans
    lost = data.not_projected.set_index("loan")
    assert lost.loc[floating[0], "reason"] == "missing_term: rates: margin"
    assert fixed[0] not in lost.index
    assert fixed[0] in data.portfolio.loan_ids
    assert floating[0] in data.risk_set.loan_ids


def test_values_that_are_not_declared_are_refused(tmp_path: Path) -> None:
    for text, words in (
        (
            STUDY.replace("    fixed: fixed\n", ""),
            r"rates.values says nothing about some values of kind: 'fixed'",
        ),
        (
            STUDY.replace(", south: house_south}}}}\nrates", "}}}}\nrates"),
            r"index.of says nothing .* place: 'south'",
        ),
    ):
        study = write_world(tmp_path, loans=20, study=text)
        with pytest.raises(DataError, match=words):
            sk.prepare(sk.load_study(study))


def test_a_scenario_must_state_what_contracts_read(tmp_path: Path) -> None:
    study = write_world(tmp_path, loans=20)
    (tmp_path / "baseline.yaml").write_text(
        (tmp_path / "baseline.yaml").read_text().replace("  policy_rate: {values: [1.0, 1.25, 1.5]}\n", "")
    )
    (tmp_path / "slump.yaml").write_text(SLUMP.split("  policy_rate")[0])
    with pytest.raises(TextError, match=r"no path of 'policy_rate', which rates.values.floating.index reads"):
        sk.prepare(sk.load_study(study))


def test_a_moving_column_without_a_path_is_refused_with_the_remedy(tmp_path: Path) -> None:
    text = STUDY.replace("segments: [kind, place]", "segments: [kind, place]\n  varying: [score]").replace(
        "      - {loan: current_ltv, expect: positive}\n",
        "      - {loan: current_ltv}\n      - {loan: score}\n",
    )
    study = write_world(tmp_path, loans=300, study=text)
    rows = pd.read_csv(tmp_path / "loans.csv")
    rows["score"] = np.random.default_rng(1).normal(size=len(rows))
    rows.to_csv(tmp_path / "loans.csv", index=False)
    file = sk.load_study(study)
    data = sk.prepare(file)
    with pytest.raises(TextError, match=r"\(score\) and no path .* Declare how they move under moving"):
        sk.project(file, data, sk.fit(file, data))


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("index: policy_rate, margin", "index: house_north, margin", "has the unit index; a rate is a percent or a fraction"),
        ("{loan: current_ltv, expect: positive}", "{loan: current_ltv, as: category}", "moves along the path, not a category"),
        ("reset_months: 3", "reset_months: 0", "expected a whole number from 1 to 600"),
        ("balance_over_value", "balance_over_valu", "did you mean 'balance_over_value'"),
        ("index: policy_rate, margin", "index: polcy_rate, margin", "no macro variable 'polcy_rate'; did you mean 'policy_rate'"),
        ("{schedule: annuity, accrued: 1}", "{schedule: annuity, ccf: 0.5}", "ccf belongs to schedule: revolving, not annuity"),
        ("{schedule: annuity, accrued: 1}", "{schedule: revolving}", "revolving needs limit"),
        ("{schedule: annuity, accrued: 1}", "{by: kind}", "by and values go together"),
        ("{schedule: annuity, accrued: 1}", "{accrued: 1, by: kind, values: {fixed: {schedule: bullet}}}", "accrued is stated under values"),
        ("amount: lent, ", "", None),
        ("lent, rate: interest}", "lent, rate: interest}\n  static: [current_ltv]", "give the moving column a name of its own"),
    ],
)  # fmt: skip
def test_what_the_text_gets_wrong(tmp_path: Path, old: str, new: str, words: str | None) -> None:
    study = write_world(tmp_path, loans=5)
    assert old in STUDY
    text = STUDY.replace(old, new, 1)
    if words is None:
        text, words = (
            text.replace("{schedule: annuity, accrued: 1}", "{schedule: annuity, balloon: 0.3}"),
            "name loans.columns.amount",
        )
    study.write_text(text)
    with pytest.raises(TextError, match=words):
        sk.prepare(sk.load_study(study))


def test_supplied_balances_are_checked_and_used(tmp_path: Path) -> None:
    text = STUDY.replace("{schedule: annuity, accrued: 1}", "{schedule: supplied, file: own.csv}")
    study = write_world(tmp_path, loans=150, study=text)
    bare = write_world(tmp_path, loans=150, study=STUDY)
    book = sk.prepare(sk.load_study(bare)).loans.portfolio
    study.write_text(text)
    rows = [
        (loan, str(pd.Period("2020-12", "M") + h), balance * 0.99**h)
        for loan, balance, n in zip(book.loan_ids, book.balance, book.remaining, strict=True)
        for h in range(1, n)
    ]
    own = pd.DataFrame(rows, columns=["loan", "period", "balance"])
    own.to_csv(tmp_path / "own.csv", index=False)
    file = sk.load_study(study)
    data = sk.prepare(file)
    assert "own.csv" in data.digests
    result = sk.project(file, data, sk.fit(file, data))
    assert result.summary["el_lifetime"].gt(0).all()
    bad = own.drop(index=[3, 4]).copy()
    bad.loc[7, "balance"] = -1.0
    pd.concat([bad, bad.iloc[[0]]]).to_csv(tmp_path / "own.csv", index=False)
    with pytest.raises(DataError) as caught:
        sk.prepare(file)
    assert [p.code for p in caught.value.problems] == [
        "negative_balance",
        "schedule_doubled",
        "schedule_missing",
    ]
    assert [p.count for p in caught.value.problems] == [1, 2, 2]
    (tmp_path / "own.csv").unlink()
    with pytest.raises(DataError, match=r"no file 'own.csv'"):
        sk.prepare(file)


def test_a_loan_that_starts_after_as_of_is_projected(tmp_path: Path) -> None:
    """Its price is that of its first month: there the index moves nothing, and its rate is its own."""
    file = sk.load_study(write_world(tmp_path, loans=300))
    rows = pd.read_csv(tmp_path / "loans.csv")
    book = rows[(rows["month"] == "2020-12") & (rows["state"] == "C") & (rows["matures"] > "2020-12")].copy()
    book = book[["id", "opened", "matures", "owed", "lent", "interest", "kind", "place", "price", "margin"]]
    new = book.iloc[[0]].assign(
        id="NEW", opened="2021-01", matures="2031-01", owed=9e4, lent=9e4, price=1e5, kind="floating"
    )
    data = sk.prepare(file, book=pd.concat([book, new]))
    portfolio = data.loans.portfolio
    at = list(portfolio.loan_ids).index("NEW")
    assert portfolio.age[at] == 0
    contracts = contract_paths(
        file.study, portfolio, history=data.history, path=data.paths[1], horizon=data.horizon
    )
    assert contracts is not None
    columns = contracts.columns(np.array([at]), 3)["current_ltv"][0]
    assert columns[0] == 0.9
    owed = contracts.balances(np.array([at]), 3)[0]
    np.testing.assert_allclose(columns[1], owed[1] / 1e5, rtol=1e-12)
    assert columns[2] != owed[2] / 1e5
    assert contracts.rates(np.array([at]), 1)[0, 0] == portfolio.rate[at]
    result = sk.project(file, data, sk.fit(file, data))
    assert "NEW" in set(result.loans["loan"])


def test_first_rows_of_fixed_loans_know_their_rate(tmp_path: Path) -> None:
    """With `rates`, only floating loans lose the row before which nothing is seen."""
    text = STUDY.replace("      - {loan: current_ltv, expect: positive}", "      - {loan: charged}")
    text = text.replace("moving:\n", "moving:\n  charged: {rate: {}}\n")
    data = sk.prepare(sk.load_study(write_world(tmp_path, loans=200, study=text)))
    panel = pd.read_csv(tmp_path / "loans.csv")
    firsts = panel.groupby("id").first()
    table = data.loans.reconciliation.set_index("reason")
    lost = "moving_unknown: charged, no rate at the start"
    assert table.loc[lost, "rows"] == (firsts["kind"] == "floating").sum() > 50
    risk_set = data.loans.risk_set
    fixed = risk_set.static["kind"][risk_set.stay_loan] == "fixed"
    assert (risk_set.stay_entry[fixed] == 0).all()
    assert (risk_set.stay_entry[~fixed] > 0).all()
    begins = np.cumsum(risk_set.stay_exit - risk_set.stay_entry) - (risk_set.stay_exit - risk_set.stay_entry)
    of = risk_set.loan_ids[risk_set.stay_loan[fixed]]
    np.testing.assert_array_equal(risk_set.moving["charged"][begins[fixed]], firsts.loc[of, "interest"])


def test_a_moving_column_outside_its_range_is_told(done) -> None:
    """The slump's fall of prices takes current LTV past anything seen; share and distance by hand from the path itself."""
    file, data, _, result = done
    book, seen = data.loans.portfolio, data.loans.risk_set.moving["current_ltv"]
    slump = next(p for p in data.paths if p.name == "slump")
    paths = contract_paths(file.study, book, history=data.history, path=slump, horizon=data.horizon)
    outside, total, far = 0, 0, 0.0
    for i in range(book.n_loans):
        column = paths.columns(np.array([i]), int(book.remaining[i]))["current_ltv"][0]
        total += column.size
        outside += int(((column > seen.max() + 1e-9) | (column < seen.min() - 1e-9)).sum())
        far = max(far, float((column - seen.max()).max()), float((seen.min() - column).max()))
    told = [c for c in result.cautions if "moving column current_ltv leaves the range" in c]
    assert outside > 0
    assert told[-1] == (
        f"Scenario slump: moving column current_ltv leaves the range on which hazards were estimated ({seen.min():.3g} to "
        f"{seen.max():.3g}) in {outside / total:.1%} of loan-periods, by up to {far:.3g} ({far / (seen.max() - seen.min()):.0%} of its width)."
    )
