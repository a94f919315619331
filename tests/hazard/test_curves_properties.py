"""Observed curves against a plain loop, and what must hold for any data."""

from __future__ import annotations

import math
from dataclasses import FrozenInstanceError

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from stresskit.core.errors import DataError, NumericError, UsageError
from stresskit.hazard.curves import (
    cumulative_incidence,
    first_supported_age,
    incidence_from_hazards,
    product_limit,
)

Case = tuple[int, int, int, int]


@st.composite
def cases(draw: st.DrawFn, causes: int = 2) -> list[Case]:
    """(entry, exit, cause, weight) with many ties."""
    n = draw(st.integers(1, 25))
    out = []
    for _ in range(n):
        entry = draw(st.integers(0, 6))
        length, cause = draw(st.integers(1, 6)), draw(st.integers(0, causes))
        out.append((entry, entry + length, cause, draw(st.integers(1, 3))))
    return out


def columns(rows: list[Case]) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    table = np.array(rows, dtype=float)
    return table[:, 0], table[:, 1], table[:, 2].astype(int), table[:, 3]


def plain_incidence(rows: list[Case], causes: int) -> list[dict[str, object]]:
    """Period after period, counting by hand; variance as the full double sum of the delta method."""
    out: list[dict[str, object]] = []
    survival, past = 1.0, []
    cumulative = [0.0] * causes
    hazard = hazard_variance = 0.0
    for age in sorted({r[1] for r in rows if r[2] > 0}):
        y = sum(w for e, x, _, w in rows if e < age <= x)
        d = [sum(w for _, x, c, w in rows if x == age and c == k) for k in range(1, causes + 1)]
        total = sum(d)
        past.append((survival, y, d, total, list(cumulative)))
        for k in range(causes):
            cumulative[k] += survival * d[k] / y
            past[-1][4][k] = cumulative[k]
        survival *= (y - total) / y
        hazard += total / y
        hazard_variance += total / y**2
        errors = []
        for k in range(causes):
            variance = 0.0
            for before, ys, ds, ts, then in past:
                later = cumulative[k] - then[k]
                greenwood = ts / (ys * (ys - ts)) if ys > ts else 0.0
                variance += later**2 * greenwood + before**2 * ds[k] * (ys - ds[k]) / ys**3
                variance -= 2 * later * before * ds[k] / ys**2
            errors.append(math.sqrt(max(variance, 0.0)))
        greenwood = sum(t / (ys * (ys - t)) for _, ys, _, t, _ in past if ys > t)
        out.append(
            {
                "age": age, "at_risk": y, "events": d, "survival": survival, "incidence": list(cumulative),
                "se": errors, "survival_se": survival * math.sqrt(greenwood) if survival > 0 else math.nan,
                "hazard": hazard, "hazard_se": math.sqrt(hazard_variance),
            }
        )  # fmt: skip
    return out


@given(cases())
@example(
    [(1, 2, 0, 3), (0, 2, 1, 3), (0, 1, 1, 1), (1, 2, 0, 1), (1, 3, 1, 3)]
)  # a log(-log) spread that overflows
@settings(max_examples=150, deadline=None)
def test_incidence_is_the_plain_loop(rows: list[Case]) -> None:
    entry, exit, cause, weight = columns(rows)
    table = cumulative_incidence(entry, exit, cause, weight=weight)
    want = plain_incidence(rows, 2)
    assert list(table.age) == [r["age"] for r in want]
    for ours, name in (
        (table.at_risk, "at_risk"), (table.events, "events"), (table.survival, "survival"),
        (table.incidence, "incidence"), (table.survival_se, "survival_se"),
    ):  # fmt: skip
        theirs = np.array([r[name] for r in want]).reshape(ours.shape)
        np.testing.assert_allclose(ours, theirs, rtol=0, atol=1e-12)
    # Squared: a variance of 0 comes out as rounding, whose root is larger.
    errors = np.array([r["se"] for r in want]).reshape(table.se.shape)
    np.testing.assert_allclose(table.se**2, errors**2, rtol=0, atol=1e-13)


@given(cases(causes=1))
@settings(max_examples=150, deadline=None)
def test_product_limit_is_the_plain_loop(rows: list[Case]) -> None:
    entry, exit, event, weight = columns(rows)
    curve = product_limit(entry, exit, event, weight=weight)
    want = plain_incidence(rows, 1)
    for ours, name in (
        (curve.survival, "survival"), (curve.se, "survival_se"),
        (curve.cumulative_hazard, "hazard"), (curve.cumulative_hazard_se, "hazard_se"),
    ):  # fmt: skip
        np.testing.assert_allclose(ours, [r[name] for r in want], rtol=0, atol=1e-12)


