"""Evidence on a fit with a feature that goes by a loan column: as for the column filled row by row, lag by lag."""

from __future__ import annotations

import dataclasses

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency
from stresskit.core.values import FeatureTable, MacroHistory
from stresskit.evidence.actual import comparison, period_tally
from stresskit.evidence.calibration import calibration
from stresskit.evidence.lags import lag_profile
from stresskit.evidence.rows import fit_rows
from stresskit.evidence.stability import stability
from stresskit.hazard.fit import fit_hazard
from stresskit.macro.features import build_features
from stresskit.spec.study import Macro
from tests.evidence.world import END, START, World, macro_history, rows_of, simulate, spec

REGIONS = ("north", "south", "west")
TERMS = ({"age": "log", "support": 1}, {"loan": "x"}, {"macro": "m"})


def _macro(lag: int) -> Macro:
    return Macro.model_validate(
        {
            "file": "macro.csv",
            "variables": {r: {"unit": "level", "place": "linear"} for r in REGIONS},
            "features": {
                "m": {
                    "by": "region",
                    "of": {r: r for r in REGIONS},
                    "transform": "difference",
                    "over": 2,
                    "lag": lag,
                }
            },
        }
    )


@pytest.fixture(scope="module")
def world() -> tuple[World, MacroHistory]:
    rng = np.random.default_rng(12)
    series = {r: macro_history(rng).values["u"] for r in REGIONS}
    one = macro_history(rng)
    history = dataclasses.replace(
        one, values=series, units=dict.fromkeys(REGIONS, "level"), place=dict.fromkeys(REGIONS, "linear")
    )
    return simulate(43, loans=700, level=-5.0), history


def _features(history: MacroHistory, lag: int) -> FeatureTable:
    return build_features(_macro(lag), history, model=Frequency.MONTH, start=START, end=END)


def _filled(world: World, features: FeatureTable):  # type: ignore[no-untyped-def]
    """The risk set with ``m`` as a column that moves along a stay, a value per row."""
    risk_set = world.risk_set
    values = []
    for s, loan in enumerate(risk_set.stay_loan):
        column = features.column(f"m[{risk_set.static['region'][loan]}]")
        first = risk_set.stay_origin[s] + risk_set.stay_entry[s] + 1 - features.start
        values.append(column[first : first + risk_set.stay_exit[s] - risk_set.stay_entry[s]])
    return dataclasses.replace(risk_set, moving={"m": np.concatenate(values)})


def test_refits_are_those_of_the_study_with_another_lag(world: tuple[World, MacroHistory]) -> None:
    book, history = world
    table = _features(history, 2)
    fit = fit_hazard(spec(*TERMS), book.risk_set, table)
    got = lag_profile(fit, book.risk_set, table, macro=_macro(2), history=history, shifts=(-2, -1, 0, 3))
    assert list(got["term"].unique()) == ["m"]
    assert list(got["lag"]) == [0, 1, 2, 5]
    assert got["rows"].nunique() == 1
    for row in got.itertuples():
        again = fit_hazard(spec(*TERMS), book.risk_set, _features(history, row.lag))
        assert row.llf == pytest.approx(again.llf, abs=1e-7)
        assert row.coef == pytest.approx(float(again.params["m"]), abs=1e-7)
        assert row.se_period == pytest.approx(float(again.standard_errors("period")["m"]), rel=1e-5)


@pytest.mark.parametrize("link", ["cloglog", "logit"])
def test_stability_and_groups_are_those_of_the_column_filled_row_by_row(
    world: tuple[World, MacroHistory], link: str
) -> None:
    book, history = world
    table = _features(history, 1)
    fit = fit_hazard(spec(*TERMS, link=link), book.risk_set, table)
    filled = _filled(book, table)
    again = fit_hazard(spec(*TERMS[:2], {"loan": "m"}, link=link), filled, table)
    split = START + 60
    a, b = stability(fit, book.risk_set, table, split=split), stability(again, filled, table, split=split)
    figures = ["before", "se_before", "after", "se_after", "z"]
    np.testing.assert_allclose(a[figures], b[figures], rtol=1e-4)
    assert a["macro"].tolist() == [False, False, False, True]
    tables = []
    for one, risk_set in ((fit, book.risk_set), (again, filled)):
        rows = fit_rows(one, risk_set, table)
        tables.append(comparison(rows, period_tally(rows, ["region"])).table)
        assert calibration(one, risk_set, table)["events"].sum() > 0
    # The size of the shocks allows for the number of macro coefficients, so it is not that of a loan column.
    same = ["by", "group", "at_risk", "events", "expected", "actual_rate", "fitted_rate", "z_binomial"]
    left, right = (t.loc[t["by"].isin(["region", "age"]), same].reset_index(drop=True) for t in tables)
    pd.testing.assert_frame_equal(left, right, rtol=1e-6)


def test_the_rows_of_a_fit_are_those_spelled_out(world: tuple[World, MacroHistory]) -> None:
    book, history = world
    table = _features(history, 1)
    fit = fit_hazard(spec(*TERMS), book.risk_set, table)
    plain = rows_of(book.risk_set, table)
    blocks = list(fit_rows(fit, book.risk_set, table).blocks())
    p = np.concatenate([b.p for b in blocks])
    order = plain.sort_values(["loan", "age"], kind="stable")
    np.testing.assert_allclose(p, fit.predict(order), rtol=1e-12)
