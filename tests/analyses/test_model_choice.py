"""Model choice against studies whose text was changed by hand and run from the start."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import stresskit as sk
from stresskit.analyses.ask import analyse
from stresskit.core.errors import DataError, TextError, UsageError
from stresskit.runs.records import Analysis
from stresskit.runs.setting import Setting
from stresskit.search.api import read_search, search_specifications
from stresskit.search.folder import write_search
from stresskit.spec.model_choice import ModelChoice
from tests.analyses import past_world as world
from tests.analyses.world import setting_of

SEARCH = """\
search: unemployment
cause: default
candidates:
  - {of: unemployment_rate, transforms: [difference], over: [2, 4], lags: [1, 2], expect: positive}
rules: {max_p: null}
out_of_time: {folds: 2, window: 6}
"""


@pytest.fixture(scope="module")
def loans() -> pd.DataFrame:
    return world.panel(1500, seed=5)


@pytest.fixture(scope="module")
def setting(tmp_path_factory: pytest.TempPathFactory, loans: pd.DataFrame) -> Setting:
    file = world.write_world(tmp_path_factory.mktemp("choice"))
    (file.base / "search.yaml").write_text(SEARCH)
    return setting_of(file, loans=loans)


@pytest.fixture(scope="module")
def found(setting: Setting) -> Analysis:
    return analyse(
        setting, "model_choice",
        ModelChoice(search="search.yaml", top=2, weights={"study": 3.0, "link": 1.0}),
    )  # fmt: skip


@pytest.fixture(scope="module")
def details(found: Analysis) -> pd.DataFrame:
    return found.table("details").set_index("name")


def by_hand(folder: Path, loans: pd.DataFrame, old: str, new: str) -> pd.DataFrame:
    """Summary of the book, by scenario, of the study with its text changed."""
    assert old in world.STUDY
    file = world.write_world(folder, world.STUDY.replace(old, new))
    data = sk.prepare(file, loans=loans)
    summary = sk.project(file, data, sk.fit(file, data)).summary
    return summary[summary["by"] == ""].set_index("scenario")


@pytest.mark.parametrize(
    ("name", "old", "new"),
    [
        ("study", "study: past-world", "study: past-world"),
        ("link", "link: cloglog", "link: logit"),
        ("tail_weibull", "{age: log}", "{age: log, beyond: weibull}"),
        ("lag_unemployment_change_2", "over: 4, lag: 1", "over: 4, lag: 2"),
        ("lag_unemployment_change_0", "over: 4, lag: 1", "over: 4, lag: 0"),
        ("search_2", "over: 4, lag: 1", ""),
        ("without_payoff", "  payoff:\n    link: cloglog\n    terms:\n      - {age: linear}\n", ""),
    ],
)
def test_each_change_is_the_study_with_that_text(
    name: str, old: str, new: str, details: pd.DataFrame, found: Analysis, loans: pd.DataFrame, tmp_path: Path
) -> None:
    row = details.loc[name]
    if name == "search_2":
        over, lag = row["change"].split("difference")[1][0], row["change"].split("lag")[1][0]
        new = f"over: {over}, lag: {lag}"  # the rank is the search's affair
    if str(row["result"]).startswith("not possible"):
        with pytest.raises(Exception, match=str(row["result"]).removeprefix("not possible: ")[:40]):
            by_hand(tmp_path, loans, old, new)
        return
    summary = by_hand(tmp_path, loans, old, new)
    assert row["el_stressed"] == pytest.approx(summary.loc["slump", "el_lifetime"], rel=1e-9)
    assert row["el_baseline"] == pytest.approx(summary.loc["baseline", "el_lifetime"], rel=1e-9)
    assert row["pd_stressed"] == pytest.approx(summary.loc["slump", "pd_lifetime"], rel=1e-9)
    assert row["lgd_stressed"] == pytest.approx(summary.loc["slump", "lgd"], rel=1e-9)


def test_a_searched_specification_that_the_study_has_already_is_the_study(details: pd.DataFrame) -> None:
    assert "unemployment_change (rank 1" in details.loc["search_1", "change"]
    assert details.loc["search_1", "el_stressed"] == pytest.approx(
        details.loc["study", "el_stressed"], rel=1e-9
    )


def test_windows_are_fits_on_the_rows_cut_by_hand(
    details: pd.DataFrame, setting: Setting, loans: pd.DataFrame
) -> None:
    cut = loans[loans["quarter"] <= "2009Q4"]
    early = sk.prepare(setting.file, loans=cut)
    fits = {
        c: sk.fit_hazard(s, early.loans.risk_set, early.features, cause=c)
        for c, s in setting.file.study.hazards.items()
    }
    changed = setting.with_fits({str(c): f for c, f in fits.items()})
    el = float(changed.along([changed.path("slump")])[0].loans["el_lifetime"].sum())
    assert details.loc["without_last_3", "change"] == "fitted without the last 3 years, to rows up to 2009Q4"
    assert details.loc["without_last_3", "el_stressed"] == pytest.approx(el, rel=1e-9)
    assert {"first_half", "last_half"} <= set(details.index)


def test_range_answer_and_average(found: Analysis, details: pd.DataFrame) -> None:
    inside = details[details["in_range"] == "yes"]
    assert len(inside) >= 5
    assert (inside["gates_failed"] == "").all()
    assert details.loc["without_payoff", "in_range"] == "no"
    assert found.facts["el_low"] == inside["el_stressed"].min()
    assert found.facts["el_high"] == inside["el_stressed"].max()
    for value in (
        inside["el_stressed"].min(),
        inside["el_stressed"].max(),
        details.loc["study", "el_stressed"],
    ):
        assert f"{value:,.0f}" in found.answer
    mean = 0.75 * details.loc["study", "el_stressed"] + 0.25 * details.loc["link", "el_stressed"]
    assert details.loc["average", "el_stressed"] == pytest.approx(mean, rel=1e-12)
    assert details.loc["study", "difference_change"] == 0.0
    assert details.loc["study", "aic_difference"] == 0.0
    assert np.isnan(details.loc["first_half", "aic_difference"])


def test_a_finished_search_gives_the_rows_that_the_search_gives(
    setting: Setting, details: pd.DataFrame, tmp_path: Path
) -> None:
    loaded = read_search(setting.file.base / "search.yaml")
    write_search(search_specifications(setting.file, setting.data, loaded), setting.file.base / "searched")
    only = ModelChoice(
        search="searched",
        top=2,
        links=False,
        tails=False,
        lags=(),
        halves=False,
        without_last_years=(),
        payoff=False,
        out_of_time=0,
    )
    again = analyse(setting, "model_choice", only).table("details").set_index("name")
    assert list(again.index) == ["study", "search_1", "search_2"]
    for name in again.index:
        assert again.loc[name, "el_stressed"] == details.loc[name, "el_stressed"]
    assert again["log_score"].isna().all()
    (setting.file.base / "empty").mkdir()
    with pytest.raises(DataError, match="empty is not the folder of a finished search"):
        analyse(setting, "model_choice", ModelChoice(search="empty"))


def test_bad_requests_are_told(setting: Setting) -> None:
    def ask(**keys: object) -> None:
        analyse(setting, "model_choice", ModelChoice.model_validate(keys))

    with pytest.raises(
        UsageError, match=r"no scenario 'slum'; did you mean 'slump'\? \(scenarios: baseline, slump\)"
    ):
        ask(scenario="slum")
    with pytest.raises(
        UsageError, match="'baseline' is the scenario that differences are taken to; name a stressed one"
    ):
        ask(scenario="baseline")
    with pytest.raises(
        UsageError, match=r"weights: no row 'links'; did you mean 'link'\? \(rows: study, link, "
    ):
        ask(weights={"links": 1.0})
    with pytest.raises(UsageError, match=r"there is no file or folder 'nowhere\.yaml' beside the study"):
        ask(search="nowhere.yaml")
    with pytest.raises(TextError, match="a study, where a search was expected"):
        ask(search="study.yaml")
    with pytest.raises(ValueError, match="0 changes nothing"):
        ModelChoice(lags=(0,))
