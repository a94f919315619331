"""What the sentences may not claim: no range where nothing moved, no p-value where none is given, no tie where there is none."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import stresskit as sk
from stresskit.search.api import search_specifications
from stresskit.search.result import SearchResult, Span
from tests.search.world import BASELINE, STUDY, loan_frame, macro_frame, search_text

RECORD = "rules: {sign: record, max_p: null, max_vif: null, gain: record}\n"
_CATEGORY = "      - {loan: product, as: category, reference: fixed}\n"
_INTERACTION = "      - {interaction: [product, driver_now]}\n"
_MACROS = "      - {macro: driver_now, expect: positive}\n      - {macro: decoy_now}\n"


def _searched(folder: Path, text: str, *, study: str, first: str = "2004Q1") -> SearchResult:
    """On 400 loans, the macro history beginning at ``first``."""
    (folder / "study.yaml").write_text(study)
    (folder / "baseline.yaml").write_text(BASELINE)
    macro = macro_frame()
    loans = loan_frame(macro, 400)
    file = sk.load_study(folder / "study.yaml")
    known = macro[macro["period"] >= first].reset_index(drop=True)
    data = sk.prepare(file, loans=loans, macro=known)
    return search_specifications(
        file, data, search_text(folder, f"search: s\ncause: default\n{text}{RECORD}")
    )


def test_a_feature_that_never_moves_is_said_to_have_no_range(tmp_path: Path) -> None:
    """Without an intercept such a feature can be fitted, and it came first here with a division by zero."""
    study = STUDY.replace("    link: cloglog\n", "    link: cloglog\n    intercept: false\n")
    study = study.replace(_CATEGORY, "").replace(_INTERACTION, "")
    text = "candidates: [{of: flat}]\nout_of_time: {folds: 2, window: 4}\n"
    result = _searched(tmp_path, text, study=study)
    assert result.accepted == 1
    assert "The windows saw flat_level_lag0 at 2, as all rows do: it does not move." in " ".join(result.notes)
    assert np.isnan(Span(2.0, 2.0, 2.0, 2.0).share_scored)
    assert Span(0.0, 4.0, 1.0, 2.0).share_scored == 0.25


@pytest.fixture(scope="module")
def short(tmp_path_factory: pytest.TempPathFactory) -> SearchResult:
    """Seven periods, by AIC: the first by AIC predicts worse than the second by more than two standard errors."""
    study = STUDY.replace(_CATEGORY, "").replace(_INTERACTION, "").replace(_MACROS, "")
    text = (
        "candidates: [{of: decoy, lags: [1]}, {of: walk}, {of: driver}]\nmost_terms: 2\n"
        "out_of_time: {folds: 1, window: 2}\nrank_by: aic\n"
    )
    return _searched(tmp_path_factory.mktemp("short"), text, study=study, first="2019Q1")


def test_p_values_that_are_not_given_are_said_to_be_missing(short: SearchResult) -> None:
    assert short.table["p_value"].isna().all()
    told = " ".join(short.notes)
    assert "nan" not in told
    assert (
        "Its searched terms have no p-value, because 7 periods are too few: whether it is more than the best of 6 tried by "
        "chance is not known." in told
    )
    assert "Clustered p-values rest on" not in told


def test_a_rival_that_predicts_better_is_ahead_and_not_tied(short: SearchResult) -> None:
    first, second = (short.table.loc[i, "oot_gain_total"] for i in (0, 1))
    assert second - first > 10  # by AIC they stand the other way round
    told = " ".join(short.notes)
    assert f"{second - first:.3g} log-likelihood units ahead out of time" in told
    assert "-17" not in told
    assert "5 of 5 others that satisfy every rule lie less than" not in told
    assert "lie more than two standard errors ahead of the first" in told
