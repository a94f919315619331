"""Worlds that several test files look at."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from tests.evidence.world import World, rows_of, simulate


@pytest.fixture(scope="session")
def sound() -> World:
    return simulate(11, loans=1200, level=-5.6)


@pytest.fixture(scope="session")
def sound_rows(sound: World) -> pd.DataFrame:
    return rows_of(sound.risk_set, sound.features)


@pytest.fixture
def rng() -> np.random.Generator:
    return np.random.default_rng(20250)
