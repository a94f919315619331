"""Stages of impairment: who has become much riskier since origination, and what is set aside for whom.

IFRS 9, 5.5.3 (lifetime losses after a significant increase in credit risk), 5.5.5 (12-month losses before),
5.5.9 and B5.5.9 (the risk of default over the remaining life, compared with that at initial recognition),
5.5.10 (low credit risk), 5.5.11 (30 days past due). Cited as the source of the mechanics; whether a declared
threshold meets the standard is the bank's judgement.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from stresskit.spec.provisions import Staging

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

#: Measures of one block at each point in time, (b, N + 1) each.
STAGE_MEASURES = ("loans_stage_1", "loans_stage_2", "balance_stage_1", "balance_stage_2", "impairment_stage_1", "impairment_stage_2")  # fmt: skip


@dataclass(frozen=True, slots=True)
class StagePoint:
    """What the stage of a performing loan rests on, arrays of one shape.

    lifetime     PD over the remaining life, given that the loan is on book
    at_origin    the same as it was estimated at origination
    year         PD of the next 12 months, given that the loan is on book
    """

    lifetime: Floats
    at_origin: Floats
    year: Floats


def in_stage_2(point: StagePoint, rule: Staging, past_due: Bools | None = None) -> Bools:
    """Whether each performing loan is in stage 2 by the study's declared rule.

    The comparison with origination (ratio, increase, or both together) and the backstop on the 12-month PD put a
    loan into stage 2; low credit risk takes it back; days past due have the last word.
    """
    ratio = np.zeros(point.lifetime.shape, dtype=bool)
    increase = ratio
    if rule.ratio is not None:
        ratio = point.lifetime > rule.ratio * point.at_origin
    if rule.increase is not None:
        increase = point.lifetime - point.at_origin > rule.increase
    both = rule.ratio is not None and rule.increase is not None and rule.combine == "both"
    worse: Bools = ratio & increase if both else ratio | increase
    if rule.backstop_pd is not None:
        worse = worse | (point.year > rule.backstop_pd)
    if rule.low_risk is not None:
        worse = worse & (point.year > rule.low_risk)
    if past_due is not None:
        worse = worse | past_due
    return worse


def stage_measures(
    second: Bools, *, on_book: Floats, balance: Floats, el_year: Floats, el_rest: Floats
) -> dict[str, Floats]:
    """Expected numbers, balances and impairment of the performing loans by stage; all arrays of one shape.

    el_year, el_rest  expected loss of the next 12 months and of the rest of life, discounted to the point and
                      weighted with the probability of being there
    """
    first = ~second
    return {
        "loans_stage_1": on_book * first,
        "loans_stage_2": on_book * second,
        "balance_stage_1": balance * first,
        "balance_stage_2": balance * second,
        "impairment_stage_1": el_year * first,
        "impairment_stage_2": el_rest * second,
    }


@dataclass(frozen=True, slots=True)
class Stock:
    """What is in default at each point, (..., N + 1).

    held   amount of the cohorts still held
    left   amount of the cohorts that left since the point before; 0 at as_of
    """

    held: Floats
    left: Floats


def default_stock(
    inflow: Floats, opening: Floats, opening_years: NDArray[np.int64], years: NDArray[np.int64], stays: int
) -> Stock:
    """Stock of defaulted amounts when a default of calendar year c is held at the ends of years c .. c + stays - 1.

    inflow          (cells, N + 1) amount of new defaults since the point before, column 0 zero
    opening         (cells, C) amount that defaulted by as_of, by calendar year of default
    opening_years   (C,) those calendar years
    years           (N + 1,) calendar year of each point: as_of, then the year ends
    """
    cohorts = np.concatenate([opening, inflow[:, 1:]], axis=1)
    of = np.concatenate([opening_years, years[1:]])
    enters = np.concatenate([np.zeros(opening_years.size, dtype=np.int64), np.arange(1, years.size)])
    held, left = np.zeros(inflow.shape), np.zeros(inflow.shape)
    for y in range(years.size):
        here = (enters <= y) & (years[y] - of < stays)
        held[:, y] = cohorts[:, here].sum(axis=1)
        if y:
            gone = (enters <= y - 1) & (years[y - 1] - of < stays) & ~here
            left[:, y] = cohorts[:, gone].sum(axis=1)
    return Stock(held, left)
