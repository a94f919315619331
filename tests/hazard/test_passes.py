"""The compiled passes over blocks of stays, against loops over their rows with the formulas of the link."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray

from stresskit.hazard.link import LINKS, InformationKind
from stresskit.hazard.powers import link_powers
from stresskit.kernels import hazard_pass, hazard_scores, power_pass, score_pass, stay_blocks, walks
from stresskit.kernels.vectors import whole

Floats = NDArray[np.float64]

#: Cells 0..5 and 6..10 of two tracks, boundaries 0 and 6.
STARTS = np.array([0, 6, 11])
ENTER = np.array([0, 1, 0, 0, 6, 8, 6, 6])
#: Last cells without event; the next one is that of the event. Rows of the logit follow the pattern in both.
SURVIVED = np.array([1, 3, 4, 4, 6, 8, 9, 9])
EVENT_AT = np.array([0, 3, 4, 7])
WEIGHT = np.array([1.0, 2.0, 0.5, 1.0, 3.0, 1.0, 1.5, 1.0])
#: The ones, two numbers and zeros; two categories of levels 8, 9 and 10, 11; 15 stands for a reference level.
USED, SIZE, KC = 3, 16, 2
CODES = np.array([[8, 10], [9, 15], [15, 11], [8, 11], [9, 10], [15, 15], [8, 10], [9, 11]], dtype=np.int32)
PLACE = np.array([0, 1, 2, 8, 9, 10, 11])
V = whole(KC)
PERIOD = np.array([0, 0, 1, 2, 3, 4, 0, 2, 3, 4, 5])


@dataclass
class Small:
    """Eight stays, their coefficients, and the rows that sums go over."""

    link: str
    stays: stay_blocks.Stays
    blocks: stay_blocks.Blocks
    x: Floats
    z: Floats
    weights: Floats
    eta: Floats

    @property
    def exp_z(self) -> Floats:
        out = np.exp(self.z @ np.array([0.3, -0.2]))
        out[STARTS[:-1]] = 0.0
        return out

    @property
    def z_event(self) -> Floats:
        return self.z[self.stays.event_cell] @ np.array([0.3, -0.2])

    def rows(self, kind: InformationKind) -> list[tuple[int, int, Floats, bool]]:
        """(stay, cell, weighted (log-likelihood, score, information), event) of every row."""
        link, out = LINKS[self.link], []
        for i in range(ENTER.size):
            events = self.stays.event_cell[i == EVENT_AT]
            for cell in sorted({*range(ENTER[i] + 1, SURVIVED[i] + 1), *events.tolist()}):
                of = link.event if cell in events else link.survive
                found = np.array(of(self.eta[i] + self.z[cell] @ np.array([0.3, -0.2]), kind))
                out.append((i, cell, WEIGHT[i] * found, cell in events))
        return out


def _small(link: str, cuts: list[int], *, level: float = -3.0, shift: Floats | None = None) -> Small:
    rng = np.random.default_rng(11)
    dense = np.zeros((ENTER.size, 8))
    dense[:, 0], dense[:, 1:USED] = 1.0, rng.normal(size=(ENTER.size, 2))
    x = np.zeros((ENTER.size, SIZE))
    x[:, :8] = dense
    np.put_along_axis(x, CODES.astype(np.int64), 1.0, axis=1)
    flat = np.concatenate([rng.normal(size=11 * KC), np.full(8, 7.0)])
    weights = np.zeros(SIZE)
    weights[PLACE] = rng.normal(0.0, 0.3, PLACE.size)
    weights[0] = level
    offset = rng.normal(0.0, 0.1, ENTER.size) if shift is None else shift
    last = SURVIVED.copy()
    if link == "logit":
        last[EVENT_AT] += 1
    boundary = np.isin(np.arange(11), STARTS[:-1])
    track = np.searchsorted(STARTS, ENTER, side="right") - 1
    late = [
        walks.late_entries(ENTER[a:b], STARTS[track[a]], boundary[STARTS[track[a]] :]) + a
        for a, b in pairwise(cuts)
    ]
    stays = stay_blocks.Stays(
        dense, CODES, WEIGHT, offset, ENTER, last, np.concatenate(late).astype(np.int64), STARTS, flat, KC,
        EVENT_AT, SURVIVED[EVENT_AT] + 1,
    )  # fmt: skip
    at = np.array(cuts)
    blocks = stay_blocks.Blocks(
        at,
        np.searchsorted(EVENT_AT, at),
        np.cumsum([0, *(p.size for p in late)]),
        track[at[:-1]],
        track[at[1:] - 1],
    )
    return Small(
        link, stays, blocks, x, flat[: 11 * KC].reshape((11, KC)), weights, x[:, :15] @ weights[:15] + offset
    )


def _plain(small: Small, kind: InformationKind) -> dict[str, Floats]:
    """Sums over all rows with the loan columns in use, and the cell columns."""
    out = {
        "llf": np.zeros(()), "loan": np.zeros(7), "loans": np.zeros((7, 7)), "cell": np.zeros(KC),
        "both": np.zeros((KC, 7)), "cells": np.zeros((KC, KC)),
    }  # fmt: skip
    for i, cell, (llf, score, information), _ in small.rows(kind):
        x, z = small.x[i, PLACE], small.z[cell]
        out["llf"] += llf
        out["loan"] += score * x
        out["cell"] += score * z
        out["loans"] += information * np.outer(x, x)
        out["both"] += information * np.outer(z, x)
        out["cells"] += information * np.outer(z, z)
    return out


def _compare(row: Floats, plain: dict[str, Floats], *, only_information: bool, tolerance: float) -> None:
    sums = stay_blocks.split(row, SIZE, V)
    lower = np.tril(sums.cells[:KC, :KC])
    found = {
        "llf": np.asarray(sums.llf),
        "loan": sums.loan[PLACE],
        "loans": walks.mirrored(sums.loans.copy(), 8)[np.ix_(PLACE, PLACE)],
        "cell": sums.cell[:KC],
        "both": sums.both[:KC, PLACE],
        "cells": lower + np.tril(lower, -1).T,
    }
    for name in ("loans", "both", "cells") if only_information else tuple(found):
        size = np.abs(plain[name]).max()
        np.testing.assert_allclose(found[name], plain[name], rtol=0, atol=tolerance * size, err_msg=name)


CUTS = [[0, 8], [0, 2, 4, 8], [0, 3, 8], [0, 1, 4, 6, 8]]


def _written() -> tuple[Floats, Floats]:
    return np.empty(ENTER.size), np.empty(EVENT_AT.size)


@pytest.mark.parametrize("cuts", CUTS)
@pytest.mark.parametrize("level", [-3.0, 1.0])
def test_a_log_hazard_from_running_sums(cuts: list[int], level: float) -> None:
    small = _small("cloglog", cuts, level=level)
    exp_s, event = _written()
    rows = hazard_pass.hazard_pass(
        np.arange(len(cuts) - 1), small.stays, small.blocks, (SIZE, V), small.weights, small.exp_z, small.z_event,
        exp_s, event,
    )  # fmt: skip
    _compare(rows.sum(axis=0), _plain(small, "observed"), only_information=False, tolerance=1e-12)
    np.testing.assert_allclose(exp_s, np.exp(small.eta), rtol=1e-13)
    np.testing.assert_allclose(event, small.eta[EVENT_AT] + small.z_event, rtol=1e-12)


@pytest.mark.parametrize("cuts", CUTS)
@pytest.mark.parametrize("level", [-8.0, -3.0, 2.0], ids=["powers", "some rows", "rows"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("filled", [False, True])
def test_sums_of_powers_and_rows(link: str, level: float, cuts: list[int], filled: bool) -> None:
    small = _small(link, cuts, level=level)
    (exp_s, event), found = _written(), np.full((2, ENTER.size), np.nan)
    if filled:
        exp_s, event = np.exp(small.eta), small.eta[EVENT_AT] + small.z_event
    rows = power_pass.power_pass(
        np.arange(len(cuts) - 1), small.stays, small.blocks, (SIZE, V), link_powers(link).for_pass(link == "cloglog"),
        small.weights, small.exp_z, small.z_event, exp_s, event, filled, found,
    )  # fmt: skip
    plain = _plain(small, "expected")
    _compare(rows.sum(axis=0), plain, only_information=link == "cloglog", tolerance=2e-9)
    expected, variance = np.zeros(ENTER.size), np.zeros(ENTER.size)
    for i in range(ENTER.size):
        p = LINKS[link].probability(
            small.eta[i] + small.z[ENTER[i] + 1 : small.stays.last[i] + 1] @ np.array([0.3, -0.2])
        )
        expected[i], variance[i] = p.sum(), (p * (1.0 - p)).sum()
    np.testing.assert_allclose(found, [expected, variance], rtol=1e-12, atol=1e-16)


@pytest.mark.parametrize("cuts", CUTS)
@pytest.mark.parametrize("level", [-8.0, -3.0, 2.0], ids=["powers", "some rows", "rows"])
@pytest.mark.parametrize("link", ["cloglog", "logit"])
@pytest.mark.parametrize("apart", [[], [1, 6]])
def test_outer_products_of_scores_and_scores_by_period(
    link: str, level: float, cuts: list[int], apart: list[int]
) -> None:
    small, place = _small(link, cuts, level=level), np.full(ENTER.size, -1)
    place[apart] = np.arange(len(apart))
    loan, cell = np.empty(len(apart)), np.empty(len(apart) * V)
    event = small.eta[EVENT_AT] + small.z_event
    some = np.arange(len(cuts) - 1), small.stays, small.blocks, (SIZE, V, 6)
    more = small.exp_z, np.exp(small.eta), event, PERIOD, place, loan, cell
    if link == "cloglog":
        rows = hazard_scores.hazard_scores(*some, *more)
    else:
        rows = score_pass.score_pass(*some, link_powers(link).for_scores(), *more)
    wide = 8 + V
    square, across, among, by_period = np.split(
        rows.sum(axis=0), np.cumsum([wide * wide, SIZE * wide, SIZE * SIZE])
    )
    scores, periods = np.zeros((ENTER.size, 7 + KC)), np.zeros((6, 7 + KC))
    of_ones = np.zeros(ENTER.size)
    for i, c, (_, score, _), _ in small.rows("observed"):
        row = score * np.concatenate([small.x[i, PLACE], small.z[c]])
        scores[i] += row
        periods[PERIOD[c]] += row
        of_ones[i] += score
    together = np.delete(scores, apart, axis=0)
    plain = together.T @ together
    numbers = [*PLACE[:3], 8, 9]
    lower = np.tril(square.reshape((wide, wide))[np.ix_(numbers, numbers)])
    at = np.array([0, 1, 2, 7, 8])
    size = np.abs(plain).max()
    np.testing.assert_allclose(lower, np.tril(plain[np.ix_(at, at)]), rtol=0, atol=1e-9 * size)
    np.testing.assert_allclose(
        across.reshape((SIZE, wide))[np.ix_([8, 9, 10, 11], numbers)],
        plain[np.ix_([3, 4, 5, 6], at)],
        rtol=0,
        atol=1e-9 * size,
    )
    np.testing.assert_allclose(
        among.reshape((SIZE, SIZE))[np.ix_([8, 9, 10, 11], [8, 9, 10, 11])],
        plain[3:7, 3:7],
        rtol=0,
        atol=1e-9 * size,
    )
    found = by_period.reshape((6, SIZE + V))[:, [*PLACE, SIZE, SIZE + 1]]
    np.testing.assert_allclose(found, periods, rtol=0, atol=1e-9 * np.abs(periods).max())
    np.testing.assert_allclose(loan, of_ones[apart], rtol=1e-9)
    np.testing.assert_allclose(cell.reshape((-1, V))[:, :KC], scores[apart, 7:], rtol=1e-8, atol=1e-12)


@pytest.mark.parametrize("cuts", [[0, 8], [0, 3, 8]])
def test_predictors_beyond_what_fits_into_a_power_of_two(cuts: list[int]) -> None:
    """One loan is as good as certain not to default and one to default; what is not a number stays so."""
    shift = np.zeros(ENTER.size)
    shift[1], shift[5], shift[7] = -690.0, -800.0, 20.0
    small = _small("cloglog", cuts, shift=shift)
    exp_s, event = _written()
    args = (
        np.arange(len(cuts) - 1),
        small.stays,
        small.blocks,
        (SIZE, V),
        small.weights,
        small.exp_z,
        small.z_event,
    )
    rows = hazard_pass.hazard_pass(*args, exp_s, event)
    _compare(rows.sum(axis=0), _plain(small, "observed"), only_information=False, tolerance=1e-12)
    np.testing.assert_allclose(exp_s, np.exp(small.eta), rtol=1e-12)
    small.stays.offset[3] = np.nan
    assert np.isnan(hazard_pass.hazard_pass(*args, exp_s, event).sum(axis=0)[0])
