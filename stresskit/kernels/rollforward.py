"""Joint probabilities of competing exits, rolled forward over steps.

All arrays are (loans, steps) float64, step h in column h - 1.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

#: Largest cumulative hazard of one period that is told apart from certainty: exp(-LIMIT) ~ 1e-300.
_LIMIT = 690.0


def period_odds(eta: Floats, link: str) -> Floats:
    """Odds P/(1-P) of one cause: exp(eta) for the logit, expm1(exp(eta)) for the cloglog.

    Odds are capped at exp(690): there the period's survival is below 1e-299 and sums of odds
    stay finite. Overwrites nothing.
    """
    with np.errstate(over="ignore"):
        if link == "logit":
            return np.exp(np.minimum(eta, _LIMIT))
        return np.expm1(np.minimum(np.exp(eta), _LIMIT))


def roll_forward(odds: Sequence[Floats]) -> tuple[Floats, list[Floats]]:
    """Survival at the end of each step, and the probability of leaving by each cause in each step.

    With o_c the odds of cause c against survival of a period, survive = 1/(1 + sum o) and
    cause c = o_c/(1 + sum o) exactly, whatever the link (Begg & Gray 1984 for the logit; for any
    other link by the definition of P(c | c or survive)).
    """
    total = odds[0] + 1.0
    for o in odds[1:]:
        total += o
    stay = np.reciprocal(total, out=total)
    survival: Floats = np.cumprod(stay, axis=1, dtype=np.float64)
    # In place: stay becomes S(h-1)/(1 + sum o), the factor that turns odds into flows.
    stay[:, 1:] *= survival[:, :-1]
    return survival, [o * stay for o in odds]
