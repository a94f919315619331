"""The projection as analysts write it: a frame with a row per loan and month, statsmodels predict, groupby cumprod.

Written with care: one merge, no loop over loans, no apply, design matrices built once in numpy.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd
import statsmodels.api as sm

from stresskit.core.values import FeatureTable, Portfolio
from stresskit.hazard.result import HazardFit
from tests.benchmarks.book import LGD, cells_of


def models(fits: Mapping[str, HazardFit]) -> dict[str, sm.GLM]:
    """A statsmodels GLM of each hazard's link; predictions take the coefficients of our fit."""
    out = {}
    for cause, fit in fits.items():
        links = {"cloglog": sm.families.links.CLogLog(), "logit": sm.families.links.Logit()}
        family = sm.families.Binomial(link=links[fit.spec.link])
        out[cause] = sm.GLM(
            np.array([0.0, 1.0] * fit.design.k), np.ones((2 * fit.design.k, fit.design.k)), family=family
        )
    return out


def design(frame: pd.DataFrame, labels: tuple[str, ...], supported: int) -> np.ndarray:
    """(rows, k) in the order of our labels: the last supported age stands for older ones."""
    parts = []
    for label in labels:
        if label == "intercept":
            parts.append(np.ones(len(frame)))
        elif label.startswith("grade["):
            parts.append((frame["grade"] == label[6:-1]).to_numpy(dtype=float))
        elif label in frame:
            parts.append(frame[label].to_numpy())
        else:
            parts.append(np.log(np.minimum(frame["age"].to_numpy(), supported)))
    return np.column_stack(parts)


def project_frame(
    book: Portfolio, fits: Mapping[str, HazardFit], path: FeatureTable, glms: Mapping[str, sm.GLM], steps: int
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """(per loan, per cell and step) of one path."""
    loans = pd.DataFrame(
        {
            "loan": np.arange(book.n_loans), "age0": book.age, "term": book.remaining, "balance0": book.balance,
            "rate": book.rate / book.frequency.per_year, "cell": cells_of(book).codes, **book.static,
        }
    )  # fmt: skip
    loans["lgd"] = loans["grade"].map(LGD)
    months = pd.DataFrame(
        {"step": np.arange(1, steps + 1), "u": path.column("u")[:steps], "g": path.column("g")[:steps]}
    )
    frame = loans.merge(months, how="cross")
    frame["age"] = frame["age0"] + frame["step"]
    odds = {}
    for cause, fit in fits.items():
        x = design(frame, fit.design.labels, fit.supported_age)
        p = glms[cause].predict(fit.coefficients, x)
        odds[cause] = p / (1 - p)
    frame["stay"] = 1 / (1 + odds["default"] + odds["payoff"])
    frame["survival"] = frame.groupby("loan")["stay"].cumprod()
    before = frame["survival"] / frame["stay"]
    frame["default"] = before * frame["stay"] * odds["default"]
    frame["payoff"] = before * frame["stay"] * odds["payoff"]
    left = frame["term"] - frame["step"] + 1
    v = 1 / (1 + frame["rate"])
    owed = frame["balance0"] * (1 - v**left) / (1 - v ** frame["term"])
    frame["owed"] = before * owed
    frame["el"] = frame["default"] * owed * frame["lgd"] * v ** (frame["step"] - 0.5)
    frame["first"] = frame["default"].where(frame["step"] <= book.frequency.per_year, 0.0)
    per_loan = frame.groupby("loan")[["first", "default", "el"]].sum()
    per_cell = frame.groupby(["cell", "step"])[["survival", "default", "payoff", "owed", "el"]].sum()
    return per_loan, per_cell
