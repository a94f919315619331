"""Small books, hazards and paths, drawn at random, that oracle and property tests share."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
from hypothesis import strategies as st

from stresskit.core.period import Frequency
from stresskit.core.values import AFTERWARDS, FeatureTable, Portfolio, RiskSet
from stresskit.hazard.fit import fit_hazard
from stresskit.hazard.result import HazardFit
from stresskit.spec.study import Loss
from stresskit.spec.terms import HazardSpec
from tests.oracle import plain
from tests.oracle.coefficients import predictor

AS_OF = {Frequency.MONTH: 24_311, Frequency.QUARTER: 8_103}
STEPS = 80
CATEGORY = {"loan": "product", "as": "category", "reference": "fixed"}
HAZARDS: dict[str, dict[str, dict[str, Any]]] = {
    "one cause, logit, straight age": {
        "default": {"link": "logit", "terms": [{"age": "linear"}, {"loan": "x", "transform": "standardise"}]},
    },
    "two causes, two links, interactions": {
        "default": {
            "link": "cloglog",
            "terms": [
                {"age": "log"}, {"loan": "x"}, CATEGORY, {"macro": "u"}, {"macro": "h", "transform": "standardise"},
                {"interaction": ["product", "u"]}, {"interaction": ["x", "age"]},
            ],
        },
        "payoff": {"link": "logit", "terms": [{"age": "steps", "bands": [6, 18]}, {"macro": "h"}, {"loan": "w", "transform": "log"}]},
    },
    "three causes, spline, offset": {
        "default": {"link": "cloglog", "terms": [{"age": "spline", "knots": 3}, {"macro": "u"}, {"offset": "push"}]},
        "payoff": {"link": "cloglog", "terms": [{"age": "quadratic"}, {"loan": "x"}, {"interaction": ["age", "product"]}, CATEGORY]},
        "sale": {"link": "logit", "terms": [{"age": "steps", "bands": [12]}], "intercept": False},
    },
}  # fmt: skip


def history(frequency: Frequency) -> tuple[RiskSet, FeatureTable]:
    """A small observed book; only its fits matter here."""
    rng = np.random.default_rng(31)
    n, causes = 900, ("default", "payoff", "sale")
    entry = rng.integers(0, 8, n)
    exit_ = entry + rng.integers(1, 30, n)
    origin = AS_OF[frequency] - 45 + rng.integers(0, 8, n)
    static = {
        "x": rng.normal(size=n), "w": rng.uniform(0.5, 3.0, n), "push": rng.normal(0, 0.3, n),
        "product": rng.choice(np.array(["fixed", "floating", "stepped"], dtype=object), n),
    }  # fmt: skip
    ids = np.array([f"H{i:04d}" for i in range(n)], dtype=object)
    risk_set = RiskSet(
        frequency, causes, ids, static, np.arange(n), origin, entry, exit_, rng.integers(0, 4, n), np.ones(n)
    )
    return risk_set, table(frequency, AS_OF[frequency] - 60, 61, seed=1)


def table(frequency: Frequency, start: int, n: int, *, seed: int, size: float = 1.0) -> FeatureTable:
    rng = np.random.default_rng(seed)
    values = size * np.cumsum(rng.normal(0, 0.3, (n, 2)), axis=0)
    flags = np.zeros((n, 2), dtype=np.int64)
    flags[n // 3 :, 0] = AFTERWARDS
    return FeatureTable(frequency, start, ("u", "h"), values, flags)


@cache
def fitted(name: str, frequency: Frequency) -> dict[str, HazardFit]:
    risk_set, features = history(frequency)
    return {
        cause: fit_hazard(HazardSpec.model_validate(spec, strict=False), risk_set, features, cause=cause)
        for cause, spec in HAZARDS[name].items()
    }


@dataclass(frozen=True)
class Case:
    portfolio: Portfolio
    path: FeatureTable
    loss: Loss
    cap: int | None


@st.composite
def worlds(draw: st.DrawFn, frequency: Frequency) -> Case:
    n = draw(st.integers(1, 6))

    def column(values: st.SearchStrategy[Any]) -> list[Any]:
        return draw(st.lists(values, min_size=n, max_size=n))

    portfolio = Portfolio(
        frequency, AS_OF[frequency], np.array([f"P{i}" for i in range(n)], dtype=object),
        np.array(column(st.one_of(st.integers(0, 40), st.integers(100, 400)))),
        np.array(column(st.one_of(st.integers(1, 3), st.integers(1, STEPS)))),
        np.array(column(st.one_of(st.just(0.0), st.floats(1.0, 1e6)))),
        np.array(column(st.one_of(st.sampled_from([0.0, -0.01, 1e-9]), st.floats(-0.01, 0.3)))),
        {
            "x": np.array(column(st.floats(-3, 3))), "w": np.array(column(st.floats(0.1, 5))),
            "push": np.array(column(st.floats(-2, 2))),
            "product": np.array(column(st.sampled_from(["fixed", "floating", "stepped"])), dtype=object),
        },
    )  # fmt: skip
    lgd = draw(
        st.one_of(
            st.floats(0, 1).map(lambda v: {"constant": round(v, 6)}),
            st.just({"by": "product", "values": {"fixed": 0.2, "floating": 0.45, "stepped": 1.0}}),
        )
    )
    loss = Loss.model_validate(
        {
            "exposure": {
                "schedule": draw(st.sampled_from(["annuity", "linear", "bullet"])),
                "accrued": draw(st.sampled_from([0.0, 1.0, 3.5])),
            },
            "lgd": lgd,
            "discount": draw(st.sampled_from(["rate", "none", 0.0, 0.07, -0.01])),
            "timing": draw(st.sampled_from(["mid", "end"])),
        }
    )
    path = table(
        frequency, AS_OF[frequency] + 1 - draw(st.integers(0, 3)), STEPS + 3,
        seed=draw(st.integers(0, 10_000)), size=draw(st.sampled_from([0.3, 1.0, 4.0])),
    )  # fmt: skip
    return Case(portfolio, path, loss, draw(st.one_of(st.none(), st.integers(1, STEPS))))


def by_plain_loop(case: Case, fits: Mapping[str, HazardFit]) -> list[list[dict[str, Any]]]:
    book, first = case.portfolio, case.portfolio.as_of + 1 - case.path.start
    predictors = {cause: predictor(fit) for cause, fit in fits.items()}
    out = []
    for i in range(book.n_loans):
        columns = {name: values[i] for name, values in book.static.items()}

        def macro(h: int) -> dict[str, float]:
            return dict(zip(case.path.names, case.path.values[first + h - 1], strict=True))

        etas = {
            cause: (lambda age, h, eta=eta, columns=columns, macro=macro: eta(age, columns, macro(h)))
            for cause, eta in predictors.items()
        }
        lgd = case.loss.lgd
        out.append(
            plain.project_loan(
                {"age": int(book.age[i]), "remaining": int(book.remaining[i]), "balance": float(book.balance[i]), "rate": float(book.rate[i])},
                etas, {c: f.spec.link for c, f in fits.items()}, per_year=book.frequency.per_year, cap=case.cap,
                schedule=case.loss.exposure.schedule, accrued=case.loss.exposure.accrued,
                lgd=lgd.constant if hasattr(lgd, "constant") else lgd.values[columns["product"]],
                discount=case.loss.discount, timing=case.loss.timing,
            )
        )  # fmt: skip
    return out