@given(cases())
@settings(max_examples=100, deadline=None)
def test_shares_add_up_and_move_one_way(rows: list[Case]) -> None:
    entry, exit, cause, weight = columns(rows)
    table = cumulative_incidence(entry, exit, cause, weight=weight)
    np.testing.assert_allclose(table.survival + table.incidence.sum(axis=1), 1.0, rtol=0, atol=1e-12)
    assert (np.diff(table.survival, prepend=1.0) <= 0).all()
    assert (np.diff(table.incidence, axis=0, prepend=0.0) >= 0).all()
    shown = np.isfinite(table.lower)
    assert (table.lower[shown] <= table.incidence[shown] + 1e-15).all()
    assert (table.upper[shown] >= table.incidence[shown] - 1e-15).all()


@given(cases(), st.randoms(use_true_random=False))
@settings(max_examples=60, deadline=None)
def test_weight_two_is_the_case_twice_and_order_is_nothing(rows: list[Case], chance: object) -> None:
    entry, exit, cause, weight = columns(rows)
    whole = cumulative_incidence(entry, exit, cause, weight=weight)
    repeated = [r for r in rows for _ in range(r[3])]
    chance.shuffle(repeated)  # type: ignore[attr-defined]
    entry, exit, cause, _ = columns(repeated)
    expanded = cumulative_incidence(entry, exit, cause)
    np.testing.assert_array_equal(whole.incidence, expanded.incidence)
    np.testing.assert_array_equal(whole.se, expanded.se)


@given(cases(causes=1), st.integers(0, 8))
@settings(max_examples=80, deadline=None)
def test_conditioning_divides_the_curve_and_splitting_changes_nothing(rows: list[Case], at: int) -> None:
    entry, exit, event, weight = columns(rows)
    if not (exit > at).any():
        with pytest.raises(NumericError, match="no one is at risk"):
            product_limit(entry, exit, event, condition_on=at)
        return
    conditional = product_limit(entry, exit, event, weight=weight, condition_on=at)
    whole = product_limit(entry, exit, event, weight=weight)
    survived = float(whole.at(at, hold=True)["survival"].iloc[0])
    later = whole.age > at
    np.testing.assert_allclose(conditional.survival * survived, whole.survival[later], rtol=0, atol=1e-12)
    # A stay split in two at any age inside it is the same time at risk.
    inside = (entry < at) & (exit > at)
    halves = product_limit(
        np.concatenate([entry, np.full(inside.sum(), at)]),
        np.concatenate([np.where(inside, at, exit), exit[inside]]),
        np.concatenate([np.where(inside, 0, event), event[inside]]),
        weight=np.concatenate([weight, weight[inside]]),
    )
    np.testing.assert_array_equal(halves.survival, whole.survival)


@given(st.lists(st.tuples(st.floats(0, 0.9), st.floats(0, 0.9)), min_size=1, max_size=12))
def test_conditional_hazards_by_odds(rows: list[tuple[float, float]]) -> None:
    survival, incidence = incidence_from_hazards(rows)
    left, gone = 1.0, [0.0, 0.0]
    for row, s, f in zip(rows, survival, incidence, strict=True):
        odds = [p / (1 - p) for p in row]
        gone = [g + left * o / (1 + sum(odds)) for g, o in zip(gone, odds, strict=True)]
        left /= 1 + sum(odds)
        assert s == pytest.approx(left, abs=1e-13)
        assert list(f) == pytest.approx(gone, abs=1e-13)


def test_certain_hazards() -> None:
    survival, incidence = incidence_from_hazards([[0.5, 0.0], [1.0, 0.3], [0.5, 0.5]])
    assert list(survival) == [0.5, 0.0, 0.0]
    assert list(incidence[-1]) == [1.0, 0.0]
    with pytest.raises(NumericError, match="row 1: two causes are certain"):
        incidence_from_hazards([[0.1, 0.1], [1.0, 1.0]])
    with pytest.raises(UsageError, match=r"1\.5 in row 0, cause 1"):
        incidence_from_hazards([[0.1, 1.5]])


def test_entry_at_the_age_of_an_exit_is_not_at_risk_there() -> None:
    curve = product_limit([0, 0, 5], [5, 8, 9], [1, 1, 0])
    assert list(curve.at_risk) == [2, 2]


