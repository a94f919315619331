"""Kernels of the hazard room against plain loops."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stresskit.kernels.blocks import block_cuts, counts_along, in_order, stable_order, stay_rows
from stresskit.kernels.linalg import dependent_columns, inverse_scaled, solve_scaled

STAYS = st.lists(st.tuples(st.integers(0, 9), st.integers(1, 6)), min_size=1, max_size=25)


@settings(max_examples=60, deadline=None)
@given(STAYS)
def test_rows_and_counts_of_stays(stays: list[tuple[int, int]]) -> None:
    entry = np.array([a for a, _ in stays])
    exit_ = entry + np.array([n for _, n in stays])
    stay, age = stay_rows(entry, exit_)
    plain = [(i, a) for i in range(entry.size) for a in range(entry[i] + 1, exit_[i] + 1)]
    assert list(zip(stay.tolist(), age.tolist(), strict=True)) == plain
    counts = counts_along(entry, exit_, np.ones(entry.size), 16)
    np.testing.assert_array_equal(counts, [sum(a == k for _, a in plain) for k in range(16)])


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.tuples(st.integers(0, 8), st.integers(1, 40)), min_size=1, max_size=60), st.integers(1, 100)
)
def test_blocks_hold_whole_groups_and_every_item_once(items: list[tuple[int, int]], target: int) -> None:
    group = np.sort([g for g, _ in items])
    size = np.array([n for _, n in items])
    cuts = block_cuts(size, group, target)
    assert cuts[0] == 0
    assert cuts[-1] == size.size
    assert (np.diff(cuts) > 0).all()
    for a, b in itertools.pairwise(cuts):
        if b < size.size:
            assert group[b - 1] != group[b]
        assert size[a:b].sum() <= target + max(size[group == g].sum() for g in group)


def test_blocks_come_in_order_whatever_the_threads() -> None:
    for threads in (1, 2, 5):
        assert list(in_order(lambda b: b * b, 7, threads)) == [b * b for b in range(7)]


@pytest.mark.parametrize("padding", [0, 4], ids=["track by track", "all tracks at once"])
def test_sums_along_tracks(padding: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("stresskit.kernels.cohorts.PADDING", padding)
    starts = np.array([0, 3, 4, 9])
    values = np.random.default_rng(0).normal(size=(9, 2))
    for a, b in itertools.pairwise(starts):
        for i in range(a, b):
            np.testing.assert_allclose(running(values, starts)[i], values[a : i + 1].sum(axis=0), rtol=1e-13)
            np.testing.assert_allclose(remaining(values, starts)[i], values[i:b].sum(axis=0), rtol=1e-13)


@settings(max_examples=40, deadline=None)
@given(
    st.lists(st.tuples(st.integers(0, 3), st.integers(0, 5)), min_size=1, max_size=40),
    st.sampled_from([6, 1 << 17]),
)
def test_stable_order_by_two_keys(items: list[tuple[int, int]], bound: int) -> None:
    first, second = (np.array(k) for k in zip(*items, strict=True))
    plain = sorted(range(len(items)), key=lambda i: items[i])
    assert stable_order((first, 4), (second, bound)).tolist() == plain


def _stays_on_two_tracks() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cells 0..5 and 6..10, boundaries 0 and 6; sorted by track and last cell."""
    enter = np.array([0, 1, 0, 0, 6, 8, 6])
    leave = np.array([1, 3, 4, 5, 7, 9, 10])
    return enter, leave, np.array([0, 0, 0, 0, 1, 1, 1])


def test_masses_that_leave_and_enter_give_what_is_at_risk() -> None:
    enter, leave, _ = _stays_on_two_tracks()
    boundary = np.isin(np.arange(11), [0, 6])
    mass, column = np.arange(1.0, 8.0), np.array([[1.0], [0], [2], [1], [3], [1], [0]])
    pattern = ends(enter, leave, boundary)
    both = np.column_stack([np.ones(7), column])
    np.testing.assert_array_equal(pattern.spread(mass, both), pattern.add(mass[:, None] * both))
    leaving = remaining(pattern.spread(mass, both), np.array([0, 6, 11]))
    at_risk, weighted = leaving[:, 0], leaving[:, 1:]
    for cell in np.flatnonzero(~boundary):
        inside = (enter < cell) & (cell <= leave)
        assert at_risk[cell] == pytest.approx(mass[inside].sum())
        assert weighted[cell, 0] == pytest.approx((mass * column[:, 0])[inside].sum())


@pytest.mark.parametrize("size", [1, 4, 1 << 15])
def test_tiles_cover_every_stay_and_cell_at_risk_once(size: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("stresskit.kernels.cohorts.TILE", size)
    enter, leave, track = _stays_on_two_tracks()
    seen = np.zeros((7, 11))
    for tile in tiles(enter, leave, track):
        seen[tile.rows, tile.cells] += tile.outer(np.ones(7), np.ones(11))
    cell = np.arange(11)
    np.testing.assert_array_equal(seen, (cell > enter[:, None]) & (cell <= leave[:, None]))


def test_few_logarithms_give_the_sum_of_logarithms() -> None:
    rng = np.random.default_rng(1)
    for columns in (1, 7, 8, 30):
        q = 1.0 - 10.0 ** rng.uniform(-9, -0.001, (50, columns))
        np.testing.assert_allclose(log_of_products(q, small=False), np.log(q).sum(axis=1), rtol=1e-12)
        tiny = q * 1e-200
        np.testing.assert_array_equal(log_of_products(tiny, small=True), np.log(tiny).sum(axis=1))


def test_dependent_columns_are_found_with_their_combination() -> None:
    rng = np.random.default_rng(2)
    x = np.column_stack([np.ones(300), rng.normal(size=(300, 3))])
    assert dependent_columns(x.T @ x, constant=0) == []
    x = np.column_stack([x, 2.0 * x[:, 1] - 5.0 * x[:, 3] + 1.0])
    [(column, weights)] = dependent_columns(x.T @ x, constant=0)
    assert weights[column] == 1.0
    assert set(np.flatnonzero(np.abs(weights) > 1e-6)) == {1, 3, 4}
    x[:, 2] = 4.0
    assert next(c for c, _ in dependent_columns(x.T @ x, constant=0)) == 2


def test_scaled_solves_survive_units_far_apart_and_refuse_singular_matrices() -> None:
    rng = np.random.default_rng(3)
    x = rng.normal(size=(100, 3)) * np.array([1.0, 1e9, 1e-7])
    a = x.T @ x
    np.testing.assert_allclose(solve_scaled(a, a @ np.array([1.0, 2e-9, 3e7])), [1.0, 2e-9, 3e7], rtol=1e-9)
    unit = np.sqrt(np.outer(np.diag(a), np.diag(a)))
    np.testing.assert_allclose((inverse_scaled(a) * unit) @ (a / unit), np.eye(3), atol=1e-12)
    for bad in (np.zeros((2, 2)), np.ones((2, 2)), np.full((2, 2), np.nan)):
        with pytest.raises(np.linalg.LinAlgError):
            solve_scaled(bad, np.ones(2))
