"""Responses whose factor no double holds: infinite, without a warning on the way."""

from __future__ import annotations

import dataclasses
from types import SimpleNamespace
from typing import cast

import numpy as np
import pandas as pd
import pytest

from stresskit.core.values import Portfolio
from stresskit.runs.responses import response_table
from tests.evidence.world import World, simulate


@pytest.fixture(scope="module")
def world() -> World:
    return simulate(11, loans=600, level=-5.6)


def test_a_factor_beyond_the_largest_double_is_infinite(world: World) -> None:
    fit = world.fit()
    steep = np.array(fit.coefficients)
    steep[list(fit.design.labels).index("m")] = 900.0
    values = [-2.0, 0.0, 1.5]
    features = pd.DataFrame(
        {"scenario": ["history", "slump", "slump"], "feature": "m", "value": values, "period": ["2019-12", "2020-01", "2020-02"]}
    )  # fmt: skip
    book = cast(Portfolio, SimpleNamespace(count=None))
    plain, tall = (
        response_table({"default": f}, book, features, of_loans=frozenset())
        for f in (fit, dataclasses.replace(fit, coefficients=steep))
    )
    slope = float(fit.params["m"])
    np.testing.assert_allclose(plain["factor"], np.exp(slope * (plain["value"] + 2.0)), rtol=1e-9)
    log = 900.0 * (tall["value"] + 2.0)
    reachable = (log < 709.0) & (log > -700.0)
    np.testing.assert_allclose(tall.loc[reachable, "factor"], np.exp(log[reachable]), rtol=1e-9)
    assert np.isposinf(tall.loc[log > 710.0, "factor"]).all()
    assert (log > 710.0).sum() > 5
