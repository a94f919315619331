"""Splits of a difference against published cases, all orders by hand, and the axioms that define them."""

from __future__ import annotations

import json
from itertools import permutations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from stresskit.analyses.shapley import log_mean_split, shapley, split
from tests.shared_inputs import shared

#: misc_checks.json, "attribution": PD 0.02 -> 0.05, LGD 0.40 -> 0.55, EAD 100 -> 110; EL 0.8 -> 3.025. Its figures were made
#: outside this project: Shapley values by the formula over subsets, LMDI by logarithmic means.
BEFORE, AFTER = {"PD": 0.02, "LGD": 0.4, "EAD": 100.0}, {"PD": 0.05, "LGD": 0.55, "EAD": 110.0}
SHAPLEY = {"PD": 1.5, "LGD": 0.555, "EAD": 0.17}
LMDI = {"PD": 1.5328294137845717, "LGD": 0.5327296555641406, "EAD": 0.15944093065128845}


def product_game() -> np.ndarray:
    names = list(BEFORE)
    return np.array(
        [np.prod([(AFTER if m >> i & 1 else BEFORE)[n] for i, n in enumerate(names)]) for m in range(8)]
    )


def by_orders(values: np.ndarray) -> np.ndarray:
    """Every order in which players can join, each as good as another."""
    k = values.shape[0].bit_length() - 1
    out, orders = np.zeros((k, *values.shape[1:])), list(permutations(range(k)))
    for order in orders:
        there = 0
        for i in order:
            out[i] += (values[there | 1 << i] - values[there]) / len(orders)
            there |= 1 << i
    return out


def test_a_product_of_three_splits_as_published() -> None:
    np.testing.assert_allclose(shapley(product_game()), list(SHAPLEY.values()), rtol=1e-12)
    found = log_mean_split(*({n: np.array(v) for n, v in side.items()} for side in (BEFORE, AFTER)))
    for name, value in LMDI.items():
        assert float(found[name]) == pytest.approx(value, rel=1e-12)


def test_the_shared_check_still_says_so() -> None:
    file = shared("checks/misc_checks.json")
    found = json.loads(file.read_text())["attribution"]
    assert found["shapley"] == pytest.approx(SHAPLEY)
    assert found["lmdi"] == pytest.approx(LMDI)


games = arrays(np.float64, (8, 2), elements=st.floats(-1e6, 1e6))


@settings(max_examples=60, deadline=None)
@given(games)
def test_the_formula_is_the_mean_over_all_orders(values: np.ndarray) -> None:
    scale = max(1.0, np.abs(values).max())
    np.testing.assert_allclose(shapley(values), by_orders(values), atol=1e-12 * scale)


@settings(max_examples=60, deadline=None)
@given(games, st.permutations([0, 1, 2]))
def test_efficiency_and_names_do_not_matter(values: np.ndarray, order: list[int]) -> None:
    scale = max(1.0, np.abs(values).max())
    found = shapley(values)
    np.testing.assert_allclose(found.sum(axis=0), values[-1] - values[0], atol=1e-12 * scale)
    moved = np.array([sum(1 << order[i] for i in range(3) if m >> i & 1) for m in range(8)])
    renamed = np.empty_like(values)
    renamed[moved] = values
    np.testing.assert_allclose(shapley(renamed)[order], found, atol=1e-12 * scale)


@settings(max_examples=60, deadline=None)
@given(arrays(np.float64, 4, elements=st.floats(-1e6, 1e6)))
def test_a_player_that_changes_nothing_gets_exactly_nothing(small: np.ndarray) -> None:
    values = np.concatenate([small, small])  # the third player joins, and nothing happens
    found = split(values)
    assert found.shares[2] == 0.0
    assert found.alone[2] == 0.0
    assert found.removed[2] == 0.0
    np.testing.assert_allclose(found.shares[:2], shapley(small), atol=1e-12 * max(1.0, np.abs(small).max()))


@settings(max_examples=60, deadline=None)
@given(arrays(np.float64, 6, elements=st.floats(-1e6, 1e6)))
def test_players_that_do_the_same_get_the_same(x: np.ndarray) -> None:
    # coalitions by (first, second, third): the first two stand for each other
    values = np.array([x[0], x[1], x[1], x[2], x[3], x[4], x[4], x[5]])
    found = shapley(values)
    assert found[0] == pytest.approx(found[1], abs=1e-9 * max(1.0, np.abs(x).max()))


@settings(max_examples=100, deadline=None)
@given(arrays(np.float64, (2, 3), elements=st.one_of(st.just(0.0), st.floats(1e-6, 1e6))))
def test_the_log_mean_split_adds_up_with_nothing_left_even_at_zero(x: np.ndarray) -> None:
    before, after = ({n: np.array(v) for n, v in zip("abc", row, strict=True)} for row in x)
    found = sum(float(v) for v in log_mean_split(before, after).values())
    change = float(np.prod(x[1]) - np.prod(x[0]))
    assert found == pytest.approx(change, rel=1e-9, abs=1e-12 * max(1.0, float(np.prod(x, axis=1).max())))


def test_values_of_some_coalitions_only_are_refused() -> None:
    with pytest.raises(ValueError, match="3 values are not those of all coalitions"):
        shapley(np.zeros(3))
