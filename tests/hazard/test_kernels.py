"""Kernels of the hazard room against plain loops."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from stresskit.hazard.link import LINKS
from stresskit.kernels import cohorts, counts, event_rows, lines, power_sums, row_values, walks
from stresskit.kernels.blocks import block_cuts, counts_along, in_order, stay_rows
from stresskit.kernels.linalg import dependent_columns, inverse_scaled, solve_scaled

Floats = NDArray[np.float64]
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


def test_sums_along_tracks() -> None:
    starts = np.array([0, 3, 4, 9])
    values = np.random.default_rng(0).normal(size=(9, 2))
    left = values.copy()
    cohorts.at_risk(left, starts)
    for a, b in itertools.pairwise(starts):
        assert (left[a] == 0.0).all()
        for i in range(a, b):
            if i > a:
                np.testing.assert_allclose(left[i], values[i:b].sum(axis=0), rtol=1e-13)


@settings(max_examples=60, deadline=None)
@given(
    st.lists(
        st.tuples(st.integers(0, 3), st.integers(0, 5), st.integers(1, 5), st.booleans()),
        min_size=1,
        max_size=40,
    ),
    st.booleans(),
)
def test_stays_lie_by_track_last_age_and_entry(
    items: list[tuple[int, int, int, bool]], survived: bool
) -> None:
    number, track = np.unique([t for t, *_ in items], return_inverse=True)
    entry, length, event = (np.array(k) for k in list(zip(*items, strict=True))[1:])
    exit_ = entry + length
    last = exit_ - (event & survived)
    order, of_track, enter, until, leave, low, starts = cohorts.laid_out(
        track, number.size, entry, exit_, event, survived
    )
    plain = sorted(range(len(items)), key=lambda i: (track[i], last[i], entry[i]))
    assert order.tolist() == plain
    for k, i in enumerate(plain):
        t = track[i]
        mine = track == t
        first = starts[t] - entry[mine].min()
        assert (of_track[k], low[t]) == (t, entry[mine].min())
        assert (enter[k] - first, until[k] - first, leave[k] - first) == (entry[i], last[i], exit_[i])
        assert starts[t + 1] - starts[t] == exit_[mine].max() - entry[mine].min() + 1


def _stays_on_two_tracks() -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Cells 0..5 and 6..10, boundaries 0 and 6; sorted by track and last cell."""
    enter = np.array([0, 1, 0, 0, 6, 8, 6])
    leave = np.array([1, 3, 4, 5, 7, 9, 10])
    return enter, leave, np.array([0, 0, 0, 0, 1, 1, 1])


BOUNDARY = np.isin(np.arange(11), [0, 6])
STARTS = np.array([0, 6, 11])
#: Two numbers (one of them the ones), and two categories of levels 8, 9 and 10, 11; 15 stands for a reference level.
USED, SIZE = 2, 16
DENSE = np.zeros((7, 8))
DENSE[:, :2] = np.column_stack([np.ones(7), [1.0, 0, 2, 1, 3, 1, 0]])
CODES = np.array([[8, 10], [9, 15], [15, 11], [8, 11], [9, 10], [15, 15], [8, 10]], dtype=np.int32)
WIDE = np.zeros((7, SIZE))
WIDE[:, :8] = DENSE
np.put_along_axis(WIDE, CODES.astype(np.int64), 1.0, axis=1)
SEEN = np.array([0, 1, 8, 9, 10, 11])


def _square(weight: Floats) -> Floats:
    return WIDE[:, SEEN].T @ (WIDE[:, SEEN] * weight[:, None])


def _seen(lower: Floats) -> Floats:
    """Both halves of the columns that somebody reads."""
    return walks.mirrored(lower.copy(), 8)[np.ix_(SEEN, SEEN)]


def test_the_linear_predictor_of_stays() -> None:
    rng = np.random.default_rng(7)
    weights, add, out = rng.normal(size=SIZE), rng.normal(size=7), np.empty(7)
    weights[-1] = 0.0
    walks.combined(DENSE, CODES, weights, add, out)
    np.testing.assert_allclose(out, WIDE @ weights + add, rtol=1e-13)


