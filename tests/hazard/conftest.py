"""Fixtures of the hazard room's tests; helpers are in hazard_cases.py."""

from __future__ import annotations

import pytest

from stresskit.core.values import FeatureTable, RiskSet
from tests.hazard.hazard_cases import simulated_panel


@pytest.fixture(scope="session")
def panel() -> tuple[RiskSet, FeatureTable]:
    return simulated_panel()
