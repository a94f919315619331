"""Moving columns on history: values by hand in pandas, the same fit as a general GLM, no look ahead, the known truth."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

import stresskit as sk
from stresskit.core.errors import TextError
from stresskit.spec.terms import HazardSpec
from tests.contract.world import BASELINE, MONTHS, STUDY, Truth, macro_frame, monthly, panel, write_world

PLAIN = STUDY.replace(
    "    link: cloglog\n    terms:\n      - {loan: current_ltv",
    "    link: cloglog\n    covariance: model\n    terms:\n      - {loan: current_ltv",
)


def ltv_by_hand(rows: pd.DataFrame, *, shift: int = 0) -> pd.Series:
    """Balance of the row before (the amount in a loan's first row) over the price moved by the index of the month before.

    ``shift`` moves the index by so many months, 0 being right: a witness against looking ahead.
    """
    frame = macro_frame()
    calendar = [str(p) for p in pd.period_range("2014-01", periods=MONTHS + 24, freq="M")]
    index = {
        p: pd.Series(monthly(frame, f"house_{p}", "2014-01", MONTHS + 24), calendar)
        for p in ("north", "south")
    }
    rows = rows.sort_values(["id", "month"])
    owed = rows.groupby("id")["owed"].shift(1)
    owed = owed.where(owed.notna(), rows["lent"])
    out = []
    for month, opened, place, price in zip(
        rows["month"], rows["opened"], rows["place"], rows["price"], strict=True
    ):
        before = max(
            pd.Period(month, "M") - 1 + shift,
            pd.Period(opened, "M") if shift == 0 else pd.Period("2014-01", "M"),
        )
        out.append(price * index[place][str(before)] / index[place][opened])
    return owed / np.array(out)


@pytest.fixture(scope="module")
def prepared(tmp_path_factory: pytest.TempPathFactory):
    folder = tmp_path_factory.mktemp("estimation")
    file = sk.load_study(write_world(folder, loans=500, study=PLAIN))
    rows = pd.read_csv(folder / "loans.csv", dtype={"month": str}).sort_values(["id", "month"])
    return file, sk.prepare(file), rows


def test_the_column_is_that_of_pandas(prepared) -> None:
    _, data, rows = prepared
    found = data.loans.risk_set.moving["current_ltv"]
    assert found.shape == (len(rows),)
    np.testing.assert_allclose(found, ltv_by_hand(rows), rtol=1e-12)


def test_the_fit_is_that_of_a_general_glm_on_expanded_rows(prepared) -> None:
    file, data, rows = prepared
    fit = sk.fit(file, data)["default"]
    at_risk = rows["state"] != "P"
    x = sm.add_constant(pd.DataFrame({"current_ltv": ltv_by_hand(rows)[at_risk]}))
    y = (rows["state"][at_risk] == "D").astype(float)
    glm = sm.GLM(y, x, family=sm.families.Binomial(sm.families.links.CLogLog())).fit(tol=1e-13)
    np.testing.assert_allclose(fit.params.to_numpy(), glm.params.to_numpy(), rtol=1e-7)
    np.testing.assert_allclose(fit.bse.to_numpy(), glm.bse.to_numpy(), rtol=1e-5)
    np.testing.assert_allclose(fit.llf, glm.llf, rtol=1e-10)


@pytest.mark.parametrize("shift", [-1, 1])
def test_an_index_one_month_off_is_another_fit(prepared, shift: int) -> None:
    """Witness: were the value known at the END of the period used (or one too old), the fit would not be this one."""
    file, data, rows = prepared
    fit = sk.fit(file, data)["default"]
    at_risk = rows["state"] != "P"
    x = sm.add_constant(pd.DataFrame({"current_ltv": ltv_by_hand(rows, shift=shift)[at_risk]}))
    y = (rows["state"][at_risk] == "D").astype(float)
    glm = sm.GLM(y, x, family=sm.families.Binomial(sm.families.links.CLogLog())).fit(tol=1e-13)
    assert abs(glm.params.iloc[1] / fit.params["current_ltv"] - 1) > 1e-3
    assert abs(glm.llf - fit.llf) > 1e-3


def test_what_is_not_known_yet_changes_nothing(tmp_path: Path) -> None:
    """The index from the last month on, and balances of last rows, are in no row's start."""
    file = sk.load_study(write_world(tmp_path, loans=60))
    before = sk.prepare(file).loans.risk_set.moving["current_ltv"]
    rows = pd.read_csv(tmp_path / "loans.csv")
    last = rows.groupby("id")["month"].transform("max") == rows["month"]
    rows.loc[last & (rows["state"] == "C"), "owed"] *= 3
    rows.to_csv(tmp_path / "loans.csv", index=False)
    np.testing.assert_array_equal(sk.prepare(file).loans.risk_set.moving["current_ltv"], before)
    rows["owed"] *= 1.01
    rows.to_csv(tmp_path / "loans.csv", index=False)
    assert (sk.prepare(file).loans.risk_set.moving["current_ltv"] != before).any()


def test_first_rows_without_amount_are_left_out_and_counted(tmp_path: Path) -> None:
    text = STUDY.replace("amount: lent, ", "")
    file = sk.load_study(write_world(tmp_path, loans=120, study=text))
    data = sk.prepare(file).loans
    rows = pd.read_csv(tmp_path / "loans.csv")
    first = rows.groupby("id")["month"].transform("min") == rows["month"]
    account = data.reconciliation.set_index(["what", "reason"])
    line = account.loc[("left out", "moving_unknown: current_ltv, no balance at the start")]
    alone = rows.groupby("id").size() == 1
    assert line["rows"] == first.sum() == 120
    assert line["loans"] == alone.sum()
    assert line["events_default"] == ((rows["state"] == "D") & first).sum()
    assert line["events_payoff"] == ((rows["state"] == "P") & first).sum()
    np.testing.assert_allclose(line["balance"], rows.loc[first, "owed"].sum())
    total, used = account.loc[("in", "")], account.loc[("used", "")]
    for name in ("rows", "loans", "events_default", "events_payoff"):
        assert total[name] == used[name] + line[name]
    assert data.risk_set.n_rows == used["rows"] == len(rows) - 120
    assert data.risk_set.n_loans == used["loans"]
    assert data.risk_set.stay_entry.min() == 1
    assert [f.code for f in data.findings].count("moving_unknown") == 1


def test_a_history_that_begins_late_costs_rows_under_their_own_reason(tmp_path: Path) -> None:
    file = sk.load_study(write_world(tmp_path, loans=120))
    frame = macro_frame()
    short = sk.prepare(file, macro=frame[frame["period"] >= "2017Q1"]).loans
    line = short.reconciliation.set_index(["what", "reason"]).loc[
        ("left out", "moving_unknown: current_ltv, no value at the start")
    ]
    rows = pd.read_csv(tmp_path / "loans.csv")
    # the first quarter's months before its last one have no value: straight lines start at a quarter's end
    early = rows["opened"] < "2017-03"
    assert line["rows"] == early.sum() > 0
    assert line["loans"] == rows.loc[early, "id"].nunique()
    lost = short.not_projected.set_index("reason").loc[["moving_unknown: current_ltv"]]
    assert (
        len(lost)
        == (
            rows.loc[early & (rows["month"] == "2020-12") & (rows["state"] == "C"), "matures"] > "2020-12"
        ).sum()
    )


@pytest.mark.slow
def test_the_simulated_truth_is_found_again(tmp_path: Path) -> None:
    """Default depends on current LTV alone. Tolerance: four standard errors of the estimate itself, which are small."""
    truth = Truth(level=-7.0, slope=3.0)
    rows = panel(np.random.default_rng(90210), 4000, truth).sort_values(["id", "month"])
    write_world(tmp_path, loans=1, study=PLAIN)
    file = sk.load_study(tmp_path / "study.yaml")
    fit = sk.fit(file, sk.prepare(file, loans=rows))["default"]
    assert fit.bse["current_ltv"] < 0.25
    for name, wanted in (("intercept", truth.level), ("current_ltv", truth.slope)):
        assert abs(fit.params[name] - wanted) < 4 * fit.bse[name], name
    # the witness: LTV as it was at origination, which is what a static column would hold
    static = ltv_at_start(rows)
    other = sk.fit_hazard(
        HazardSpec.model_validate({"terms": ({"loan": "ltv0"},), "covariance": "model"}),
        sk.risk_set_from_rows(
            static, loan="id", age="age", event="event", causes=("default", "payoff"), static=["ltv0"]
        ),
    )
    assert fit.llf - other.llf > 10.0


def ltv_at_start(rows: pd.DataFrame) -> pd.DataFrame:
    out = rows[["id"]].copy()
    out["ltv0"] = rows["lent"] / rows["price"]
    out["age"] = rows.groupby("id").cumcount() + 1
    out["event"] = rows["state"].map({"C": 0, "D": 1, "P": 2})
    return out


SPELLS = """\
study: quay-spells
frequency: month
as_of: 2020-12
loans:
  file: spells.csv
  layout: spells
  columns: {loan: id, origination: opened, maturity: matures, amount: lent, rate: interest}
  outcome: {column: state, default: [D], payoff: [P], performing: [C], default_date: defaulted, payoff_date: repaid}
portfolio: {from: contract}
macro:
  file: macro.csv
  variables:
    house_north: {unit: index, place: linear}
    house_south: {unit: index, place: linear}
hazards:
  default: {link: cloglog, terms: [{loan: current_ltv}]}
moving:
  current_ltv: {balance_over_value: {value: price, index: {by: place, of: {north: house_north, south: house_south}}}}
loss:
  exposure: {schedule: annuity}
  lgd: {constant: 0.2}
scenarios: [baseline.yaml]
"""


def test_spells_roll_the_amount_down_to_what_the_panel_shows(tmp_path: Path) -> None:
    """The panel's balances are those of the schedule rounded to cents, so LTVs agree to that."""
    write_world(tmp_path, loans=150)
    (tmp_path / "study_spells.yaml").write_text(SPELLS)
    rows = pd.read_csv(tmp_path / "loans.csv").sort_values(["id", "month"])
    last = rows.groupby("id").last().reset_index()
    last["defaulted"] = last["month"].where(last["state"] == "D")
    last["repaid"] = last["month"].where(last["state"] == "P")
    last.to_csv(tmp_path / "spells.csv", index=False)
    panel_set = sk.prepare(sk.load_study(tmp_path / "study.yaml")).loans.risk_set
    (tmp_path / "baseline.yaml").write_text(BASELINE.replace("weight: 0.7\n", ""))
    spells = sk.prepare(sk.load_study(tmp_path / "study_spells.yaml")).loans.risk_set
    assert spells.n_rows == panel_set.n_rows
    assert list(spells.loan_ids) == list(panel_set.loan_ids)
    np.testing.assert_allclose(
        spells.moving["current_ltv"], panel_set.moving["current_ltv"], atol=0.02 / rows["price"].min() * 10
    )


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (("amount: lent, ", ""), r"moving.current_ltv needs the balance .* name the amount"),
        (
            ("moving:", "rates: {floating: {index: policy_rate, reset_months: 3}}\nmoving:"),
            "with floating rates",
        ),
    ],
)
def test_spells_that_cannot_know_the_balance_are_refused(
    tmp_path: Path, change: tuple[str, str], words: str
) -> None:
    write_world(tmp_path, loans=5)
    text = SPELLS.replace(*change).replace(
        "house_south: {unit", "policy_rate: {unit: percent, place: step}\n    house_south: {unit"
    )
    if change[0].startswith("amount"):
        text = text.replace("maturity: matures", "balance: owed, maturity: matures")
    (tmp_path / "s.yaml").write_text(text)
    file = sk.load_study(tmp_path / "s.yaml")
    with pytest.raises(TextError, match=words):
        sk.prepare(file)