def test_products_of_columns_and_single_rows_added_to_them() -> None:
    rng = np.random.default_rng(3)
    score, information = rng.normal(size=7), rng.random(7)
    total, products = walks.squares(score, information, DENSE, CODES, SIZE)
    np.testing.assert_allclose(total[SEEN], score @ WIDE[:, SEEN], rtol=1e-13)
    np.testing.assert_allclose(_seen(products), _square(information), rtol=1e-13)
    stay, cell, s, h = np.array([2, 6]), np.array([4, 10]), rng.normal(size=2), rng.random(2)
    by_cell, cross = np.zeros(11), np.zeros((11, SIZE))
    walks.events(stay, cell, s, h, DENSE, CODES, USED, total, products, by_cell, cross)
    more = np.zeros(7)
    more[stay] = h
    np.testing.assert_allclose(_seen(products), _square(information + more), rtol=1e-13)
    np.testing.assert_allclose(total[SEEN], (score @ WIDE + s @ WIDE[stay])[SEEN], rtol=1e-13)
    np.testing.assert_array_equal(by_cell[cell], s)
    np.testing.assert_array_equal(cross[cell], h[:, None] * WIDE[stay])


@pytest.mark.parametrize("expected", [False, True])
def test_event_rows_follow_the_link(expected: bool) -> None:
    eta = np.concatenate(
        [
            np.linspace(-40.0, 6.0, 400),
            np.log([0.0999, 0.1, 0.1001]),
            [np.log(1e-3), np.log(0.5), np.log(np.log(2.0)), -700.0],
        ]
    )
    weight = np.random.default_rng(1).random(eta.size)
    found = event_rows.log_hazard(eta, weight, expected)
    for ours, plain in zip(
        found, LINKS["cloglog"].event(eta, "expected" if expected else "observed"), strict=True
    ):
        np.testing.assert_allclose(ours, weight * plain, rtol=2e-14, atol=1e-300)
    beyond = event_rows.log_hazard(np.array([7.0, 800.0]), np.ones(2), expected)
    np.testing.assert_array_equal(np.stack(beyond), 0.0)


def test_polynomials_over_stays_and_over_cells_equal_sums_over_rows() -> None:
    """Stay 3 is beyond the limit, so powers leave it out everywhere."""
    enter, leave, track = _stays_on_two_tracks()
    rng = np.random.default_rng(4)
    exp_s, weight, small = rng.random(7) + 0.1, rng.random(7), np.arange(7) != 3
    exp_z = np.where(BOUNDARY, 0.0, rng.random(11))
    c, together = rng.normal(size=(3, 4)), rng.normal(size=3)
    power, sums, top = power_sums.tables(exp_z, 4, STARTS, 1e25)
    np.testing.assert_array_equal(top, [exp_z[:6].max(), exp_z[6:].max()])
    stays = power_sums.of_stays(exp_s, sums, small, enter, leave, 0, c)
    late = walks.late_entries(enter, 0, BOUNDARY)
    cells, cross = walks.powers(
        exp_s, weight, small, DENSE, CODES, SIZE, enter, leave, 0, late, STARTS, power, c[:2], together
    )
    plain_cells, plain_cross = np.zeros((2, 11)), np.zeros((11, SIZE))
    for i in range(7):
        inside = np.arange(enter[i] + 1, leave[i] + 1) if small[i] else np.arange(0)
        x = exp_s[i] * exp_z[inside]
        p = np.stack([x, x**2, x**3, x**4])
        np.testing.assert_allclose(stays[:, i], (c @ p).sum(axis=1), rtol=1e-12, atol=1e-15)
        plain_cells[:, inside] += weight[i] * (c[:2] @ p)
        plain_cross[inside] += weight[i] * np.outer(together @ p[:3], WIDE[i])
    np.testing.assert_allclose(cells, plain_cells, rtol=1e-11, atol=1e-13)
    np.testing.assert_allclose(cross[:, SEEN], plain_cross[:, SEEN], rtol=1e-11, atol=1e-13)
    assert track[-1] == 1


