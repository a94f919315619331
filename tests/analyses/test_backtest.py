"""The backtest on a book with a known truth: calibrated, ahead of its rivals, blind to what came later; a slow oracle."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.analyses.ask import analyse
from stresskit.analyses.backtest import answer, cutoffs, last_observed
from stresskit.analyses.backtest_date import FLAT, LAST_YEAR, MODEL, NO_MACRO, Dated, at_cutoff
from stresskit.analyses.past import demand_end_of_period, done_again
from stresskit.core.errors import NumericError, UsageError
from stresskit.core.period import Frequency, parse_period
from stresskit.evidence.rows import window
from stresskit.hazard.fit import fit_hazard
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.spec.backtest import Backtest
from tests.analyses import past_world as world
from tests.analyses.world import setting_of

CUT = "2007Q4"
CUTOFF = parse_period(CUT, Frequency.QUARTER)


@pytest.fixture(scope="module")
def loans() -> pd.DataFrame:
    return world.panel(2000)


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory, loans: pd.DataFrame) -> Setting:
    file = world.write_world(tmp_path_factory.mktemp("past"))
    return setting_of(file, loans=loans)


@pytest.fixture(scope="module")
def dated(setting: Setting) -> Dated:
    return at_cutoff(setting, Backtest(cutoffs=(CUT,)), CUT, CUTOFF, 20, lambda _: None)


@pytest.fixture(scope="module")
def found(setting: Setting) -> Analysis:
    return analyse(setting, "backtest", Backtest(cutoffs=("2005Q4", CUT)))


# ---- a known truth


def test_the_true_model_is_calibrated_out_of_time_and_its_rivals_are_not(dated: Dated) -> None:
    came = float(dated.seen.did("default").sum())
    low, high = dated.band.total
    middle = (low + high) / 2
    assert abs(came - middle) < (high - low)  # within 3.3 standard errors
    for rival in (NO_MACRO, FLAT, LAST_YEAR):
        expected = float(dated.said[rival].given["default"].expected.sum())
        # chance alone has a standard deviation of sqrt(357) = 19
        assert came - expected > 5 * np.sqrt(came), rival
    assert float(dated.actual["default"][-1]) == pytest.approx(
        float(dated.said[MODEL].rolled.pd.mean()), abs=0.05
    )


def test_the_log_score_ranks_the_truth_first(found: Analysis) -> None:
    scores = found.table("scores").query("cutoff == @CUT").set_index("said_by")
    assert scores["log_score"].idxmax() == MODEL
    rivals = scores.drop(index=MODEL)
    assert (rivals["lead_of_model"] > 2 * rivals["lead_se"]).all()


def test_the_answer_says_what_came_and_what_was_expected(found: Analysis) -> None:
    row = found.table("summary").set_index("cutoff").loc[CUT]
    assert f"expected {row['pd_model']:.2%} of {row['loans']:,} loans to default by 2012Q4" in found.answer
    assert f"{row['pd_actual']:.2%} did" in found.answer
    assert found.answer.startswith("Yes: it saw ")
    assert found.facts["cutoffs"] == ["2005Q4", CUT]


def test_a_book_without_a_downturn_leaves_the_question_open(setting: Setting) -> None:
    calm = parse_period("2003Q4", Frequency.QUARTER)
    one = at_cutoff(setting, Backtest(), "2003Q4", calm, 12, lambda _: None)
    assert answer([one]).startswith("Open: after none of these dates did defaults rise")


@pytest.mark.slow
def test_the_band_holds_period_shocks(tmp_path: Path) -> None:
    """90% bands with shocks of 40% a quarter that the fit has to find: 3 seeds x 20 quarters, Monte Carlo sd 3.9%."""
    inside: list[bool] = []
    found: list[float] = []
    file = world.write_world(tmp_path)
    for seed in range(3):
        s = setting_of(file, loans=world.panel(1800, seed=seed, shock_sd=0.4))
        d = at_cutoff(s, Backtest(), CUT, CUTOFF, 20, lambda _: None)
        came = d.seen.counts("default", np.zeros(d.seen.n, dtype=np.int64), 1)[0]
        inside += d.band.inside(came).tolist()
        found.append(d.band.shock_sd)
    assert np.mean(found) > 0.2
    assert 0.90 - 3 * 0.039 <= np.mean(inside) <= 1.0


# ---- a slow oracle: plain loops over the raw rows


def hazards(dated: Dated, row: Mapping[Any, Any], age: int, change: float) -> tuple[float, float]:
    """(default odds, payoff odds) from printed coefficients; ages beyond the supported one keep its value."""
    d, p = dated.past.fits["default"].params, dated.past.fits["payoff"].params
    old, older = (min(age, dated.past.fits[c].facts.supported_age) for c in ("default", "payoff"))
    eta = (
        d["intercept"]
        + d["age[log]"] * np.log(old)
        + d["unemployment_change"] * change
        + d["score"] * row["score"]
    )
    eta += d["product[floating]"] * (row["product"] == "floating")
    return float(np.expm1(np.exp(eta))), float(np.expm1(np.exp(p["intercept"] + p["age[linear]"] * older)))


def test_actual_and_expected_by_plain_loops(dated: Dated, found: Analysis, loans: pd.DataFrame) -> None:
    level = world.unemployment()
    change = (level - level.shift(4)).shift(1)
    when = pd.PeriodIndex(loans["quarter"], freq="Q")
    cut = pd.Period(CUT)
    opened = pd.PeriodIndex(loans["opened"], freq="Q")
    book = loans[(when == cut) & (loans["state"] == "C") & (loans["matures"] > CUT)]
    later = loans[(when > cut) & loans["id"].isin(set(book["id"]))]
    actual = dict.fromkeys(("fixed", "floating"), 0)
    expected = dict.fromkeys(actual, 0.0)
    by_period: dict[str, list[float]] = {}
    for i, row in zip(later.index, later.to_dict("records"), strict=True):
        age = (when[i] - opened[i]).n + 1
        odds, _ = hazards(dated, row, age, float(change[when[i]]))
        tally = by_period.setdefault(row["quarter"], [0.0, 0.0])
        if row["state"] != "P":
            expected[row["product"]] += odds / (1 + odds)
            tally[1] += odds / (1 + odds)
        actual[row["product"]] += row["state"] == "D"
        tally[0] += row["state"] == "D"
    projected = dict.fromkeys(actual, 0.0)
    for row in book.to_dict("records"):
        survival = 1.0
        left = (pd.Period(row["matures"]) - cut).n
        age = (cut - pd.Period(row["opened"])).n + 1
        for h in range(1, min(left, 20) + 1):
            d, p = hazards(dated, row, age + h, float(change[cut + h]))
            projected[row["product"]] += survival * d / (1 + d + p)
            survival /= 1 + d + p
    groups = found.table("groups").query("cutoff == @CUT and by == 'product'").set_index("group")
    for product in actual:
        assert groups.loc[product, "defaults"] == actual[product]
        assert groups.loc[product, "expected"] == pytest.approx(expected[product], rel=1e-9)
        assert groups.loc[product, "projected"] == pytest.approx(projected[product], rel=1e-9)
    periods = found.table("periods").query("cutoff == @CUT").set_index("period")
    for period, (came, said) in by_period.items():
        assert periods.loc[period, "defaults"] == came
        assert periods.loc[period, "expected"] == pytest.approx(said, rel=1e-9)
    assert dated.seen.n == len(book)


def test_flat_and_last_year_rates_by_plain_counts(dated: Dated, found: Analysis, loans: pd.DataFrame) -> None:
    """(D + 1/2) / (n + 1) per product, n the rows at risk that did not pay off; times the rows that came."""
    when = pd.PeriodIndex(loans["quarter"], freq="Q")
    first = loans.groupby("id")["quarter"].transform("min")
    young = pd.PeriodIndex(loans["opened"], freq="Q") == pd.PeriodIndex(loans["quarter"], freq="Q")
    # a loan's first row after its origination shows its entry and is not at risk
    at_risk = (loans["quarter"] != first) | young
    seen = dated.seen
    groups = found.table("groups").query("cutoff == @CUT and by == 'product'").set_index("group")
    later = loans[
        (when > pd.Period(CUT)) & loans["id"].isin(set(seen.book.loan_ids)) & (loans["state"] != "P")
    ]
    for name, begin in ((FLAT, "1990Q1"), (LAST_YEAR, "2007Q1")):
        for product in ("fixed", "floating"):
            mine = loans[
                (loans["product"] == product) & (when >= pd.Period(begin)) & (when <= pd.Period(CUT))
            ]
            mine = mine[at_risk.loc[mine.index] & (mine["state"] != "P")]
            rate = ((mine["state"] == "D").sum() + 0.5) / (len(mine) + 1.0)
            rows = (later["product"] == product).sum()
            assert groups.loc[product, f"expected {name}"] == pytest.approx(rate * rows, rel=1e-9), (
                name,
                product,
            )


# ---- no look at what came later


def changed_after(loans: pd.DataFrame, after: str) -> pd.DataFrame:
    """Outcomes after the date turned round, some more exits there, balances halved, half of the new loans gone."""
    late = loans["quarter"] > after
    out = loans.copy()
    out.loc[late, "state"] = out.loc[late, "state"].map({"D": "C", "P": "D", "C": "C"})
    digit = out["id"].str[-1].astype(int)
    out.loc[late & (digit == 7), "state"] = "D"
    out.loc[late, "owed"] = (out.loc[late, "owed"] * 0.5).round(2)
    out = out[~((out["opened"] > after) & (digit < 5))]
    # after an exit nothing follows
    gone = out["state"].ne("C").groupby(out["id"]).cumsum().groupby(out["id"]).shift(fill_value=0) > 0
    return out[~gone].reset_index(drop=True)


def test_nothing_after_the_cutoff_changes_what_was_fitted(setting: Setting, loans: pd.DataFrame) -> None:
    other_loans = changed_after(loans, CUT)
    economy = world.macro()
    late = economy["period"] > CUT
    economy.loc[late, "unemployment_rate"] = 11.0 - economy.loc[late, "unemployment_rate"]
    other = setting_of(setting.file, loans=other_loans, macro=economy)
    # The witness: a fit on rows that are not cut does see the difference.
    leaking = [
        fit_hazard(
            s.file.study.hazards["default"], s.data.loans.risk_set, s.data.features, cause="default"
        ).coefficients
        for s in (setting, other)
    ]
    assert np.abs(leaking[0] - leaking[1]).max() > 0.1
    ours, theirs = (done_again(s, CUTOFF, 20) for s in (setting, other))
    for cause in ("default", "payoff"):
        assert ours.fits[cause].coefficients.tobytes() == theirs.fits[cause].coefficients.tobytes()
        assert (
            ours.fits[cause].cov_params().to_numpy().tobytes()
            == theirs.fits[cause].cov_params().to_numpy().tobytes()
        )
    for name in ("loan_ids", "age", "remaining", "balance", "rate"):
        np.testing.assert_array_equal(
            getattr(ours.setting.portfolio, name), getattr(theirs.setting.portfolio, name)
        )
    # A change before the cut-off is seen.
    early = changed_after(loans, "2006Q4")
    third = done_again(setting_of(setting.file, loans=early), CUTOFF, 20)
    assert np.abs(third.fits["default"].coefficients - ours.fits["default"].coefficients).max() > 1e-3


def test_reading_again_at_the_cutoff_is_the_risk_set_cut_there(setting: Setting) -> None:
    past = done_again(setting, CUTOFF, 20)
    cut = window(setting.data.loans.risk_set, last=CUTOFF)
    mine = past.setting.data.loans.risk_set
    for name in ("stay_origin", "stay_entry", "stay_exit", "stay_cause"):
        np.testing.assert_array_equal(getattr(mine, name), getattr(cut, name))
    np.testing.assert_array_equal(mine.loan_ids[mine.stay_loan], cut.loan_ids[cut.stay_loan])


# ---- what was published, and written, then


def test_publication_and_vintages_change_what_the_fit_reads(setting: Setting) -> None:
    now = done_again(setting, CUTOFF, 20)
    late = done_again(setting, CUTOFF, 20, publication=2)
    # The feature has a lag of one quarter: two quarters unpublished leave one row quarter out.
    assert late.known.start + late.known.n_periods - 1 == CUTOFF - 1
    assert late.fits["default"].facts.n_periods == now.fits["default"].facts.n_periods - 1
    economy = world.macro()
    economy = economy[economy["period"] <= CUT]
    economy["unemployment_rate"] += 0.3 * np.sin(np.arange(len(economy)))
    economy.to_csv(setting.file.base / "then.csv", index=False)
    old = done_again(setting, CUTOFF, 20, vintage="then.csv")
    assert (
        abs(
            old.fits["default"].params["unemployment_change"]
            - now.fits["default"].params["unemployment_change"]
        )
        > 0.01
    )
    # What came is projected with the values of today in any case.
    for past in (late, old):
        np.testing.assert_array_equal(
            past.setting.features(past.setting.path("what came")).values,
            now.setting.features(now.setting.path("what came")).values,
        )


def test_a_scenario_written_then_stands_beside_what_came(setting: Setting) -> None:
    calm = "scenario: calm\nstarts: 2008Q1\npaths:\n  unemployment_rate: {values: [5.0, 5.0]}\nafterwards: hold\n"
    (setting.file.base / "calm.yaml").write_text(calm)
    spec = Backtest(cutoffs=(CUT,), scenarios_then={CUT: ("calm.yaml",)})
    row = analyse(setting, "backtest", spec).table("summary").iloc[0]
    assert row["pd_then_calm"] < 0.6 * row["pd_model"]
    assert row["pd_then_calm"] == pytest.approx(row["pd_no_macro"], rel=0.5)


# ---- money


def test_balance_at_default_and_loss_are_those_of_the_rows(
    dated: Dated, found: Analysis, loans: pd.DataFrame
) -> None:
    late = loans[
        (loans["quarter"] > CUT) & loans["id"].isin(set(dated.seen.book.loan_ids)) & (loans["state"] == "D")
    ]
    groups = found.table("groups").query("cutoff == @CUT and by == 'product'").set_index("group")
    lgd = {"fixed": 0.3, "floating": 0.45}
    for product, rows in late.groupby("product"):
        assert groups.loc[product, "balance_defaulted"] == pytest.approx(rows["owed"].sum(), rel=1e-12)
        assert groups.loc[product, "loss_at_model_lgd"] == pytest.approx(
            rows["owed"].sum() * lgd[str(product)], rel=1e-9
        )
    assert (groups["loss_projected"] > 0.5 * groups["loss_at_model_lgd"]).all()


# ---- words for what cannot be done


def test_dates_that_cannot_be_are_told(setting: Setting) -> None:
    def ask(**keys: object) -> Analysis:
        return analyse(setting, "backtest", Backtest.model_validate(keys))

    with pytest.raises(
        UsageError, match="cut-off 1999Q4 leaves nothing to fit: loans are observed from 2000Q1 to 2012Q4"
    ):
        ask(cutoffs=("1999Q4",))
    with pytest.raises(UsageError, match="cut-off 2012Q4 leaves nothing to compare"):
        ask(cutoffs=("2012Q4",))
    with pytest.raises(UsageError, match="cut-off 2007-12 is a period that another one names already"):
        ask(cutoffs=("2007Q4", "2007-12"))
    with pytest.raises(
        NumericError,
        match=r"no cut-off is possible\. 2007Q4: analyses\.backtest\.vintages: there is no file 'x.csv' beside the study",
    ):
        ask(cutoffs=(CUT,), vintages={CUT: "x.csv"})
    with pytest.raises(ValueError, match="2008Q4 is no cut-off"):
        Backtest(cutoffs=(CUT,), vintages={"2008Q4": "x.csv"})


def test_a_date_before_any_default_is_told_and_the_others_go_on(tmp_path: Path, loans: pd.DataFrame) -> None:
    kept = loans[(loans["state"] != "D") | (loans["quarter"] > "2003Q4")]
    s = setting_of(world.write_world(tmp_path), loans=kept)
    found = analyse(s, "backtest", Backtest(cutoffs=("2003Q4", CUT)))
    assert found.table("not_possible").to_dict("records") == [
        {"cutoff": "2003Q4", "reason": "no default before this date, so there is nothing to fit"}
    ]
    assert list(found.table("summary")["cutoff"]) == [CUT]
    assert (
        "Backtest: the cut-off 2003Q4 was not possible: no default before this date, so there is nothing to fit"
        in found.cautions
    )
    with pytest.raises(NumericError, match=r"no cut-off is possible\. 2003Q4: no default before this date"):
        analyse(s, "backtest", Backtest(cutoffs=("2003Q4",)))


def test_without_named_dates_year_ends_are_taken(setting: Setting) -> None:
    last = last_observed(setting.data.loans.risk_set)
    assert list(cutoffs(setting, Backtest(), last)) == ["2002Q4", "2004Q4", "2006Q4", "2009Q4", "2011Q4"]


def test_steps_bound_what_is_compared(setting: Setting) -> None:
    found = analyse(setting, "backtest", Backtest(cutoffs=(CUT,), steps=4))
    assert found.table("totals")["periods"].tolist() == [4]
    assert found.table("summary")["until"].tolist() == ["2008Q4"]


def test_a_date_inside_a_macro_period_is_told(setting: Setting) -> None:
    november = parse_period("2007-11", Frequency.MONTH)
    message = (
        r"^the cut-off 2007-11 lies inside the macro period 2007Q4, whose value was not known then; use 2007-12 or an earlier end of "
        r"a quarter$"
    )
    with pytest.raises(UsageError, match=message):
        demand_end_of_period(november, Frequency.MONTH, setting.data.history)
    demand_end_of_period(november + 1, Frequency.MONTH, setting.data.history)


@pytest.mark.parametrize(
    ("pd_", "begins"),
    [
        (1.0, "No: it expected a rise "),
        (0.6, "It saw the downturn and overstated it: the rise it expected is 1.8 times the one that came."),
        (0.35, "Yes: it saw "),
        (0.25, "In part: it saw "),
        (0.16, "No: it saw "),
        (0.10, "No: it expected fewer defaults than last year's rates, and more came."),
    ],
)
def test_the_verdict_follows_the_share_of_the_rise(dated: Dated, pd_: float, begins: str) -> None:
    """What came: 39 %; last year's rates: 13 %."""
    model = dated.said[MODEL]
    came, last = float(dated.actual["default"][-1]), float(dated.said[LAST_YEAR].rolled.pd.mean())
    level = last + (came - last) * (pd_ - 0.13) / 0.26
    other = replace(model, rolled=replace(model.rolled, pd=np.full(dated.seen.n, level)))
    told = answer([replace(dated, said={**dated.said, MODEL: other})])
    assert told.startswith(begins), told
    failed = replace(dated, past=replace(dated.past, failed=("default: periods",)))
    assert "fails the gate default: periods: a study would not have projected it" in answer([failed])
