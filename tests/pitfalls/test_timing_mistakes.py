"""A macro series read at the wrong time: quarters on a monthly book, a yearly change, two quarters' lag."""

from __future__ import annotations

import math

import numpy as np
import pytest

from stresskit.core.errors import DataError
from stresskit.core.period import Frequency, format_period
from stresskit.core.values import FeatureTable, MacroHistory, Portfolio, ScenarioPath
from stresskit.macro.features import alignment_sample, build_features
from stresskit.projection.project import project
from stresskit.spec.study import Macro
from tests.pitfalls import world
from tests.pitfalls.world import assert_right, assert_wrong, mean_incidence, true_steps

LAG, OVER = 2, 4
FIRST_QUARTER = world.START // 3 - LAG - OVER
_Q = np.arange(world.MONTHS // 3 + LAG + OVER)
#: Unemployment rate by quarter: history, and a stress that bites at once.
OBSERVED = 6.0 + 1.5 * np.sin(_Q * 2 * math.pi / 18) + 0.4 * np.sin(_Q * 2 * math.pi / 7)
PATH = OBSERVED[-1] + np.interp(np.arange(1, 21), [1, 4, 8, 20], [0.9, 3.6, 4.0, 0.5])


def macro(lag: int = LAG) -> Macro:
    return Macro.model_validate(
        {
            "file": "macro.csv",
            "variables": {"unemployment_rate": {"unit": "percent", "place": "step"}},
            "features": {
                "m": {"of": "unemployment_rate", "transform": "difference", "over": OVER, "lag": lag}
            },
        }
    )


HISTORY = MacroHistory(
    Frequency.QUARTER, FIRST_QUARTER, {"unemployment_rate": OBSERVED}, {"unemployment_rate": "percent"},
    {"unemployment_rate": "step"},
)  # fmt: skip
SCENARIO = ScenarioPath(
    "stress", None, Frequency.QUARTER, (world.AS_OF + 1) // 3, {"unemployment_rate": PATH},
    {"unemployment_rate": np.zeros(PATH.size, dtype=np.int64)},
)  # fmt: skip


def by_hand(period: int, lag: int = LAG) -> float:
    """The change over four quarters up to ``lag`` quarters before the one that holds the month."""
    whole = [*OBSERVED, *PATH]
    at = period // 3 - FIRST_QUARTER - lag
    return whole[at] - whole[at - OVER]


def on_history() -> FeatureTable:
    return build_features(macro(), HISTORY, model=Frequency.MONTH, start=world.START, end=world.AS_OF)


def on_path() -> FeatureTable:
    return build_features(
        macro(),
        HISTORY,
        model=Frequency.MONTH,
        start=world.AS_OF + 1,
        end=world.AS_OF + world.STEPS,
        path=SCENARIO,
    )


@pytest.fixture(scope="module")
def first_year(book: Portfolio) -> list[float]:
    """First twelve months' incidence, a value per simulated book whose defaults read the series at its lag."""
    m = np.array([by_hand(p) for p in range(world.START, world.AS_OF + 1)])
    out = []
    for batch in range(world.BATCHES):
        seen = world.simulate(np.random.default_rng([88, batch]), 12_000, m=m)
        fits = world.fit_both(seen.risk_set(), on_history())
        out.append(float(project(book, fits, on_path(), cap=world.STEPS).pd_within(12).mean()))
    return out


def true_first_year(book: Portfolio, lag: int) -> float:
    m = np.array([by_hand(world.AS_OF + h, lag) for h in range(1, world.STEPS + 1)])
    return mean_incidence(true_steps(book, dict.fromkeys(world.TRUE, m)), 12)


@pytest.mark.parametrize(
    ("lag", "by"), [(0, 0.25), (LAG + 1, -0.15)], ids=["lag dropped in projection", "one quarter late"]
)
def test_the_lag_of_the_model_holds_in_projection(
    first_year: list[float], book: Portfolio, lag: int, by: float
) -> None:
    right = true_first_year(book, LAG)
    assert_wrong(true_first_year(book, lag), right, by=by)
    assert_right(first_year, right)


def test_lags_reach_back_into_history() -> None:
    for table in (on_history(), on_path()):
        want = [by_hand(p) for p in range(table.start, table.start + table.n_periods)]
        np.testing.assert_allclose(table.column("m"), want, rtol=0, atol=1e-12)
    # The first half year of the path rests on history only, and is finite all the same.
    unlike = build_features(
        macro(), HISTORY, model=Frequency.MONTH, start=world.AS_OF + 1, end=world.AS_OF + world.STEPS,
        path=ScenarioPath(
            "other", None, Frequency.QUARTER, SCENARIO.start, {"unemployment_rate": PATH + 5},
            {"unemployment_rate": np.zeros(PATH.size, dtype=np.int64)},
        ),
    )  # fmt: skip
    same = unlike.column("m") == on_path().column("m")
    assert same[: 3 * LAG].all()
    assert not same[3 * LAG : 3 * (LAG + OVER)].any()


def test_the_alignment_sample_names_the_quarters_that_were_read() -> None:
    sample = alignment_sample(macro(), HISTORY, on_history(), model=Frequency.MONTH)
    assert len(sample) == 5
    labels = {format_period(p, Frequency.MONTH): p for p in range(world.START, world.AS_OF + 1)}
    for row in sample.itertuples():
        period = labels[row.model_period]
        ends = (period // 3 - LAG - OVER, period // 3 - LAG)
        assert row.macro_period == ", ".join(format_period(q, Frequency.QUARTER) for q in ends)
        assert row.value == pytest.approx(by_hand(period), abs=1e-12)


def test_a_path_that_starts_late_or_early_is_refused() -> None:
    hole = ScenarioPath(
        "late", None, Frequency.QUARTER, HISTORY.end + 2, dict(SCENARIO.values), dict(SCENARIO.flags)
    )
    with pytest.raises(DataError, match="the period before the scenario's first must be in history"):
        build_features(
            macro(), HISTORY, model=Frequency.MONTH, start=world.AS_OF + 1, end=world.AS_OF + 12, path=hole
        )