def test_risk_set_that_empties_is_named_and_conditioned_away() -> None:
    entry = [0, 3, 3, 3, 3, 3, 3]
    exit = [2, 5, 6, 7, 8, 9, 9]
    event = [1, 1, 0, 1, 0, 1, 0]
    curve = product_limit(entry, exit, event)
    assert curve.emptied_at == 2
    assert curve.survival[-1] == 0
    start = first_supported_age(entry, exit, minimum_at_risk=3)
    assert start == 3  # between 2 and 3 no one is watched
    with pytest.raises(
        NumericError, match=r"only 1 are at risk after age 0, fewer than 3.*Condition on age 3"
    ):
        product_limit(entry, exit, event, minimum_at_risk=3)
    kept = product_limit(entry, exit, event, condition_on=start, minimum_at_risk=3)
    assert kept.emptied_at is None
    assert list(kept.survival) == pytest.approx([5 / 6, 5 / 6 * 3 / 4])
    assert kept.stopped_at == 8
    at = kept.at([2, 3, 8, 8.5])["survival"]
    assert np.isnan(at[[0, 3]]).all()
    assert product_limit(entry, exit, event, condition_on=2).emptied_at == 2
    assert list(at[[1, 2]]) == pytest.approx([1.0, 5 / 6 * 3 / 4])
    with pytest.raises(NumericError, match="at most 6 are at risk"):
        product_limit(entry, exit, event, minimum_at_risk=7)
    with pytest.raises(NumericError, match="at most 6 are at risk"):
        first_supported_age(entry, exit, minimum_at_risk=7)


def test_fractional_weights_do_not_leave_a_survivor() -> None:
    """0.1 + 0.2 + 0.3 - 0.1 - 0.2 is not 0.3 in binary; the last exit still takes everyone."""
    curve = product_limit([0, 0, 0], [1, 2, 3], [1, 1, 1], weight=[0.1, 0.2, 0.3])
    assert curve.survival[-1] == 0
    assert curve.emptied_at is None


def test_no_exits_is_a_curve_without_rows() -> None:
    curve = product_limit([0, 0], [4, 5], [0, 0])
    assert curve.to_frame().empty
    assert list(curve.at([0, 5, 6])["survival"].fillna(-1)) == [1, 1, -1]
    table = cumulative_incidence([0, 0], [4, 5], [0, 0])
    assert list(table.to_frame().columns[:4]) == ["age", "at_risk", "survival", "survival_se"]


def test_results_cannot_be_changed() -> None:
    curve = product_limit([0, 0], [4, 5], [1, 0])
    with pytest.raises(FrozenInstanceError):
        curve.age = np.zeros(1)  # type: ignore[misc]
    with pytest.raises(ValueError, match="read-only"):
        curve.survival[0] = 2


def test_bad_cases_are_all_named() -> None:
    with pytest.raises(DataError) as caught:
        product_limit([0, 2, np.nan, 0], [1, 2, 3, 4], [0, 0, 1, 7], weight=[1, 1, 1, -1])
    assert [p.code for p in caught.value.problems] == [
        "age_not_finite", "exit_not_after_entry", "unknown_event", "weight_not_positive",
    ]  # fmt: skip
    assert "case 1" in str(caught.value)
    with pytest.raises(UsageError, match="same n"):
        product_limit([0], [1, 2], [0, 0])
    with pytest.raises(UsageError, match="level"):
        product_limit([0], [1], [1], level=95)
    with pytest.raises(UsageError, match="causes"):
        cumulative_incidence([0], [1], [1], causes=())


@pytest.mark.parametrize("late", [False, True])
def test_standard_errors_are_the_spread_of_repeated_samples(late: bool) -> None:
    """600 samples of 400 cases, two causes, censoring: mean se within 3 Monte Carlo errors of the spread."""
    rng = np.random.default_rng(20240 + late)
    repeats, n, at = 600, 400, 12
    values, errors = np.empty((repeats, 2)), np.empty((repeats, 2))
    for r in range(repeats):
        entry = rng.integers(0, 7, n) if late else np.zeros(n, dtype=int)
        age = entry + rng.geometric(0.05, n)
        end = entry + rng.integers(4, 20, n)
        cause = np.where(age <= end, rng.integers(1, 3, n), 0)
        table = cumulative_incidence(entry, np.minimum(age, end), cause)
        row = table.at(at).iloc[0]
        values[r] = row["incidence_default"], row["survival"]
        errors[r] = row["se_default"], row["survival_se"]
    truth = np.array([0.5 * (1 - 0.95**at), 0.95**at])
    spread = values.std(axis=0, ddof=1)
    assert (np.abs(values.mean(axis=0) - truth) < 4 * spread / math.sqrt(repeats)).all()
    ratio = errors.mean(axis=0) / spread
    assert (np.abs(ratio - 1) < 3 / math.sqrt(2 * repeats)).all(), ratio
