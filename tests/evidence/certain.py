"""The sound book with more loans whose hazard an offset moves out of double precision's reach."""

from __future__ import annotations

import dataclasses

import numpy as np

from tests.evidence.world import MONTHS, START, TERMS, World

OFFSET_TERMS = (*TERMS, {"offset": "push"})


def pushed(world: World, push: float, *, loans: int = 40, events: int | None = None, ages: int = 1) -> World:
    """``loans`` more loans with the linear predictor moved by ``push``, each seen from its first month for ``ages`` months.

    events  how many of them default in the last of these; all by default. Static columns ``push`` and ``pushed`` (yes, no) come on top
    """
    r = world.risk_set
    n, rng = r.loan_ids.size, np.random.default_rng(3)
    static = {name: np.concatenate([column, column[:loans]]) for name, column in r.static.items()}
    static["push"] = np.concatenate([np.zeros(n), np.full(loans, push)])
    static["pushed"] = np.repeat(np.array(["no", "yes"], dtype=object), [n, loans])
    defaults = np.arange(loans) < (loans if events is None else events)
    risk_set = dataclasses.replace(
        r,
        loan_ids=np.concatenate([r.loan_ids, np.array([f"P{i:04d}" for i in range(loans)], dtype=object)]),
        static=static,
        stay_loan=np.concatenate([r.stay_loan, n + np.arange(loans)]),
        stay_origin=np.concatenate([r.stay_origin, START - 1 + rng.integers(0, MONTHS - ages, loans)]),
        stay_entry=np.concatenate([r.stay_entry, np.zeros(loans, dtype=np.int64)]),
        stay_exit=np.concatenate([r.stay_exit, np.full(loans, ages)]),
        stay_cause=np.concatenate([r.stay_cause, defaults.astype(np.int64)]),
        weight=np.concatenate([r.weight, np.ones(loans)]),
    )
    return dataclasses.replace(world, risk_set=risk_set)
