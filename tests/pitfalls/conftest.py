"""Books, fits and projections that several tests share."""

from __future__ import annotations

import numpy as np
import pytest

from stresskit.core.values import Portfolio
from stresskit.hazard.result import HazardFit
from stresskit.projection.project import Projection, project
from tests.pitfalls import world


@pytest.fixture(scope="session")
def books() -> list[world.Book]:
    return [world.simulate(np.random.default_rng([77, b]), 12_000) for b in range(world.BATCHES)]


@pytest.fixture(scope="session")
def fits(books: list[world.Book]) -> list[dict[str, HazardFit]]:
    return [world.fit_both(book.risk_set()) for book in books]


@pytest.fixture(scope="session")
def book() -> Portfolio:
    return world.portfolio()


@pytest.fixture(scope="session")
def projections(fits: list[dict[str, HazardFit]], book: Portfolio) -> list[Projection]:
    stress = world.path_features(world.STRESS)
    return [project(book, fit, stress, cap=world.STEPS) for fit in fits]


@pytest.fixture(scope="session")
def truth(book: Portfolio) -> list[list[dict]]:
    """Every loan under stress by the plain loop with the true coefficients."""
    return world.true_steps(book, dict.fromkeys(world.TRUE, world.STRESS))
