"""Recoveries through the hazard engine: workouts as a RiskSet in which every unit of currency is an individual.

A case that recovered d_1, d_2, .. gives a stay that ends in "recovered" at each u with d_u > 0, of weight d_u, and one
stay without exit for the rest, to the last workout period in which it is at risk. A row of the pooled stays then
has the log-likelihood d_u log p_u + (n_u - d_u) log(1 - p_u) of a fractional response d_u / n_u with weight n_u
(Papke & Wooldridge 1996), so fit_hazard needs nothing new; errors are clustered by case and by period, never by unit.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from stresskit.core.values import RiskSet
from stresskit.recovery.cases import CURE, Workouts

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

RECOVERED, CURED = "recovered", "cured"
#: Key under ``recovery`` of a study -> cause of its fit.
REGRESSIONS = {"hazard": RECOVERED, "cure_hazard": CURED}


def risk_set_of(w: Workouts) -> RiskSet:
    """Stays of amounts over workout periods; weights add up so that the average case weighs 1.

    Age of a row is its workout period u, its calendar period the period of default + u. Causes: recovered, cured.
    """
    last, left = w.at_risk_until, w.unrecovered()
    period = np.arange(1, w.end + 1)[None, :]
    loan, exit_ = np.nonzero((w.recovered > 0) & (period > w.entered[:, None]) & (period <= last[:, None]))
    amount = w.recovered[loan, exit_]
    rest = left[np.arange(w.n_cases), last]
    still = np.flatnonzero(rest > 0)
    cured = (w.kind == CURE) & (w.closed > 0) & (w.closed <= w.observed)
    stay_loan = np.concatenate([loan, still])
    stay_exit = np.concatenate([exit_ + 1, last[still]])
    cause = np.concatenate([np.ones(loan.size, dtype=np.int64), np.where(cured[still], 2, 0)])
    weight = np.concatenate([amount, rest[still]]) / w.amount.mean()
    order = np.lexsort((stay_exit, stay_loan))
    return RiskSet(
        frequency=w.frequency,
        causes=(RECOVERED, CURED),
        loan_ids=w.case_ids,
        static=w.static,
        stay_loan=stay_loan[order].astype(np.int64),
        stay_origin=w.default[stay_loan[order]],
        stay_entry=w.entered[stay_loan[order]],
        stay_exit=stay_exit[order].astype(np.int64),
        stay_cause=cause[order],
        weight=weight[order],
    )