MORE = """\
      - {loan: use}
      - {loan: real_rate}
      - {loan: burden}
      - {loan: since}
"""
MORE_MOVING = """\
  use: {balance_over_limit: {limit: line}}
  real_rate: {rate_less: {variable: policy_rate}}
  burden: {payment_over: {income: income, per: month}}
  since: {periods_since: {date: last_arrears, never: 99, cap: 24}}
"""


def test_every_other_column_is_that_of_pandas(tmp_path: Path) -> None:
    """Fixed rates, so that the payment due is known from rate, balance and payments to go; arrears recorded month by month."""
    text = STUDY.replace("      - {loan: current_ltv, expect: positive}\n", MORE).replace(
        "moving:\n", "moving:\n" + MORE_MOVING
    )
    text = text[: text.index("rates:\n")] + text[text.index("loss:\n") :].replace("rate_path", "rate")
    text = text.replace("  segments:", "  varying: [last_arrears]\n  segments:")
    write_world(tmp_path, loans=120, study=text)
    rows = pd.read_csv(tmp_path / "loans.csv").sort_values(["id", "month"]).reset_index(drop=True)
    rng = np.random.default_rng(6)
    rows["line"] = rows["lent"] * 1.1
    rows["income"] = rows["lent"] / 60
    late = rng.random(len(rows)) < 0.06
    rows["last_arrears"] = rows["month"].where(late)
    rows["last_arrears"] = rows.groupby("id")["last_arrears"].ffill()
    rows.to_csv(tmp_path / "loans.csv", index=False)
    data = sk.prepare(sk.load_study(tmp_path / "study.yaml")).loans
    found = data.risk_set.moving
    # last_arrears is reported at a row's end, so a loan's first row does not know it
    before = rows.groupby("id").shift(1)
    known = before["owed"].notna()
    rows, before = rows[known], before[known]
    assert data.risk_set.n_rows == len(rows)
    month = pd.PeriodIndex(rows["month"], freq="M")
    np.testing.assert_allclose(found["use"], before["owed"] / rows["line"], rtol=1e-12)
    policy = pd.Series(
        monthly(macro_frame(), "policy_rate", "2015-01", MONTHS + 12, place="step"),
        pd.period_range("2015-01", periods=MONTHS + 12, freq="M"),
    )
    np.testing.assert_allclose(
        found["real_rate"], rows["interest"].to_numpy() - policy[month - 1].to_numpy() / 100, rtol=1e-12
    )
    r = rows["interest"] / 12
    left = np.array([(pd.Period(m, "M") - t).n + 1 for m, t in zip(rows["matures"], month, strict=True)])
    payment = before["owed"] * r / (1 - (1 + r) ** -left)
    np.testing.assert_allclose(found["burden"], payment / rows["income"], rtol=1e-11)
    when = pd.PeriodIndex(before["last_arrears"], freq="M")
    since = [99 if w is pd.NaT else min((t - 1 - w).n, 24) for t, w in zip(month, when, strict=True)]
    assert found["since"].tolist() == since
    assert len(set(since)) > 20
