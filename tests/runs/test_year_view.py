"""A small study with staging, capital, year view and adjustments: what must hold between its figures."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

from stresskit.core.errors import DataError, TextError
from stresskit.hazard.result import HazardFit
from stresskit.runs.api import Prepared, StudyFile, fit, load_study, prepare, project
from stresskit.runs.records import StudyResult
from stresskit.spec.study import Study
from tests.cli.small_study import write_small_study

SECTIONS: dict[str, Any] = {
    "breakdowns": [["product"], ["place"], ["product", "place"]],
    "years": {"first": 4},
    "staging": {"ratio": 1.2, "increase": 0.002, "low_risk": 0.001, "stays_years": 2},
    "capital": {
        "class": "product", "values": {"fixed": "residential_mortgage", "floating": "other_retail"},
        "stressed_weight": 0.3, "downturn_lgd": {"fixed": 0.35},
    },
    "adjustments": {
        "floors": {"lgd": 0.31},
        "overlays": [
            {"name": "east_flood", "reason": "claims after the flood", "where": {"place": ["east"]}, "scenarios": ["slump"], "multiply": 1.1},
            {"name": "model_risk", "reason": "short history of floating", "where": {"product": ["floating"]}, "add": 1000.0},
        ],
    },
}  # fmt: skip
AMOUNTS = ("balance", "default_amount", "el", "loss", "impairment", "written_off", "outflow", "rwa", "el_")
SHARES = ("pd", "lgd", "pd_regulatory", "lgd_regulatory", "default_share")


class World:
    def __init__(self, folder: Path) -> None:
        self.file: StudyFile = load_study(write_small_study(folder))
        self.data: Prepared = prepare(self.file)
        self.fits: Mapping[str, HazardFit] = fit(self.file, self.data)

    def run(self, data: Prepared | None = None, **sections: Any) -> StudyResult:
        plain = self.file.study.model_dump(by_alias=True, exclude_unset=True)
        study = Study.model_validate_json(json.dumps(plain | sections))
        return project(replace(self.file, study=study), data or self.data, self.fits)


@pytest.fixture(scope="module")
def world(tmp_path_factory: pytest.TempPathFactory) -> World:
    return World(tmp_path_factory.mktemp("years"))


@pytest.fixture(scope="module")
def result(world: World) -> StudyResult:
    return world.run(**SECTIONS)


def years(result: StudyResult, by: str | None = None, scenario: str | None = None) -> pd.DataFrame:
    assert result.years is not None
    rows = result.years
    rows = rows if by is None else rows[rows["by"] == by]
    return rows if scenario is None else rows[rows["scenario"] == scenario]


def amount_columns(frame: pd.DataFrame) -> list[str]:
    return [
        c
        for c in frame.columns
        if c not in SHARES and (c.startswith(AMOUNTS) or c.endswith("loans") or c.startswith("loans_"))
    ]


def test_a_study_without_the_sections_is_what_it_was(world: World, result: StudyResult) -> None:
    plain = world.run()
    assert plain.years is None
    assert plain.adjustments is None
    own = [c for c in result.summary.columns if not c.endswith("_adjusted")]
    assert own == list(plain.summary.columns)
    pd.testing.assert_frame_equal(plain.summary, result.summary[own], check_exact=True)
    pd.testing.assert_frame_equal(plain.segments, result.segments, check_exact=True)
    pd.testing.assert_frame_equal(plain.loans, result.loans.drop(columns="stage"), check_exact=True)
    assert [c for c in plain.cautions if c not in result.cautions] == []


def test_segments_add_up_to_the_portfolio(result: StudyResult) -> None:
    keys = ["scenario", "until"]
    whole = years(result, "").set_index(keys)
    columns = amount_columns(whole)
    assert len(columns) > 25
    for by in ("product", "place", "product+place"):
        parts = years(result, by).groupby(keys, sort=False)[columns].sum(min_count=1)
        size = whole[columns].abs().max()
        for c in columns:
            np.testing.assert_allclose(
                parts[c].reindex(whole.index),
                whole[c],
                rtol=0,
                atol=1e-12 * max(1.0, float(size[c])),
                err_msg=f"{by} {c}",
            )


def test_every_loan_is_somewhere(result: StudyResult) -> None:
    rows = years(result)
    flows = rows[rows["periods"] > 0]
    left = flows["loans_end"] + flows["default_loans"] + flows["payoff_loans"] + flows["matured_loans"]
    np.testing.assert_allclose(left, flows["loans_start"], rtol=0, atol=1e-11)
    np.testing.assert_allclose(
        rows["loans_stage_1"] + rows["loans_stage_2"], rows["loans_end"], rtol=0, atol=1e-11
    )
    np.testing.assert_allclose(
        rows["balance_stage_1"] + rows["balance_stage_2"], rows["balance_end"], rtol=1e-12
    )
    assert (
        (rows[amount_columns(rows)].drop(columns=["impairment_charge", "el_less_provisions"]).fillna(0) >= 0)
        .all()
        .all()
    )


def test_the_charge_is_change_of_stock_plus_write_off(result: StudyResult) -> None:
    for _, rows in years(result).groupby(["scenario", "by", "segment"]):
        stock, gone = rows["impairment"].to_numpy(), rows["written_off"].to_numpy()[1:]
        np.testing.assert_allclose(
            rows["impairment_charge"].to_numpy()[1:], np.diff(stock) + gone, rtol=1e-12, atol=1e-9
        )
        third = rows["balance_stage_3"].to_numpy()
        moved = rows["default_amount"].to_numpy()[1:] - rows["outflow_stage_3"].to_numpy()[1:]
        np.testing.assert_allclose(np.diff(third), moved, rtol=0, atol=1e-9 * max(1.0, third.max()))


def test_years_are_the_steps_of_the_segment_table(result: StudyResult) -> None:
    """The other route to the same flows: sums over steps of each calendar year."""
    steps = result.segments[(result.segments["by"] == "") & (result.segments["scenario"] == "slump")]
    of = steps["period"].str[:4].astype(int)
    flows = years(result, "", "slump").set_index("year").iloc[1:]
    loans = years(result, "", "slump")["loans_end"].iloc[0]
    for ours, theirs, size in (
        ("el", "el", 1.0),
        ("default_amount", "default_amount", 1.0),
        ("default_loans", "default", loans),
    ):
        sums = steps.groupby(of)[theirs].sum() * size
        np.testing.assert_allclose(flows[ours], sums.reindex(flows.index), rtol=1e-11)
    twelve = result.summary[(result.summary["by"] == "") & (result.summary["scenario"] == "slump")].iloc[0]
    assert flows["pd"].iloc[0] == pytest.approx(twelve["pd_12m"], rel=1e-12)


def test_weighted_years_are_the_weighted_mean(result: StudyResult) -> None:
    keys = ["by", "segment", "until"]
    each = {s: years(result, scenario=s).set_index(keys) for s in ("baseline", "slump", "weighted")}
    for c in amount_columns(each["baseline"]):
        mean = 0.7 * each["baseline"][c] + 0.3 * each["slump"][c]
        np.testing.assert_allclose(each["weighted"][c], mean, rtol=1e-10, atol=1e-9, err_msg=c)


def test_identical_scenarios_have_one_result(world: World) -> None:
    twin = tuple(replace(world.data.paths[1], name=p.name, weight=p.weight) for p in world.data.paths)
    result = world.run(
        replace(world.data, paths=twin), **SECTIONS | {"adjustments": {"floors": {"lgd": 0.31}}}
    )
    rows = [
        years(result, scenario=s).drop(columns="scenario").reset_index(drop=True)
        for s in ("baseline", "slump", "weighted")
    ]
    pd.testing.assert_frame_equal(rows[0], rows[1], check_exact=True)
    pd.testing.assert_frame_equal(rows[0], rows[2], rtol=1e-12, atol=1e-9)


def test_doubled_balances_double_amounts_and_move_no_stage(world: World, result: StudyResult) -> None:
    loans, late = world.data.loans, world.data.loans.defaulted
    assert late is not None
    double = replace(
        loans, portfolio=replace(loans.portfolio, balance=2 * loans.portfolio.balance),
        defaulted=replace(late, loans=replace(late.loans, balance=2 * late.loans.balance)),
    )  # fmt: skip
    twice = world.run(replace(world.data, loans=double), **SECTIONS)
    one, two = years(result), years(twice)
    for c in one.columns[6:]:
        factor = 1.0 if c in SHARES or c.endswith("_loans") or c.startswith("loans_") else 2.0
        np.testing.assert_allclose(two[c], factor * one[c], rtol=1e-12, err_msg=c)
    assert result.loans["stage"].equals(twice.loans["stage"])


def test_stage_3_begins_with_the_defaults_of_the_last_years(world: World, result: StudyResult) -> None:
    panel = pd.read_csv(world.file.base / "loans.csv")
    late = panel[(panel["state"] == "D") & (panel["month"] >= "2019-01")]
    lgd = late["product"].map({"fixed": 0.3, "floating": 0.45})
    first = years(result, "", "baseline").iloc[0]
    assert first["loans_stage_3"] == len(late)
    assert first["balance_stage_3"] == pytest.approx(late["owed"].sum(), rel=1e-12)
    assert first["impairment_stage_3"] == pytest.approx((late["owed"] * lgd).sum(), rel=1e-12)
    # K of a default: the downturn LGD of 0.35 over the model's 0.30 of fixed-rate loans; floating-rate ones need none
    fixed = late[late["product"] == "fixed"]["owed"].sum()
    assert first["rwa_defaulted"] == pytest.approx(12.5 * 0.05 * fixed, rel=1e-9)
    second = years(result, "", "baseline").iloc[1]
    older = late[late["month"] < "2020-01"]
    assert second["outflow_stage_3"] == pytest.approx(older["owed"].sum(), rel=1e-12)


def test_impairment_at_as_of_is_that_of_the_loans(result: StudyResult) -> None:
    loans = result.loans[result.loans["scenario"] == "slump"]
    first = years(result, "", "slump").iloc[0]
    two = loans["stage"] == 2
    assert 0 < two.sum() < len(loans)
    assert first["impairment_stage_1"] == pytest.approx(loans.loc[~two, "el_12m"].sum(), rel=1e-12)
    assert first["impairment_stage_2"] == pytest.approx(loans.loc[two, "el_lifetime"].sum(), rel=1e-12)
    assert first["balance_stage_2"] == pytest.approx(loans.loc[two, "balance"].sum(), rel=1e-12)
    assert result.loans.loc[result.loans["scenario"] == "weighted", "stage"].isna().all()


def test_conditions_of_a_scenario_and_of_the_mean(world: World) -> None:
    """Two yardsticks give two answers; each by itself is in the plain loop (tests/loss)."""

    def seconds(conditions: str) -> dict[str, float]:
        rule = {"at_origination": {"conditions": conditions}, "ratio": 1.0001, "increase": 1e-6}
        rows = years(world.run(staging=rule), "")
        return {s: float(r["balance_stage_2"].iloc[0]) for s, r in rows.groupby("scenario")}

    mean, slump = seconds("mean"), seconds("slump")
    assert mean["slump"] > 0
    assert slump["slump"] != mean["slump"]


def test_past_due_and_pd_at_origination_by_column(tmp_path: Path) -> None:
    """Days past due come from the last row of the panel; the PD at origination is cut to the remaining life."""
    study = write_small_study(tmp_path, loans=300)
    panel = pd.read_csv(tmp_path / "loans.csv")
    panel["days"] = np.where(panel["month"] == "2020-12", np.arange(len(panel)) % 4 * 15.0, 90.0)
    panel["pd0"] = 0.4
    panel.to_csv(tmp_path / "loans.csv", index=False)
    text = study.read_text() + (
        "staging: {at_origination: {column: pd0}, ratio: 1.5, past_due: {column: days}, low_risk: 1.0}\n"
        "capital: {class: product, values: {fixed: residential_mortgage, floating: other_retail}, stressed_weight: 0.0, long_run: {column: pd0}}\n"
    )
    study.write_text(text)
    file = load_study(study)
    data = prepare(file)
    assert "days" not in data.loans.risk_set.moving
    fits = fit(file, data)
    result = project(file, data, fits)
    loans = result.loans[result.loans["scenario"] == "slump"].set_index("loan")
    days = panel[panel["month"] == "2020-12"].set_index("id")["days"].reindex(loans.index)
    assert ((loans["stage"] == 2) == (days >= 30)).all()
    assert 0 < (days >= 30).sum() < len(loans)
    assert years(result, "", "slump")["pd_regulatory"].iloc[0] == pytest.approx(0.4, rel=1e-12)
    # without the exemption: more than 1.5 x (1 - 0.6 ** (remaining / term))
    looser = load_study(
        _written(study, text.replace(", low_risk: 1.0", "").replace(", past_due: {column: days}", ""))
    )
    loans = project(looser, data, fits).loans
    loans = loans[loans["scenario"] == "slump"]
    book = data.loans.portfolio
    origin = 1 - 0.6 ** (book.remaining / (book.age + book.remaining))
    assert ((loans["stage"] == 2).to_numpy() == (loans["pd_lifetime"].to_numpy() > 1.5 * origin)).all()
    assert 0 < (loans["stage"] == 2).sum() < len(loans)


def _written(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def test_adjustments_by_hand(result: StudyResult) -> None:
    assert result.adjustments is not None
    loans = result.loans[result.loans["scenario"] == "slump"]
    rows = result.adjustments[(result.adjustments["scenario"] == "slump") & (result.adjustments["by"] == "")]
    assert rows["name"].tolist() == ["lgd", "east_flood", "model_risk"]
    fixed, east, floating = (
        loans["product"] == "fixed",
        loans["place"] == "east",
        loans["product"] == "floating",
    )
    for measure in ("el_12m", "el_lifetime"):
        model = loans[measure]
        floored = model.where(~fixed, model * 0.31 / 0.30)
        flooded = floored.where(~east, floored * 1.1)
        want = [
            (model.sum(), floored.sum()),
            (floored.sum(), flooded.sum()),
            (flooded.sum(), flooded.sum() + 1000.0),
        ]
        np.testing.assert_allclose(rows[[f"{measure}_before", f"{measure}_after"]], want, rtol=1e-12)
        row = result.summary[(result.summary["scenario"] == "slump") & (result.summary["by"] == "")].iloc[0]
        assert row[measure] == pytest.approx(model.sum(), rel=1e-12)
        assert row[f"{measure}_adjusted"] == pytest.approx(flooded.sum() + 1000.0, rel=1e-12)
    assert rows["loans"].tolist() == [fixed.sum(), east.sum(), floating.sum()]
    calm = result.adjustments[
        (result.adjustments["scenario"] == "baseline") & (result.adjustments["by"] == "")
    ]
    assert calm["loans"].tolist() == [fixed.sum(), 0, floating.sum()]
    # the added amount is spread by balance
    part = result.adjustments[
        (result.adjustments["scenario"] == "slump") & (result.adjustments["by"] == "place")
    ]
    added = part[part["name"] == "model_risk"].set_index("segment")
    share = loans[floating].groupby("place")["balance"].sum() / loans.loc[floating, "balance"].sum()
    np.testing.assert_allclose(
        (added["el_lifetime_after"] - added["el_lifetime_before"]).reindex(share.index),
        1000.0 * share,
        rtol=1e-9,
    )


def test_a_floor_on_the_pd_adds_what_the_year_lacks(world: World) -> None:
    result = world.run(adjustments={"floors": {"pd_12m": 0.3}})
    loans = result.loans[result.loans["scenario"] == "baseline"]
    low = loans["pd_12m"] < 0.3
    assert 0 < low.sum() < len(loans)
    more = (loans["el_12m"] * (0.3 / loans["pd_12m"] - 1)).where(low, 0.0).sum()
    row = result.summary.iloc[0]
    assert row["el_12m_adjusted"] - row["el_12m"] == pytest.approx(more, rel=1e-9)
    assert row["el_lifetime_adjusted"] - row["el_lifetime"] == pytest.approx(more, rel=1e-9)


def test_a_year_view_alone_and_its_default_breakdowns(world: World) -> None:
    rows = years(world.run(years={"first": 2}))
    assert list(dict.fromkeys(rows["by"])) == ["", "product", "place"]
    assert "impairment" not in rows
    assert rows[rows["by"] == ""].groupby("scenario")["until"].apply(list).iloc[0] == [
        "2020-12",
        "2021-12",
        "2022-12",
    ]


def test_a_horizon_shows_whole_years_only(world: World) -> None:
    rows = years(world.run(years={"first": 5}, horizon=30), "", "baseline")
    assert rows["until"].tolist() == ["2020-12", "2021-12", "2022-12"]


@pytest.mark.parametrize(
    ("sections", "error", "words"),
    [
        ({"staging": {"ratio": 2, "at_origination": {"conditions": "slumpp"}}}, TextError, "did you mean 'slump'"),
        ({"capital": {"class": "product", "values": {"fixed": "corporate"}, "stressed_weight": 1.0}}, DataError, "'floating'"),
        ({"adjustments": {"overlays": [{"name": "a", "reason": "because of it", "add": 1.0, "scenarios": ["slamp"]}]}}, TextError,
         "did you mean 'slump'"),
    ],
)  # fmt: skip
def test_what_does_not_fit_the_book_is_refused(
    world: World, sections: dict[str, Any], error: type[Exception], words: str
) -> None:
    with pytest.raises(error, match=words):
        world.run(**sections)