@pytest.mark.parametrize("base", [0, 100])
def test_row_values_by_stay_and_by_cell(base: int) -> None:
    """More stays than are taken together, some of which enter together, one without rows."""
    rng = np.random.default_rng(5)
    enter = np.sort(rng.integers(0, 4, 23))
    last = enter + rng.integers(0, 9, 23)
    place = row_values.places(enter, last)
    cell = np.concatenate([np.arange(a + 1, b + 1) for a, b in zip(enter, last, strict=True)])
    stay = np.repeat(np.arange(23), last - enter)
    by_stay, by_cell, columns = (
        rng.random(23),
        rng.random(13),
        rng.normal(size=(23, 3)) * (rng.random((23, 3)) > 0.6),
    )
    np.testing.assert_array_equal(
        row_values.products(by_stay, by_cell, enter + base, base, place), by_stay[stay] * by_cell[cell]
    )
    np.testing.assert_array_equal(
        row_values.added(by_stay, by_cell, enter + base, base, place), by_stay[stay] + by_cell[cell]
    )
    values = rng.normal(size=cell.size)
    np.testing.assert_allclose(
        row_values.per_stay(values, place), np.bincount(stay, values, 23), rtol=1e-12, atol=1e-14
    )
    found = np.zeros((3, 13))
    row_values.per_cell(values, columns, enter + base, base, place, found)
    plain = np.stack([np.bincount(cell, values * columns[stay, j], 13) for j in range(3)])
    np.testing.assert_allclose(found, plain, rtol=1e-12, atol=1e-13)
    z = rng.normal(size=(13, 2))
    plain = np.stack([np.bincount(stay, values * z[cell, j], 23) for j in range(2)], axis=1)
    found = row_values.cell_columns(values, z, enter + base, base, place)
    np.testing.assert_allclose(found, plain, rtol=1e-12, atol=1e-13)


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


def test_what_is_at_risk_row_by_row() -> None:
    rng = np.random.default_rng(11)
    m, loans = 200, 60
    loan, origin, entry = np.sort(rng.integers(0, loans, m)), rng.integers(90, 110, m), rng.integers(0, 9, m)
    exit_, event, weight = entry + rng.integers(1, 20, m), rng.random(m) < 0.3, rng.random(m)
    first, last, oldest, fewest, rows = counts.ends(origin, entry, exit_)
    table = [(i, a) for i in range(m) for a in range(entry[i] + 1, exit_[i] + 1)]
    stay, age = np.array(table).T
    period = origin[stay] + age
    assert (first, last, oldest, rows) == (period.min(), period.max(), age.max(), stay.size)
    assert fewest == (exit_ - entry).min()
    found = counts.at_risk_and_events(
        loan, origin, entry, exit_, event, weight, (first, last - first + 1, oldest + 1, loans)
    )
    ends = event[stay] & (age == exit_[stay])
    for k, label in enumerate((age, period - first, loan[stay])):
        for j, chosen in enumerate((np.ones(stay.size, dtype=bool), ends)):
            plain = np.zeros(found[2 * k].size)
            np.add.at(plain, label[chosen], weight[stay][chosen])
            np.testing.assert_allclose(found[2 * k + j], plain, rtol=1e-12, atol=1e-12)


def test_sums_by_level() -> None:
    rng = np.random.default_rng(12)
    level, weight = rng.integers(0, 5, 100).astype(np.int32), rng.random(100)
    np.testing.assert_array_equal(counts.by_level(level, weight, 6), np.bincount(level, weight, 6))


@pytest.mark.parametrize("used", [0, 1, 7, 8])
def test_columns_of_loans_side_by_side(used: int) -> None:
    rng = np.random.default_rng(13)
    columns, at = rng.random((lines.AT_ONCE, 30)), rng.integers(0, 30, 50)
    out = np.full((50, 24), 9.0)
    lines.put(tuple(columns), used, at, out, 8, 16)
    assert (out[:, 0] == 1.0).all()
    np.testing.assert_array_equal(out[:, 8 : 8 + used], columns[:used, at].T)
    assert (out[:, 8 + used : 16] == 0.0).all()
    assert (out[:, 1:8] == 9.0).all()
    assert (out[:, 16:] == 9.0).all()
