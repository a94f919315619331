"""Histories and models for tests of the VAR: drawn from a known one, and the public macro data of statsmodels."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray
from statsmodels.datasets import macrodata

from stresskit.core.period import Frequency, parse_period
from stresskit.core.values import MacroHistory
from stresskit.macro.var import VarModel
from stresskit.macro.var_fit import fit_var
from stresskit.spec.var import Var

QUARTER = Frequency.QUARTER
Floats = NDArray[np.float64]

#: A stable VAR(2) of three variables: what samples are drawn from.
TRUE_C = np.array([0.2, -0.1, 0.3])
TRUE_A = np.array(
    [
        [[0.5, 0.1, 0.0], [-0.2, 0.4, 0.1], [0.0, 0.2, 0.3]],
        [[0.1, 0.0, 0.1], [0.0, 0.1, 0.0], [0.1, -0.1, 0.2]],
    ]
)
TRUE_S = np.array([[1.0, -0.5, 0.2], [-0.5, 0.8, 0.0], [0.2, 0.0, 0.5]])


def draw(
    rng: np.random.Generator, n: int, *, c: Floats = TRUE_C, a: Floats = TRUE_A, s: Floats = TRUE_S
) -> Floats:
    """(n, k) rows of the VAR by its definition, after 200 that are thrown away."""
    p, k = a.shape[0], a.shape[1]
    root = np.linalg.cholesky(s)
    rows = [np.zeros(k)] * p
    for _ in range(n + 200):
        rows.append(c + sum(a[j] @ rows[-1 - j] for j in range(p)) + root @ rng.standard_normal(k))
    return np.array(rows[-n:])


def make_history(values: Mapping[str, Floats], start: str = "1980Q1") -> MacroHistory:
    return MacroHistory(
        QUARTER,
        parse_period(start, QUARTER),
        dict(values),
        dict.fromkeys(values, "level"),
        dict.fromkeys(values, "step"),
    )


def make_var(**keys: Any) -> Var:
    return Var.model_validate(keys)


def fitted(history: MacroHistory, **keys: Any) -> VarModel:
    return fit_var(make_var(**keys), history, end=history.end)


def sample(n: int = 120, seed: int = 7) -> MacroHistory:
    """x in level, and y and w as they come from cumulating the second and the exponential of the third."""
    z = draw(np.random.default_rng(seed), n)
    return make_history({"x": z[:, 0], "y": 10 + np.cumsum(z[:, 1]), "w": np.exp(0.01 * np.cumsum(z[:, 2]))})


MIXED = {"x": "level", "y": "difference", "w": "log_difference"}


def us_history() -> MacroHistory:
    """US quarterly data 1959Q1 to 2009Q3 as shipped with statsmodels (FRED, St. Louis Fed)."""
    d = macrodata.load_pandas().data
    return make_history(
        {"gdp": d["realgdp"].to_numpy(), "u": d["unemp"].to_numpy(), "r": d["tbilrate"].to_numpy()}, "1959Q1"
    )


US = {"gdp": "log_difference", "u": "difference", "r": "difference"}
