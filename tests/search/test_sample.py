"""Cutting a risk set by period, against rows written out one by one."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from stresskit.core.period import Frequency
from stresskit.core.values import RiskSet, no_features
from stresskit.panel.rows import risk_set_from_rows
from stresskit.search.sample import common_sample, cut
from tests.search.world import search_text


def rows_of(risk_set: RiskSet) -> pd.DataFrame:
    """A row per loan and age, by loops."""
    out, position = [], 0
    for k, loan in enumerate(risk_set.stay_loan):
        for age in range(int(risk_set.stay_entry[k]) + 1, int(risk_set.stay_exit[k]) + 1):
            ends = age == risk_set.stay_exit[k]
            out.append(
                {
                    "loan": risk_set.loan_ids[loan],
                    "age": age,
                    "period": int(risk_set.stay_origin[k]) + age,
                    "event": int(risk_set.stay_cause[k]) if ends else 0,
                    "weight": float(risk_set.weight[k]),
                    **{n: c[loan] for n, c in risk_set.static.items()},
                    **{n: c[position] for n, c in risk_set.moving.items()},
                }
            )
            position += 1
    return pd.DataFrame(out)


def _random(seed: int) -> RiskSet:
    rng = np.random.default_rng(seed)
    frames = []
    for i in range(40):
        origin, entry, length = int(rng.integers(0, 20)), int(rng.integers(0, 4)), int(rng.integers(1, 15))
        age = np.arange(entry + 1, entry + length + 1)
        event = np.zeros(length, dtype=int)
        event[-1] = rng.integers(0, 3)
        frames.append(
            pd.DataFrame(
                {
                    "loan": f"L{i:02d}", "age": age, "period": origin + age, "event": event,
                    "group": f"g{i % 3}", "balance": rng.normal(size=length), "weight": float(1 + i % 2),
                }
            )
        )  # fmt: skip
    return risk_set_from_rows(
        pd.concat(frames), loan="loan", age="age", event="event", causes=("default", "payoff"), period="period",
        weight="weight", static=("group",), moving=("balance",),
    )  # fmt: skip


@pytest.mark.parametrize(("first", "last"), [(0, 99), (8, 20), (15, 15), (3, 11)])
def test_cut_keeps_exactly_the_rows_of_the_periods(first: int, last: int) -> None:
    whole = _random(1)
    rows = rows_of(whole)
    expected = rows[(rows["period"] >= first) & (rows["period"] <= last)].reset_index(drop=True)
    assert 0 < len(expected) <= len(rows)
    pd.testing.assert_frame_equal(rows_of(cut(whole, first, last)), expected)


def test_cut_to_periods_without_rows_is_empty() -> None:
    assert cut(_random(2), 500, 600).n_rows == 0


def test_pieces_add_up_to_the_whole() -> None:
    whole = _random(3)
    pieces = [cut(whole, 0, 10), cut(whole, 11, 17), cut(whole, 18, 99)]
    assert sum(p.n_rows for p in pieces) == whole.n_rows
    for cause in whole.causes:
        assert sum(p.events(cause) for p in pieces) == whole.events(cause)


def test_windows_hold_the_rows_after_the_cut_off_and_their_moving_columns(tmp_path: Path) -> None:
    text = "search: s\ncause: payoff\ncandidates: [{of: x}]\nout_of_time: {folds: 2, window: 5}\n"
    whole = _random(4)
    sample = common_sample(
        search_text(tmp_path, text), whole, no_features(Frequency.MONTH, 0, 60), ("group", "balance")
    )
    rows = rows_of(whole)
    rows = rows[rows["event"] != 1]  # rows that end in default are none of payoff's
    last = rows["period"].max()
    assert [w.cutoff for w in sample.windows] == [last - 10, last - 5]
    for window in sample.windows:
        after = rows[(rows["period"] > window.cutoff) & (rows["period"] <= window.cutoff + 5)]
        ours = window.frame.assign(period=window.period, event=2 * window.event, weight=window.weight)
        columns = ["group", "balance", "age", "period", "event", "weight"]
        pd.testing.assert_frame_equal(ours[columns], after[columns].reset_index(drop=True), check_dtype=False)
        assert len(after) > 5
        train = rows_of(whole)
        train = train[train["period"] <= window.cutoff].reset_index(drop=True)
        pd.testing.assert_frame_equal(rows_of(window.train), train)
