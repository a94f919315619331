"""Cumulative incidence of what came, against plain counting and a loop over steps."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from stresskit.analyses.observed import LOST, MATURED, SURVIVED, incidence


def slow(end: list[int], outcome: list[int], cause: int, steps: int) -> list[float]:
    """Aalen-Johansen by its definition, a step at a time over lists."""
    total, stay, out = 0.0, 1.0, []
    for h in range(1, steps + 1):
        there = [o for e, o in zip(end, outcome, strict=True) if e >= h or o == MATURED]
        exits = [o for e, o in zip(end, outcome, strict=True) if e == h and o > 0]
        if there:
            total += stay * exits.count(cause) / len(there)
            stay *= 1 - len(exits) / len(there)
        out.append(total)
    return out


@given(
    st.lists(
        st.tuples(st.integers(1, 6), st.sampled_from([SURVIVED, LOST, MATURED, 1, 2])),
        min_size=1,
        max_size=40,
    )
)
def test_against_a_loop(loans: list[tuple[int, int]]) -> None:
    # a loan that survives is seen to the end
    end = [6 if o == SURVIVED else e for e, o in loans]
    outcome = [o for _, o in loans]
    found = incidence(np.array(end), np.array(outcome), 1, 6)
    np.testing.assert_allclose(found, slow(end, outcome, 1, 6), atol=1e-12)
    if LOST not in outcome:
        share = sum(o == 1 for o in outcome) / len(outcome)
        assert abs(found[-1] - share) < 1e-12


def test_by_hand() -> None:
    """Ten loans: default in 1, one lost after 1, payoff in 2, default in 3; 1/10 + 0.9 * 0 + 0.9 * 7/8 * 1/7."""
    end = np.array([1, 1, 2, 3, 3, 3, 3, 3, 3, 3])
    outcome = np.array([1, LOST, 2, 1, MATURED, 0, 0, 0, 0, 0])
    np.testing.assert_allclose(incidence(end, outcome, 1, 3), [0.1, 0.1, 0.1 + 0.9 * 7 / 8 / 7], rtol=1e-14)
