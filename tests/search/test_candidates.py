"""Features that a text makes, how many specifications, and what is refused with which words."""

from __future__ import annotations

from pathlib import Path

import pytest

from stresskit.core.errors import DataError, NumericError, TextError
from stresskit.core.period import Frequency
from stresskit.runs.api import Prepared, StudyFile
from stresskit.search.api import search_specifications
from stresskit.search.candidates import base_hazard, counts, options, specifications
from stresskit.spec.terms import HazardSpec, term_name
from tests.search.world import search_text

HEAD = "search: s\ncause: default\ncandidates:\n"


def test_features_get_the_studys_own_names_where_they_are_the_same(world, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    text = (
        HEAD
        + "  - {of: driver, transforms: [level, difference, moving_average], over: [1, 2], lags: [0, 1]}\n"
    )
    found = options(search_text(tmp_path, text), world[0].study.macro, Frequency.QUARTER)
    assert [o.name for o in found] == [
        "driver_level_lag0", "driver_level_lag1",
        "driver_difference1_lag0", "driver_difference1_lag1", "driver_now", "driver_difference2_lag1",
        # a moving average over 1 is the level, which is there already
        "driver_moving_average2_lag0", "driver_moving_average2_lag1",
    ]  # fmt: skip


@pytest.mark.parametrize("many", [False, True])
@pytest.mark.parametrize("most", [1, 2, 3])
def test_counts_without_making_them(world, tmp_path: Path, most: int, many: bool) -> None:  # type: ignore[no-untyped-def]
    text = (
        HEAD
        + "  - {of: driver, lags: [0, 1, 2]}\n  - {of: decoy, lags: [0, 1]}\n  - {of: walk}\n  - {of: flat}\n"
    )
    found = options(search_text(tmp_path, text), world[0].study.macro, Frequency.QUARTER)
    made = list(specifications(found, most, many=many))
    assert counts(found, most, many=many) == tuple(sum(len(s) == k for s in made) for k in range(1, most + 1))
    assert len({tuple(o.name for o in s) for s in made}) == len(made)


def test_base_hazard_loses_searched_terms_and_their_interactions(world, tmp_path: Path) -> None:  # type: ignore[no-untyped-def]
    study = world[0].study
    bare = base_hazard(search_text(tmp_path, HEAD + "  - {of: walk}\n"), study)
    assert [term_name(t) for t in bare.spec.terms] == ["age", "product", "score"]
    assert bare.left_out == ("driver_now", "decoy_now", "product:driver_now")
    kept = base_hazard(search_text(tmp_path, HEAD + "  - {of: walk}\nkeep: [driver_now]\n"), study)
    assert [term_name(t) for t in kept.spec.terms] == [
        "age",
        "product",
        "score",
        "driver_now",
        "product:driver_now",
    ]
    assert kept.left_out == ("decoy_now",)


BAD = {
    "unknown key": (HEAD + "  - {of: walk, lag: [1]}\n", r":4:16: candidates#1.lag: unknown key; did you mean 'lags'"),
    "unknown transform": (HEAD + "  - {of: walk, transforms: [diference]}\n", r":4:\d+: .*did you mean 'difference'"),
    "negative lag": (HEAD + "  - {of: walk, lags: [-1]}\n", r":4:\d+: .*lags.*at least 0|from 0"),
    "lag twice": (HEAD + "  - {of: walk, lags: [1, 1]}\n", r":4:\d+: .*1 is listed twice"),
    "useless span": (HEAD + "  - {of: walk, over: [4]}\n", r":4:\d+: .*over has no use for level"),
    "folds and cutoffs": (
        HEAD + "  - {of: walk}\nout_of_time: {folds: 2, cutoffs: [2018Q4]}\n",
        r":5:\d+: out_of_time.*cutoffs or folds, not both",
    ),
    "no variable": (HEAD + "  - {of: drivr}\n", r":4:6: candidates#1.of: no macro variable 'drivr'; did you mean 'driver'"),
    "same feature twice": (HEAD + "  - {of: walk}\n  - {of: walk, lags: [0, 1]}\n", r":5:\d+: .*candidates#1 makes too"),
    "kept feature": (
        HEAD + "  - {of: driver, transforms: [difference], over: [2]}\nkeep: [driver_now]\n",
        r":4:\d+: .*makes driver_now, which keep holds",
    ),
    "keep of what is not there": (HEAD + "  - {of: walk}\nkeep: [drivernow]\n", r":5:\d+: .*did you mean 'driver_now'"),
    "no such hazard": (HEAD.replace("default", "payoff") + "  - {of: walk}\n", r":2:1: cause: the study has no hazard"),
    "beyond the limit": (
        HEAD + "  - {of: walk, lags: [0, 1, 2]}\n  - {of: decoy, lags: [0, 1]}\nmost_terms: 2\nlimit: 10\n",
        r":7:1: limit: 5 features make 11 specifications \(5 of 1 term, 6 of 2 terms\), more than the limit of 10\.",
    ),
    "windows before the data": (
        HEAD + "  - {of: walk}\nout_of_time: {folds: 8, window: 8}\n",
        r":5:\d+: out_of_time.folds: 8 windows of 8 quarters leave nothing.*2009Q1 to 2020Q4",
    ),
    "cut-off too late": (HEAD + "  - {of: walk}\nout_of_time: {cutoffs: [2018Q1]}\n", r":5:\d+: .*lie outside the data"),
    "overlap": (
        HEAD + "  - {of: walk}\nout_of_time: {cutoffs: [2016Q1, 2016Q3], window: 4}\n",
        r":5:\d+: .*2 periods after the cut-off before it, less than the window of 4",
    ),
    "falling cut-offs": (
        HEAD + "  - {of: walk}\nout_of_time: {cutoffs: [2016Q1, 2015Q3], window: 4}\n",
        r":5:\d+: .*cut-offs rise",
    ),
    "a study": ("study: x\nfrequency: month\n", r":1:1: this file is a study, where a search was expected"),
}  # fmt: skip


@pytest.mark.parametrize("case", BAD)
def test_bad_text_is_refused_at_its_place(
    case: str, world: tuple[StudyFile, Prepared], tmp_path: Path
) -> None:
    text, message = BAD[case]
    with pytest.raises(TextError, match=message) as caught:
        search_specifications(*world, search_text(tmp_path, text))
    assert str(tmp_path / "search.yaml") in str(caught.value)


def test_a_growth_that_cannot_be_computed_names_the_feature(
    world: tuple[StudyFile, Prepared], tmp_path: Path
) -> None:
    text = HEAD + "  - {of: driver, transforms: [growth]}\n"
    with pytest.raises(DataError, match=r"driver_growth1_lag0.*at or below zero.*use transform: difference"):
        search_specifications(*world, search_text(tmp_path, text))


def test_windows_that_do_not_fit_name_the_feature_that_shortens_the_rows(
    world: tuple[StudyFile, Prepared], tmp_path: Path
) -> None:
    """History begins 2004Q1, so the level 56 quarters ago is known from 2018Q1 on."""
    text = HEAD + "  - {of: walk, lags: [0, 56]}\nout_of_time: {folds: 4, window: 4}\n"
    with pytest.raises(
        TextError,
        match=r"from 2018Q1 to 2020Q4, because earlier ones have no value of walk_level_lag56\. Use fewer",
    ):
        search_specifications(*world, search_text(tmp_path, text))
    text = HEAD + "  - {of: walk}\nout_of_time: {folds: 14, window: 4}\n"
    with pytest.raises(TextError, match=r"from 2009Q\d to 2020Q4\. Use fewer"):
        search_specifications(*world, search_text(tmp_path, text))


def test_lags_beyond_all_history_leave_no_row(world: tuple[StudyFile, Prepared], tmp_path: Path) -> None:
    with pytest.raises(DataError, match=r"no period at risk has a value of every feature.*walk_level_lag80"):
        search_specifications(*world, search_text(tmp_path, HEAD + "  - {of: walk, lags: [80]}\n"))


def test_a_window_on_which_even_the_base_cannot_be_fitted(
    world: tuple[StudyFile, Prepared], tmp_path: Path
) -> None:
    text = HEAD + "  - {of: walk}\nout_of_time: {cutoffs: [2009Q1, 2016Q4], window: 4}\n"
    with pytest.raises(
        NumericError, match=r"without the searched terms.*refit up to 2009Q1: .*later cut-offs"
    ):
        search_specifications(*world, search_text(tmp_path, text))


@pytest.mark.parametrize(
    "stated",
    [
        {"ridge": 2.0, "when_separated": "ridge", "ridge_age": True},
        {"bias_reduction": "firth"},
        {"when_separated": "pool", "covariance": "period_hac", "hac_lag": 3},
    ],
)
def test_every_specification_keeps_the_studys_estimator(world, tmp_path: Path, stated: dict) -> None:  # type: ignore[no-untyped-def]
    study = world[0].study
    hazard = HazardSpec.model_validate(
        {
            **study.hazards["default"].model_dump(by_alias=True),
            **stated,
            "accept": {"levels": "a reason of its own"},
        }
    )
    search = search_text(tmp_path, HEAD + "  - {of: walk}\n")
    bare = base_hazard(search, study.model_copy(update={"hazards": {"default": hazard}}))
    one = bare.with_terms(options(search, study.macro, Frequency.QUARTER)[:1])
    for made in (bare.spec, one):
        assert {name: getattr(made, name) for name in stated} == stated
        assert made.accept == {}
